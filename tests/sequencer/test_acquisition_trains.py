"""Trains of pulses and cyclings on a simulated bench, over real sockets."""

import json
from collections.abc import Iterator
from dataclasses import replace
from importlib.resources import files
from itertools import pairwise
from pathlib import Path

import pytest
import sqlalchemy as sa

from pulsetally.sequencer import engine
from pulsetally.sequencer import logbook as tables
from pulsetally.sequencer.bench import parse_bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.events import (
    CyclingBegan,
    FindingKind,
    Found,
    PairsSent,
    PulseArmed,
    ReadFinished,
    Role,
    RoundSpoiled,
    RoundsSkipped,
    RunState,
    ShotTaken,
    StopAsked,
    WaitBegan,
)
from pulsetally.sequencer.finding_tables import finding_sentences
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.progress import Progress
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.results import run_result, run_shots
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.imperfections import SourceImperfections
from pulsetally.simulators.simulate import SimulationSettings
from pulsetally.simulators.wear import Fatigue
from tests.sequencer.running import PULSES, begin, end_of, of_kind
from tests.simulated import Simulated, simulated


@pytest.fixture(scope="module")
def table() -> Iterator[Simulated]:
    with simulated() as running:
        yield running


@pytest.fixture
def logbook(tmp_path: Path) -> Iterator[Logbook]:
    book = Logbook(tmp_path / "logbook.db")
    yield book
    book.close()


TRAINS = """  - preset: down
  - {step: up, count: 5, capture: train, train of: 2}
  - {read: up, until: 2.5 V, at most: 60, capture: train, train of: 3}
"""


def test_a_train_is_one_trigger_and_many_pulses(table: Simulated, logbook: Logbook) -> None:
    before = table.truth("DELivered")
    events = list(begin(table, logbook, TRAINS))
    assert end_of(events).state is RunState.FINISHED
    armed = of_kind(events, PulseArmed)
    assert [(each.role, each.count) for each in armed[:4]] == [
        (Role.PRESET, 1),
        (Role.STEP, 2),
        (Role.STEP, 2),
        (Role.STEP, 1),
    ]
    assert all((each.role, each.count) == (Role.READ, 3) for each in armed[4:])
    # Each begins where the one before ended, and all that were meant went out.
    assert armed[0].order == 1
    for one, next_one in pairwise(armed):
        assert next_one.order == one.order + one.count
    sent = sum(each.count for each in armed)
    assert table.truth("DELivered") - before == sent
    shots = of_kind(events, ShotTaken)
    assert [len(each.ends) for each in shots] == [each.count for each in armed]

    (read,) = of_kind(events, ReadFinished)
    assert (read.reached, read.stepped, read.first) == (True, 5, True)
    # The read ends with the first train that passes, and counts up to the pulse that did.
    assert len(read.end_voltages) == 3 * (len(armed) - 4)
    assert len(read.end_voltages) - 3 < read.count <= len(read.end_voltages)
    assert (
        max(read.end_voltages[: read.count - 1], default=0.0)
        < 2.5
        < read.end_voltages[read.count - 1]
    )


def test_the_logbook_has_each_pulse_of_a_train(table: Simulated, logbook: Logbook) -> None:
    events = list(begin(table, logbook, TRAINS))
    armed = [each for each in of_kind(events, PulseArmed) if each.count > 1]
    kept = logbook.select(sa.select(tables.trains).order_by(tables.trains.c.id))
    assert [(row._mapping["count"], row.period_seconds) for row in kept] == [
        (each.count, each.period) for each in armed
    ]
    ends = logbook.select(sa.select(tables.train_ends).order_by(tables.train_ends.c.id))
    taken = [each for each in of_kind(events, ShotTaken) if len(each.ends) > 1]
    assert [(row.place, row.end_volts, row.end_uncertainty, row.end_seconds) for row in ends] == [
        (place, end.volts, end.uncertainty, end.seconds)
        for each in taken
        for place, end in enumerate(each.ends, start=1)
    ]
    (only,) = run_result(logbook, 1).rounds
    assert (only.preset, only.stepped) == (True, 5)
    assert only.reads[0].end_voltages == of_kind(events, ReadFinished)[0].end_voltages
    # One record each, however many pulses lie in it.
    assert len(list(run_shots(logbook, 1))) == len(of_kind(events, ShotTaken))


