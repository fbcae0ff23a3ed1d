"""Where a recipe's actions are cut into rounds, the pieces that are kept, lost and repeated."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from pulsetally.sequencer.events import Found, PulseArmed, RoundSpoiled, RunState
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.rehearsal import shipped_bench
from tests.sequencer.running import PULSES, begin, end_of, of_kind
from tests.simulated import Simulated, simulated


@pytest.fixture(scope="module")
def table() -> Iterator[Simulated]:
    with simulated() as running:
        yield running


def planned(steps: str) -> Plan:
    return make_plan(parse_recipe(PULSES + steps, file="r.yaml"), shipped_bench())


STEPS = {
    "preset": "preset: down",
    "step": "step: up",
    "read": "read: up, until: 2.5 V, at most: 60",
    "wait": "wait: 100 s",
    "contact": "contact: probe",
    "ask": "ask: Look at it",
    "pund": "pund: long",
    "loop": "loop: 5 V, period: 10 ms",
}
# Rounds between bars. A wait that holds a state stays in the round of what is held.
CUTS = [
    "pund | pund | pund",
    "loop | loop",
    "pund | loop",
    "preset read | pund | preset read",
    "preset read | contact loop",
    "preset step pund step | pund",
    "contact pund | contact pund",
    "loop | wait loop | wait loop wait",
    "ask pund | ask pund",
    "preset wait loop",
    "preset step wait loop | preset read",
    "preset read wait pund",
    "preset read step wait loop",
    "preset step contact pund read",
    "contact wait pund",
]


@pytest.mark.parametrize("cut", CUTS)
def test_a_measurement_that_needs_nothing_before_it_is_a_round(cut: str) -> None:
    steps = "".join(f"  - {{{STEPS[name]}}}\n" for name in cut.replace("|", "").split())
    found = " | ".join(
        " ".join(type(action).__name__.lower() for action in each.actions)
        for each in planned(steps).rounds
    )
    assert found == cut


def test_only_the_round_of_a_lost_pulse_is_repeated(table: Simulated, tmp_path: Path) -> None:
    logbook = Logbook(tmp_path / "logbook.db")
    events = []
    for event in begin(table, logbook, "  - {repeat: 3, steps: [{pund: long}]}\n"):
        events.append(event)
        third = len(of_kind(events, Found)) == 2 and not of_kind(events, RoundSpoiled)
        if isinstance(event, PulseArmed) and third:
            with table.client(table.addresses.control) as client:
                client.ask(":FAULt:CLEar;:FAULt:ADD TRIG,GENerator,1;:FAULt:PENDing?")
    assert end_of(events).state is RunState.FINISHED
    assert [each.round for each in of_kind(events, RoundSpoiled)] == [3]
    assert [each.round for each in of_kind(events, Found)] == [1, 2, 3]
    logbook.close()


@pytest.mark.parametrize(
    ("begin", "warned"),
    [
        ("preset ask read", False),
        ("ask preset read", False),
        ("contact wait ask pund", False),
        ("ask read", True),
        ("contact step preset", True),
        ("contact", False),
    ],
)
def test_what_is_done_to_the_cell_first_says_whether_its_state_is_known(
    begin: str, warned: bool
) -> None:
    steps = "".join(f"  - {{{STEPS[name]}}}\n" for name in begin.split())
    told = [each for each in planned(steps).warnings if "begins without a preset" in each]
    assert bool(told) is warned
