"""Run a recipe's text on a simulated bench, by the real path, for tests of the engine's parts."""

from collections.abc import Iterator
from typing import TypeVar

from pulsetally.sequencer import engine
from pulsetally.sequencer.events import Event, RunEnded
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.person import Person
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.safety import StopSwitch
from tests.simulated import Simulated

Kind = TypeVar("Kind")

PULSES = """recipe: r
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us, rest: 500 us}
  long: {level: 4 V, width: 2 ms}
  probe: {level: 0.2 V, width: 500 us}
steps:
"""


def begin(
    table: Simulated,
    logbook: Logbook,
    steps: str,
    *,
    stop: StopSwitch | None = None,
    person: Person | None = None,
) -> Iterator[Event]:
    """Begin a run of these steps with the pulses above; return its events as they happen."""
    plan = make_plan(parse_recipe(PULSES + steps, file="r.yaml"), table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    return engine.run(plan, table.bench, recorder, stop or StopSwitch(), person)


def of_kind(events: list[Event], kind: type[Kind]) -> list[Kind]:
    """Return the events of one kind."""
    return [event for event in events if isinstance(event, kind)]


def end_of(events: list[Event]) -> RunEnded:
    """Return how a run ended."""
    ended = events[-1]
    assert isinstance(ended, RunEnded)
    return ended
