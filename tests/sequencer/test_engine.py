"""The engine on a simulated bench, over real sockets."""

import math
from collections.abc import Callable, Generator, Iterator
from pathlib import Path
from typing import TypeVar

import numpy as np
import pytest

from pulsetally.drivers.errors import LimitError
from pulsetally.drivers.function_generator import FunctionGenerator, PulseSetting
from pulsetally.drivers.link import VisaLink
from pulsetally.sequencer import engine
from pulsetally.sequencer.analysis.charge import cell_charge
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.events import (
    Event,
    PulseArmed,
    PulseSetUp,
    ReadFinished,
    Role,
    RoundFinished,
    RoundSpoiled,
    RunEnded,
    RunState,
    ShotTaken,
    StopAsked,
    WaitBegan,
)
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import find_recipe, parse_recipe
from pulsetally.sequencer.results import list_runs, run_result, run_shots
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.imperfections import DigitizerImperfections
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, scpi99, simulated

Kind = TypeVar("Kind")


@pytest.fixture(scope="module")
def table() -> Iterator[Simulated]:
    with simulated() as running:
        yield running


@pytest.fixture
def logbook(tmp_path: Path) -> Iterator[Logbook]:
    book = Logbook(tmp_path / "logbook.db")
    yield book
    book.close()


def begin(
    name: str,
    bench: Bench,
    logbook: Logbook,
    overrides: dict[str, str] | None = None,
    stop: StopSwitch | None = None,
) -> Iterator[Event]:
    plan = make_plan(find_recipe(name, overrides), bench)
    recorder = logbook.begin_run(plan, bench, mode="run")
    return engine.run(plan, bench, recorder, stop or StopSwitch())


def of_kind(events: list[Event], kind: type[Kind]) -> list[Kind]:
    return [event for event in events if isinstance(event, kind)]


def test_a_calibration_gives_a_full_count_and_keeps_everything(
    table: Simulated, logbook: Logbook
) -> None:
    before = table.truth("DELivered")
    events = list(begin("full_count", table.bench, logbook, {"rounds": "4"}))
    reads = of_kind(events, ReadFinished)
    assert len(reads) == 4
    assert all(each.reached and each.crossing is not None for each in reads)
    taken = of_kind(events, ShotTaken)
    assert table.truth("DELivered") - before == len(taken) == len(of_kind(events, PulseArmed))

    result = run_result(logbook, 1)
    assert result.summary.state == "finished"
    assert result.summary.shots == len(taken)
    assert result.full_count is not None
    assert result.full_count.rounds == 4
    assert result.full_count.mean == pytest.approx(
        np.mean([each.crossing for each in reads if each.crossing])
    )
    # design value: the default cell fills in about nine pulses.
    assert 8 <= result.full_count.mean <= 10
    assert [each.reads[0].count for each in result.rounds] == [each.count for each in reads]
    for kept, event in zip(run_shots(logbook, 1), taken, strict=True):
        assert np.array_equal(kept.node.codes, event.shot.node.codes)
        assert np.array_equal(kept.source.volts, event.shot.source.volts)
        assert np.array_equal(kept.times, event.shot.times)


def test_nothing_is_fired_before_the_armed_event_has_been_taken(
    table: Simulated, logbook: Logbook
) -> None:
    before = table.truth("DELivered")
    taken = 0
    for event in begin("full_count", table.bench, logbook, {"rounds": "1"}):
        if isinstance(event, PulseArmed):
            with table.client(table.addresses.oscilloscope) as client:
                # Bit 5: the oscilloscope waits for its trigger.
                assert int(client.ask(":STATus:OPERation:CONDition?")) & 32
            assert table.truth("DELivered") - before == taken
        if isinstance(event, ShotTaken):
            taken += 1
            assert table.truth("DELivered") - before == taken
    assert taken > 5


def test_stored_and_remaining_make_up_the_full_count(table: Simulated, logbook: Logbook) -> None:
    reads = of_kind(list(begin("step_and_read", table.bench, logbook)), ReadFinished)
    assert [each.stepped for each in reads] == [0, 2, 4, 6, 8]
    full = reads[0].crossing
    assert full is not None
    for each in reads:
        # A read that passes with its first pulse has no crossing, and lies within that pulse.
        crossing = 0.5 if each.crossing is None else each.crossing
        assert abs(each.stepped + crossing - full) <= 1
    assert [each.stepped for each in run_result(logbook, 1).rounds] == [0, 2, 4, 6, 8]