def test_a_read_of_trains_sends_no_more_than_its_most(table: Simulated, logbook: Logbook) -> None:
    before = table.truth("DELivered")
    steps = TRAINS.replace("at most: 60", "at most: 4").replace("2.5 V", "3.5 V")
    events = list(begin(table, logbook, steps))
    (read,) = of_kind(events, ReadFinished)
    counts = [each.count for each in of_kind(events, PulseArmed) if each.role is Role.READ]
    assert counts == [3, 1]
    assert (read.reached, read.count, read.crossing) == (False, 4, None)
    assert table.truth("DELivered") - before == 1 + 5 + 4


def test_a_train_counts_what_single_pulses_count(table: Simulated, logbook: Logbook) -> None:
    each = "  - preset: down\n  - {read: up, until: 2.5 V, at most: 60}\n"
    train = each.replace("60}", "60, capture: train, train of: 7}")
    counts = [
        of_kind(list(begin(table, logbook, steps)), ReadFinished)[0].crossing
        for steps in (each, train)
    ]
    assert None not in counts
    # The same cell and the same pulses; what remains of a pulse after its rest of 7 time
    # constants of 220 kohm and 300 pF is below 1 per mille (closed form).
    assert counts[0] == pytest.approx(counts[1], abs=0.5)


# Cyclings.

CYCLE = """  - cycle: {down: down, up: long}
    pairs: 200
    pause at: [10, 100]
"""


def test_a_cycling_sends_exactly_the_pairs_between_its_pauses(
    table: Simulated, logbook: Logbook
) -> None:
    before = table.truth("DELivered")
    pauses = 0
    steps = (
        CYCLE.replace("200", "20").replace("10, 100", "3, 10")
        + "    steps:\n      - {read: up, until: 2.5 V, at most: 1}\n"
    )
    events = []
    for event in begin(table, logbook, steps):
        events.append(event)
        if isinstance(event, PairsSent):
            # One pulse a pause has gone out beside the pairs.
            assert table.truth("DELivered") - before == event.done + pauses
        pauses += isinstance(event, ReadFinished)
    assert end_of(events).state is RunState.FINISHED
    assert [each.done for each in of_kind(events, PairsSent)] == [3, 10, 20]
    assert [(each.done, each.pairs) for each in of_kind(events, CyclingBegan)] == [
        (0, 3),
        (3, 7),
        (10, 10),
    ]
    # In time with what was planned: a pair lasts 4 ms.
    assert [each.seconds for each in of_kind(events, CyclingBegan)] == pytest.approx(
        [0.012, 0.028, 0.04]
    )
    assert [each.settings["cycles"] for each in of_kind(events, ReadFinished)] == [0, 3, 10, 20]
    (found,) = of_kind(events, Found)
    assert found.kind is FindingKind.CYCLING
    assert found.values == {
        "pairs": 20.0,
        "planned_pairs": 20.0,
        "ended": "all pairs were sent",
    }
    (kept,) = logbook.select(sa.select(tables.findings.c.found))
    assert json.loads(kept[0]) == found.values
    sent = logbook.select(
        sa.select(tables.trains.c["count"])
        .join(tables.pulses, tables.trains.c.pulse == tables.pulses.c.id)
        .where(tables.pulses.c.role == "cycle")
        .order_by(tables.trains.c.id)
    )
    assert [row[0] for row in sent] == [3, 7, 10]


STOPS = [
    ("switched charge below: 50 %", "      - pund: long\n", "36% of the first"),
    # An invented condition that any second measurement fails.
    (
        "full count off by: 1e-9 %",
        "      - preset: down\n      - {read: up, until: 2.5 V, at most: 60}\n",
        " at first",
    ),
]


