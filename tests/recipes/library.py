"""Run shipped recipes and recipes of a test on a simulated bench, by the way every run takes."""

from collections.abc import Callable
from pathlib import Path

from pulsetally.sequencer import engine
from pulsetally.sequencer.events import Event
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.person import AlwaysReady
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import Recipe, find_recipe, parse_recipe
from pulsetally.sequencer.results import Finding, RunResult, run_result
from pulsetally.sequencer.safety import StopSwitch
from tests.simulated import Simulated

# Recipes about what use and time do to a cell.
AGEING = ("endurance", "imprint")

PULSES = """recipe: of a test
pulses:
  down:  {level: -5 V, width: 2 ms, rest: 5 ms}
  lower: {level: -5 V, width: 2 ms}
  upper: {level: 5 V, width: 2 ms}
  up:    {level: 4 V, width: 100 us, rest: 1 ms}
steps:
"""


def written(steps: str) -> Recipe:
    """Return a recipe of a test; its pulses are those of the shipped ones."""
    return parse_recipe(PULSES + steps, file="of_a_test.yaml")


def run(
    bench: Simulated,
    folder: Path,
    recipe: str | Recipe,
    overrides: dict[str, str] | None = None,
    *,
    look: Callable[[Event], None] | None = None,
) -> RunResult:
    """Run a recipe to its end and look up what the logbook has of it.

    look: sees every event before the engine goes on.
    """
    found = find_recipe(recipe, overrides) if isinstance(recipe, str) else recipe
    book = Logbook(folder / "logbook.db")
    try:
        plan = make_plan(found, bench.bench)
        recorder = book.begin_run(plan, bench.bench, mode="rehearsal")
        for event in engine.run(plan, bench.bench, recorder, StopSwitch(), AlwaysReady()):
            if look is not None:
                look(event)
        return run_result(book, recorder.run)
    finally:
        book.close()


def findings(result: RunResult, kind: str) -> list[Finding]:
    return [one for each in result.rounds for one in each.findings if one.kind == kind]


def crossings(result: RunResult) -> list[float]:
    """Return the crossing of every read, in order; each must have one."""
    found = [read.crossing for each in result.rounds for read in each.reads]
    told = [each for each in found if each is not None]
    assert len(told) == len(found)
    return told