def test_a_sweep_gives_a_full_count_for_each_width(table: Simulated, logbook: Logbook) -> None:
    list(begin("width_sweep", table.bench, logbook, {"rounds": "2"}))
    found = run_result(logbook, 1).by_setting
    assert [each.settings["up.width"] for each in found] == [80e-6, 100e-6, 125e-6]
    counts = [each.count.mean for each in found]
    # Longer pulses switch more each: fewer of them fill the cell (common practice).
    assert counts == sorted(counts, reverse=True)
    assert counts[0] - counts[2] > 2


def test_a_wait_passes_on_the_bench_and_not_on_the_wall(table: Simulated, logbook: Logbook) -> None:
    recipe = parse_recipe(
        "recipe: wait\npulses:\n  down: {level: -5 V, width: 2 ms}\n"
        "steps:\n  - preset: down\n  - wait: 8 h\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    with table.client(table.addresses.control) as client:
        before = float(client.ask(":CLOCk:TIME?"))
        recorder = logbook.begin_run(plan, table.bench, mode="run")
        ended = list(engine.run(plan, table.bench, recorder, StopSwitch()))[-1]
        assert isinstance(ended, RunEnded)
        assert ended.state is RunState.FINISHED
        passed = float(client.ask(":CLOCk:TIME?")) - before
        # The lines are used now and then meanwhile, which takes time of its own.
        assert 8 * 3600 <= passed < 8 * 3600 + 60


# How a run can end before its time; in each case the output must be off and the rest kept.
def close_it(events: Iterator[Event], stop: StopSwitch) -> None:
    assert isinstance(events, Generator)
    events.close()


def stop_after_round(events: Iterator[Event], stop: StopSwitch) -> None:
    stop.press("Ctrl-C")
    *_, ended = events
    assert isinstance(ended, RunEnded)
    assert ended.state is RunState.STOPPED


def stop_at_once(events: Iterator[Event], stop: StopSwitch) -> None:
    stop.press_hard("the terminal was closed")
    *_, ended = events
    assert isinstance(ended, RunEnded)
    assert ended.reason == "the terminal was closed"


@pytest.mark.parametrize("end", [close_it, stop_after_round, stop_at_once])
def test_however_it_ends_the_output_is_off(
    table: Simulated,
    logbook: Logbook,
    end: Callable[[Iterator[Event], StopSwitch], None],
) -> None:
    stop = StopSwitch()
    events = begin("full_count", table.bench, logbook, {"rounds": "5"}, stop)
    shots = 0
    for event in events:
        shots += isinstance(event, ShotTaken)
        if shots == 4:
            break
    assert table.truth("OUTPut") == 1
    end(events, stop)
    assert table.truth("OUTPut") == 0
    (summary,) = list_runs(logbook)
    assert summary.state == "stopped"
    assert summary.outputs_off
    assert summary.shots >= 4
    assert summary.rounds <= 1


def test_a_failing_consumer_leaves_the_output_off(table: Simulated, logbook: Logbook) -> None:
    def show() -> None:
        for event in begin("full_count", table.bench, logbook):
            if isinstance(event, ShotTaken):
                raise RuntimeError("the view broke")

    with pytest.raises(RuntimeError, match="the view broke"):
        show()
    assert table.truth("OUTPut") == 0


def test_a_round_that_lost_a_pulse_is_spoiled_and_repeated(
    table: Simulated, logbook: Logbook
) -> None:
    events: list[Event] = []
    lost = False
    for event in begin("full_count", table.bench, logbook, {"rounds": "2"}):
        events.append(event)
        if isinstance(event, PulseArmed) and event.order == 3 and not lost:
            lost = True
            # Somebody turns the trigger knob: the pulse goes out and no record is taken.
            with table.client(table.addresses.oscilloscope) as client:
                client.ask(":TRIGger:LEVel 7.9;:TRIGger:LEVel?")
    (spoiled,) = of_kind(events, RoundSpoiled)
    assert spoiled.round == 1
    assert "saw no trigger" in spoiled.reason
    assert [each.round for each in of_kind(events, RoundFinished)] == [1, 2]
    assert [each.state for each in of_kind(events, RunEnded)] == [RunState.FINISHED]
    result = run_result(logbook, 1)
    assert [(each.round, each.spoiled) for each in result.rounds] == [
        (1, True),
        (1, False),
        (2, False),
    ]
    assert result.full_count is not None
    assert result.full_count.rounds == 2


# Closed form: a linear capacitor behind a resistor charges as V (1 - exp(-t / RC)).
def test_waveforms_of_a_linear_capacitor_are_the_rc_charge(logbook: Logbook) -> None:
    linear = CellDescription(remanent_polarization=1e-12)
    # An offset of the digitizer is no part of the closed form.
    true = DigitizerImperfections(offset_shares=(0.0, 0.0))
    with simulated(SimulationSettings(cell=linear, digitizer=true)) as table:
        recipe = {"rounds": "1", "threshold": "3.2 V"}
        events = list(begin("full_count", table.bench, logbook, recipe))
        farads = table.truth("CAPacitance")
    up = [each for each in of_kind(events, ShotTaken) if each.role is Role.READ]
    wiring = table.bench.model.wiring
    ohms = wiring.source_resistance + wiring.series_resistance
    # The probe's resistance shares in the end value and in the time constant.
    share = wiring.probe.resistance / (ohms + wiring.probe.resistance)
    tau = farads * ohms * share
    shot = up[0].shot
    # The trigger is at half of the leading edge, whose ramp is short against tau.
    inside = (shot.times > 1e-6) & (shot.times < 99e-6)
    expected = 4.0 * share * (1 - np.exp(-shot.times[inside] / tau))
    error = shot.node.volts[inside] - expected
    noise = shot.node.scale * 2
    assert abs(float(np.mean(error))) < noise / 4
    assert float(np.std(error)) < noise
    assert float(np.max(np.abs(error))) < 6 * noise


def test_the_charge_of_each_pulse_is_the_charge_the_cell_took(
    table: Simulated, logbook: Logbook
) -> None:
    wiring, cell = table.bench.model.wiring, CellDescription()
    farads, area = cell.farads, cell.area
    polarization = math.nan
    compared = 0
    for event in begin("full_count", table.bench, logbook, {"rounds": "1"}):
        if isinstance(event, PulseArmed):
            polarization = table.truth("POLarization")
        if isinstance(event, ShotTaken) and event.role is Role.READ:
            shot = event.shot
            charge = cell_charge(
                shot.times,
                shot.source.volts,
                shot.node.volts,
                series_ohms=wiring.series_resistance,
                probe_ohms=wiring.probe.resistance,
                probe_farads=wiring.probe.capacitance,
                before=-1e-6,
            )[-1]
            volts = shot.node.volts
            stored = farads * (np.mean(volts[-50:]) - np.mean(volts[:50]))
            stored += area * (table.truth("POLarization") - polarization)
            assert charge == pytest.approx(stored, rel=0.02)
            compared += 1
    assert compared >= 8


def test_a_pulse_beyond_the_limits_is_never_sent(table: Simulated) -> None:
    link = VisaLink(table.addresses.generator)
    try:
        generator = FunctionGenerator(link, scpi99(), limit_volts=6.0)
        generator.prepare()
        with pytest.raises(LimitError, match="it was not sent"):
            generator.set_pulse(
                PulseSetting(base=0.0, level=6.1, width=1e-4, edge=1e-7, period=1e-3)
            )
        assert float(link.ask(":SOURce1:VOLTage:LEVel:IMMediate:HIGH?")) < 6.0
    finally:
        link.close()
    with pytest.raises(PlanError, match="beyond the source limit"):
        make_plan(find_recipe("full_count", {"up.level": "11 V"}), table.bench)


def test_a_read_knows_what_was_in_force_when_a_sweep_stands_inside_a_round(
    table: Simulated, logbook: Logbook
) -> None:
    recipe = parse_recipe(
        "recipe: sweep inside\npulses:\n  down: {level: -5 V, width: 2 ms}\n"
        "  up: {level: 4 V, width: 100 us}\nsteps:\n  - preset: down\n"
        "  - sweep: {up.level: [3.8 V, 4 V]}\n    steps:\n      - {step: up, count: 2}\n"
        "      - {read: up, until: 2.4 V, at most: 40}\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    list(engine.run(plan, table.bench, recorder, StopSwitch()))
    (only,) = run_result(logbook, 1).rounds
    assert [(each.settings["up.level"], each.stepped) for each in only.reads] == [
        (3.8, 2),
        (4.0, 4),
    ]
    assert only.full_read is None


def test_a_stop_asked_while_connecting_fires_nothing(table: Simulated, logbook: Logbook) -> None:
    before = table.truth("DELivered")
    stop = StopSwitch()
    stop.press("Ctrl-C")
    *_, ended = begin("full_count", table.bench, logbook, stop=stop)
    assert isinstance(ended, RunEnded)
    assert (ended.state, ended.outputs_off) == (RunState.STOPPED, True)
    assert table.truth("DELivered") == before


def test_an_output_that_was_left_on_is_switched_off_though_the_oscilloscope_is_missing(
    table: Simulated, logbook: Logbook
) -> None:
    with table.client(table.addresses.generator) as client:
        client.ask(":OUTPut1:STATe ON;:OUTPut1:STATe?")
    assert table.truth("OUTPut") == 1
    bench = table.bench.with_addresses(
        generator=table.addresses.generator,
        oscilloscope="TCPIP::127.0.0.1::1::SOCKET",
        clock=None,
    )
    (ended,) = begin("full_count", bench, logbook)
    assert isinstance(ended, RunEnded)
    assert (ended.state, ended.outputs_off) == (RunState.FAILED, True)
    assert table.truth("OUTPut") == 0


def test_the_rest_is_spent_at_the_base_of_its_own_pulse(table: Simulated, logbook: Logbook) -> None:
    recipe = parse_recipe(
        "recipe: rest\npulses:\n  a: {level: -5 V, width: 2 ms, base: 0.5 V, rest: 10 s}\n"
        "  b: {level: 1 V, width: 100 us}\nsteps:\n  - preset: a\n  - step: b\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    with table.client(table.addresses.control) as client:
        times = []
        for event in engine.run(plan, table.bench, recorder, StopSwitch()):
            if isinstance(event, PulseSetUp | ShotTaken):
                times.append((type(event).__name__, float(client.ask(":CLOCk:TIME?"))))
    names = [name for name, _ in times]
    assert names == ["PulseSetUp", "ShotTaken", "PulseSetUp", "ShotTaken"]
    assert times[2][1] - times[1][1] >= 10


@pytest.mark.parametrize("width", ["1.9 s", "20 s", "2 us"])
def test_long_and_short_pulses_are_recorded(table: Simulated, logbook: Logbook, width: str) -> None:
    recipe = parse_recipe(
        f"recipe: one\npulses:\n  a: {{level: -5 V, width: {width}, rest: 3 h}}\n"
        "steps:\n  - preset: a\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    events = list(engine.run(plan, table.bench, recorder, StopSwitch()))
    assert len(of_kind(events, ShotTaken)) == 1
    assert [each.state for each in of_kind(events, RunEnded)] == [RunState.FINISHED]


def test_a_node_beyond_the_range_is_no_end_voltage(table: Simulated, logbook: Logbook) -> None:
    from pulsetally.sequencer.bench import parse_bench

    # The bench file says that the probe halves the voltage; the table knows better.
    text = table.bench.text.replace("resistance: 10 Mohm", "resistance: 100 kohm")
    bench = parse_bench(text, file="b.yaml")
    events = list(begin("full_count", bench, logbook, {"threshold": "1.2 V", "rounds": "1"}))
    (ended,) = of_kind(events, RunEnded)
    assert ended.state is RunState.FAILED
    assert "leaves the digitizer's range" in ended.reason
    # What was seen is kept all the same.
    assert of_kind(events, ShotTaken)
    assert of_kind(events, ReadFinished) == []


def test_rounds_that_a_full_count_leaves_out_are_counted(
    table: Simulated, logbook: Logbook
) -> None:
    recipe = parse_recipe(
        "recipe: r\nparameters: {most: 20}\npulses:\n  down: {level: -5 V, width: 2 ms}\n"
        "  up: {level: 4 V, width: 100 us}\nsteps:\n  - sweep: {most: [20, 5]}\n    steps:\n"
        "      - preset: down\n      - {read: up, until: 2.5 V, at most: most}\n"
        "  - preset: down\n  - {read: up, until: 1 V, at most: 5}\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    list(engine.run(plan, table.bench, recorder, StopSwitch()))
    result = run_result(logbook, 1)
    assert result.full_count is not None
    assert result.full_count.rounds == 1
    assert (result.left_out.not_reached, result.left_out.first_pulse) == (1, 1)
    assert result.as_object()["left_out"] == {"not_reached": 1, "first_pulse": 1}


def test_a_stop_asked_during_a_long_wait_is_answered_at_once(
    table: Simulated, logbook: Logbook
) -> None:
    recipe = parse_recipe(
        "recipe: wait\npulses:\n  down: {level: -5 V, width: 2 ms}\n"
        "steps:\n  - {repeat: 3, steps: [{preset: down}, {wait: 8 h}]}\n",
        file="r.yaml",
    )
    plan = make_plan(recipe, table.bench)
    stop = StopSwitch()
    seen: list[Event] = []
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    for event in engine.run(plan, table.bench, recorder, stop):
        seen.append(event)
        if isinstance(event, WaitBegan):
            stop.press("Ctrl-C")
        if isinstance(event, StopAsked):
            assert not event.at_once
            stop.press("Ctrl-C")
    assert [type(each).__name__ for each in seen[-4:]] == [
        "WaitBegan",
        "StopAsked",
        "RoundSpoiled",
        "RunEnded",
    ]
    assert table.truth("OUTPut") == 0