@pytest.mark.parametrize(("condition", "steps", "reason"), STOPS)
def test_a_stop_condition_ends_the_cycling_and_not_the_run(
    logbook: Logbook, condition: str, steps: str, reason: str
) -> None:
    recipe = CYCLE + f"    stop when: {{{condition}}}\n    steps:\n{steps}  - preset: down\n"
    # Closed form: exp(-N/100) is left of the charge; 89 % after 10 pairs and 36 % after 100, with
    # one cycle of each measurement itself.
    fatigue = Fatigue(scale_cycles=100.0, exponent=1.0)
    with simulated(SimulationSettings(cell=CellDescription(fatigue=fatigue))) as worn:
        events = list(begin(worn, logbook, recipe))
    assert end_of(events).state is RunState.FINISHED
    (found,) = [each for each in of_kind(events, Found) if each.kind is FindingKind.CYCLING]
    (skipped,) = of_kind(events, RoundsSkipped)
    assert found.values["ended"] == skipped.reason
    assert skipped.reason.endswith(reason)
    assert found.values["pairs"] == (100.0 if "charge" in condition else 10.0)
    # The step after the cycling is still done.
    assert of_kind(events, PulseArmed)[-1].role is Role.PRESET
    summary = run_result(logbook, 1).summary
    assert summary.skipped == skipped.count > 0
    assert summary.rounds + summary.skipped == summary.planned_rounds


@pytest.mark.parametrize("asked", [True, False])
def test_a_cell_that_opens_ends_the_cycling_or_the_run(logbook: Logbook, asked: bool) -> None:
    stop_when = "    stop when: {contact is lost: yes}\n" if asked else ""
    recipe = CYCLE + stop_when + "    steps:\n      - contact: probe\n  - preset: down\n"
    events = []
    with simulated() as table:
        for event in begin(table, logbook, recipe):
            events.append(event)
            if isinstance(event, PairsSent) and event.done == 10:
                with table.client(table.addresses.control) as client:
                    client.ask(":FAULt:ADD OPEN,GENerator,1;:FAULt:PENDing?")
        assert table.truth("OUTPut") == 0
    ended = end_of(events)
    assert [each.done for each in of_kind(events, PairsSent)] == [10]
    (spoiled,) = of_kind(events, RoundSpoiled)
    assert "the cell looks open" in spoiled.reason
    if asked:
        assert ended.state is RunState.FINISHED
        (skipped,) = of_kind(events, RoundsSkipped)
        assert "the cell looks open" in skipped.reason
        assert of_kind(events, PulseArmed)[-1].role is Role.PRESET
    else:
        assert ended.state is RunState.FAILED
        assert of_kind(events, RoundsSkipped) == []


def test_a_cycling_that_is_stopped_at_a_pause_says_how_far_it_came(
    table: Simulated, logbook: Logbook
) -> None:
    stop = StopSwitch()
    events = []
    for event in begin(table, logbook, CYCLE, stop=stop):
        events.append(event)
        if isinstance(event, PairsSent):
            stop.press("Ctrl-C")
    assert end_of(events).state is RunState.STOPPED
    (found,) = of_kind(events, Found)
    assert (found.values["pairs"], found.values["ended"]) == (10.0, "the run was stopped")


def test_a_read_after_a_switched_charge_is_no_full_count(
    table: Simulated, logbook: Logbook
) -> None:
    read = "  - {read: up, until: 2.5 V, at most: 30}\n"
    # The short pulse's mirror image leaves part of what the pulse has switched.
    steps = "  - preset: down\n  - pund: up\n" + read + "  - preset: down\n" + read
    events = []
    progress = Progress(rounds=2, seconds=None)
    for event in begin(table, logbook, steps):
        events.append(event)
        progress.take(event)
    after, full = of_kind(events, ReadFinished)
    assert after.crossing is not None
    assert full.crossing is not None
    assert after.crossing < full.crossing - 0.2
    counted = run_result(logbook, 1).full_count
    assert counted is not None
    assert (counted.rounds, counted.mean) == (1, full.crossing)
    assert progress.crossings == [full.crossing]


HOUR = "  - cycle: {down: down, up: long}\n    pairs: 900000\n"


@pytest.mark.parametrize("family", ["scpi99", "perdiv", "stateword"])
def test_a_second_stop_in_the_middle_of_a_burst_aborts_it_and_says_how_many(
    logbook: Logbook, family: str
) -> None:
    with simulated(SimulationSettings(family=family)) as table:
        aborted_burst(table, logbook)


