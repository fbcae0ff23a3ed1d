"""The step 'contact' on the simulated bench: good, open and short, and it disturbs nothing."""

from pathlib import Path

import pytest

from pulsetally.sequencer import engine
from pulsetally.sequencer.events import ContactChecked, Event, RunEnded, RunState, ShotTaken
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.results import run_result
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, simulated

RECIPE = """\
recipe: contact
pulses:
  touch: {level: 0.2 V, width: 500 us, rest: 5 ms}
  down: {level: -5 V, width: 2 ms, rest: 5 ms}
  up: {level: 4 V, width: 100 us}
steps:
  - contact: touch
  - preset: down
  - contact: touch
  - {read: up, until: 2.5 V, at most: 20}
"""


def plan_on(table: Simulated) -> Plan:
    return make_plan(parse_recipe(RECIPE, file="r.yaml"), table.bench)


def run_on(table: Simulated, folder: Path) -> tuple[list[Event], RunEnded]:
    book = Logbook(folder / "logbook.db")
    plan = plan_on(table)
    recorder = book.begin_run(plan, table.bench, mode="run")
    *events, ended = engine.run(plan, table.bench, recorder, StopSwitch())
    book.close()
    assert isinstance(ended, RunEnded)
    assert ended.outputs_off
    return events, ended


def test_a_good_cell_has_the_time_constant_of_wiring_and_cell(tmp_path: Path) -> None:
    with simulated() as table:
        events, ended = run_on(table, tmp_path)
    assert ended.state is RunState.FINISHED
    checked = [each.result for each in events if isinstance(each, ContactChecked)]
    assert [each.verdict for each in checked] == ["good", "good"]
    for each in checked:
        # Closed form: C (R_source + R_series) beside the probe's resistance.
        assert each.expected_tau == pytest.approx(
            (8.8541878128e-12 * 500 * 1e-8 / 150e-9 + 12e-12) * 220_050 * 1e7 / 10_220_050
        )
        assert each.tau == pytest.approx(each.expected_tau, rel=0.03)
    (only,) = run_result(Logbook(tmp_path / "logbook.db"), 1).rounds
    # The contact before the preset belongs to its round, and the round can be repeated.
    assert [each["verdict"] for each in only.contacts] == ["good", "good"]
    assert only.full_read is not None


@pytest.mark.parametrize(
    ("verdict", "cell"),
    [
        ("open", CellDescription(area=1e-14)),
        ("short", CellDescription(leak_ohms=10.0)),
    ],
)
def test_no_cell_and_a_short_end_the_run_before_anything_else_is_fired(
    tmp_path: Path, verdict: str, cell: CellDescription
) -> None:
    with simulated(SimulationSettings(cell=cell)) as table:
        events, ended = run_on(table, tmp_path)
        assert table.truth("DELivered") == 1
    assert ended.state is RunState.FAILED
    assert f"the cell looks {verdict}" in ended.reason
    assert "look at probes, socket and cell" in ended.reason
    assert sum(isinstance(each, ShotTaken) for each in events) == 1


def test_contact_disturbs_a_preset_cell_by_less_than_a_thousandth() -> None:
    recipe = (
        "recipe: disturb\npulses:\n  touch: {level: 0.2 V, width: 500 us}\n"
        "  down: {level: -5 V, width: 2 ms}\nsteps:\n  - preset: down\n"
        "  - contact: touch\n  - contact: touch\n  - contact: touch\n"
    )
    with simulated() as table:
        plan = make_plan(parse_recipe(recipe, file="r.yaml"), table.bench)
        seen = []
        recorder = Logbook(Path(":memory:")).begin_run(plan, table.bench, mode="run")
        for event in engine.run(plan, table.bench, recorder, StopSwitch()):
            if isinstance(event, ShotTaken):
                seen.append(table.truth("POLarization"))
    assert len(seen) == 4
    assert abs(seen[-1] - seen[0]) < 1e-3 * 0.25


def test_a_contact_pulse_that_may_switch_something_is_mentioned() -> None:
    with simulated() as table:
        recipe = parse_recipe(RECIPE.replace("level: 0.2 V", "level: 2 V"), file="r.yaml")
        assert any(
            "may switch something" in each for each in make_plan(recipe, table.bench).warnings
        )
        assert plan_on(table).warnings == ()
        assert len(plan_on(table).rounds) == 1
        assert plan_on(table).rounds[0].repeatable