def aborted_burst(table: Simulated, logbook: Logbook) -> None:
    before = table.truth("DELivered")
    stop = StopSwitch()
    events = []
    for event in begin(table, logbook, HOUR, stop=stop):
        events.append(event)
        if isinstance(event, CyclingBegan):
            stop.press("Ctrl-C")
        if isinstance(event, StopAsked):
            # The burst goes on meanwhile: half a minute of its hour.
            with table.client(table.addresses.control) as client:
                client.ask(":CLOCk:ADVance 30;:CLOCk:TIME?")
            stop.press("Ctrl-C")
    sent = table.truth("DELivered") - before
    ended = end_of(events)
    assert (ended.state, ended.outputs_off) == (RunState.STOPPED, True)
    assert table.truth("OUTPut") == 0
    # Nothing more goes out afterwards.
    with table.client(table.addresses.control) as client:
        client.ask(":CLOCk:ADVance 30;:CLOCk:TIME?")
    assert table.truth("DELivered") - before == sent
    (spoiled,) = of_kind(events, RoundSpoiled)
    assert spoiled.reason == ended.reason
    words = ended.reason.removeprefix("Ctrl-C; from 0 to ").partition(" pairs may have gone out")
    most = int(words[0].replace(",", ""))
    # 4 ms a pair; the exchanges take some milliseconds too.
    assert 7_500 <= sent <= most <= 7_600
    assert [row.spoiled for row in logbook.select(sa.select(tables.round_ends))] == [True]
    (found,) = of_kind(events, Found)
    assert found.values == {
        "pairs": 0.0,
        "most_pairs": float(most),
        "planned_pairs": 900_000.0,
        "ended": "the run was stopped",
    }
    assert f"after 0 to {most:,} of 900,000 pairs" in finding_sentences(run_result(logbook, 1))[0]


def own_dialect(table: Simulated, folder: Path, *changes: tuple[str, str]) -> Simulated:
    """Return a simulated bench whose first dialect is changed, as a file beside its bench file."""
    text = (files("pulsetally.drivers") / "scpi99.yaml").read_text(encoding="utf-8")
    for before, after in (("dialect: scpi99", "dialect: mine"), *changes):
        assert before in text
        text = text.replace(before, after)
    (folder / "mine.yaml").write_text(text, encoding="utf-8")
    bench = table.bench.text.replace("dialect: scpi99", "dialect: mine.yaml")
    return replace(table, bench=parse_bench(bench, file="b.yaml", folder=folder))


SHORT_BURSTS = "most pulses a trigger: 1e12", "most pulses a trigger: 300"


def test_a_cycling_that_is_stopped_between_two_bursts_says_how_many_pairs_went_out(
    table: Simulated, logbook: Logbook, tmp_path: Path
) -> None:
    stop = StopSwitch()
    events = []
    steps = "  - cycle: {down: down, up: long}\n    pairs: 1000\n"
    before = table.truth("DELivered")
    for event in begin(own_dialect(table, tmp_path, SHORT_BURSTS), logbook, steps, stop=stop):
        events.append(event)
        if isinstance(event, PairsSent):
            stop.press("Ctrl-C")
    assert table.truth("DELivered") - before == 300
    (found,) = of_kind(events, Found)
    assert found.values == {
        "pairs": 300.0,
        "planned_pairs": 1000.0,
        "ended": "the run was stopped",
    }


@pytest.mark.parametrize("family", ["scpi99", "perdiv", "stateword"])
def test_a_cycling_whose_trigger_is_ignored_is_not_taken_for_one_that_was_sent(
    logbook: Logbook, family: str
) -> None:
    events = []
    with simulated(SimulationSettings(family=family)) as table:
        # A burst of 40 ms would be over before anybody looks.
        for event in begin(table, logbook, CYCLE.replace("10, 100", "100")):
            events.append(event)
            if isinstance(event, PulseArmed):
                with table.client(table.addresses.control) as client:
                    client.ask(":FAULt:ADD TRIG,GENerator,1;:FAULt:PENDing?")
        assert table.truth("DELivered") == 0
    ended = end_of(events)
    assert (ended.state, of_kind(events, PairsSent)) == (RunState.FAILED, [])
    assert "did not start when it was triggered" in ended.reason
    (found,) = of_kind(events, Found)
    assert found.values["pairs"] == 0
    assert ended.reason.rstrip(".") in str(found.values["ended"])


def test_a_generator_that_can_not_tell_when_it_is_done_is_given_time_for_its_last_pairs(
    logbook: Logbook, tmp_path: Path
) -> None:
    ask = '{ask: ":STATus:OPERation:CONDition?", '
    idle = f"  idle: {ask}none of bits: 40}}\n  sending: {ask}all of bits: 8}}\n"
    late = SourceImperfections(trigger_delay_seconds=20e-3)
    with simulated(SimulationSettings(source=late)) as table:
        mine = own_dialect(table, tmp_path, SHORT_BURSTS, (idle, ""))
        events = list(begin(mine, logbook, "  - cycle: {down: down, up: long}\n    pairs: 700\n"))
        # A burst that the next one's set-up cuts off loses its last pairs.
        assert table.truth("DELivered") == 700
    assert [each.done for each in of_kind(events, PairsSent)] == [300, 600, 700]


WAITS_AFTER_SWINGS = [
    "  - {loop: 5 V, period: 10 ms}\n  - wait: 100 s\n",
    "  - cycle: {down: down, up: long}\n    pairs: 5\n  - wait: 100 s\n",
]


@pytest.mark.parametrize("steps", WAITS_AFTER_SWINGS)
def test_a_wait_after_a_swing_does_not_hold_the_cell_at_its_lower_end(
    table: Simulated, logbook: Logbook, steps: str
) -> None:
    outputs = []
    for event in begin(table, logbook, steps):
        if isinstance(event, WaitBegan):
            outputs.append(table.truth("OUTPut"))
    assert outputs == [0]


def test_a_wait_at_a_base_that_was_asked_for_keeps_it(table: Simulated, logbook: Logbook) -> None:
    recipe = PULSES.replace("up: {level: 4 V", "up: {base: 0.5 V, level: 4 V")
    plan = make_plan(
        parse_recipe(recipe + "  - step: up\n  - wait: 10 s\n", file="r.yaml"), table.bench
    )
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    for event in engine.run(plan, table.bench, recorder, StopSwitch()):
        if isinstance(event, WaitBegan):
            assert table.truth("TERMinal") == pytest.approx(0.5, abs=0.01)


def test_a_stop_before_a_burst_fires_nothing(table: Simulated, logbook: Logbook) -> None:
    before = table.truth("DELivered")
    stop = StopSwitch()
    events = []
    for event in begin(table, logbook, HOUR, stop=stop):
        events.append(event)
        if isinstance(event, PulseArmed):
            stop.press_hard("the terminal was closed")
    assert end_of(events).reason == "the terminal was closed; 0 pairs have gone out"
    assert table.truth("DELivered") == before
    assert table.truth("OUTPut") == 0


def test_cyclings_of_the_same_pulse_have_each_their_own_period(
    table: Simulated, logbook: Logbook
) -> None:
    recipe = (
        "  - sweep: {down.width: [2 ms, 8 ms]}\n    steps:\n"
        "      - cycle: {down: down, up: long}\n        pairs: 5\n"
    )
    lasted = []
    with table.client(table.addresses.control) as client:
        for event in begin(table, logbook, recipe):
            now = float(client.ask(":CLOCk:TIME?"))
            if isinstance(event, PulseArmed):
                began = now
            if isinstance(event, PairsSent):
                lasted.append(now - began)
    sets = logbook.select(sa.select(tables.setups.c.settings).order_by(tables.setups.c.id))
    periods = [json.loads(row[0])["generator period"] for row in sets]
    assert periods == pytest.approx([4e-3, 10e-3])
    assert lasted == pytest.approx([0.02, 0.05], abs=0.02)


def test_a_plan_counts_no_more_pulses_than_a_read_of_trains_sends(table: Simulated) -> None:
    recipe = parse_recipe(PULSES + TRAINS.replace("at most: 60", "at most: 4"), file="r.yaml")
    assert make_plan(recipe, table.bench).most_pulses == 1 + 5 + 4


@pytest.mark.parametrize("edges", ["down.edge=1 ms", "up.edge=1 ms", "down.width=50 ns"])
def test_a_pair_that_has_no_flat_tops_is_refused_before_power(table: Simulated, edges: str) -> None:
    name, _, value = edges.partition("=")
    steps = "  - preset: long\n  - cycle: {down: down, up: up}\n    pairs: 5\n"
    # Each pulse alone has its flat top; the generator has one edge for both.
    text = PULSES.replace("down: {level: -5 V, width: 2 ms", "down: {level: -5 V, width: 4 ms")
    text = text.replace("up: {level: 4 V, width: 100 us", "up: {level: 4 V, width: 200 us")
    recipe = parse_recipe(text + steps, file="r.yaml", overrides={name: value})
    with pytest.raises(PlanError, match="flat top"):
        make_plan(recipe, table.bench)
