"""Bursts of very many pulses: as one by one, to the exact pulse, and in no time."""

import math
import time
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators import table as table_module
from pulsetally.simulators.cell import Cell, CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.repetition import Period
from pulsetally.simulators.simulate import Bench, SimulationSettings
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import Breakdown, Fatigue, ImprintGrowth, Incubation, Retention
from tests.simulators.table_pulses import connected
from tests.simulators.talking import LINEAR, Line

Floats = NDArray[np.float64]
FAST = Wiring(series_ohms=10e3)


def train(base: float, level: float, count: int, *, seconds: float = 100e-6) -> PulseTrain:
    return PulseTrain(
        base_volts=base,
        level_volts=level,
        width_seconds=seconds,
        leading_seconds=1e-6,
        trailing_seconds=1e-6,
        period_seconds=2 * seconds,
        count=count,
    )


class Stretches:
    """Counts what a table shows; it may want all of it."""

    def __init__(self, table: Table, *, in_detail: bool) -> None:
        self.count = 0
        table.observe(self, needs_detail=lambda: in_detail)

    def saw(self, times: Floats, terminal_volts: Floats, node_volts: Floats) -> None:
        assert times.shape == terminal_volts.shape == node_volts.shape
        assert times[-1] > times[0]
        self.count += 1


def both_ways(
    options: dict[str, Any], base: float, level: float, count: int
) -> tuple[Table, Table, float]:
    """Play a train at once and one by one; return both tables and the share of the work."""
    cell = CellDescription(**({"regions": 8} | options))
    tables, counts = [], []
    for in_detail in (False, True):
        table = connected(cell, FAST)
        counts.append(Stretches(table, in_detail=in_detail))
        table.play(train(base, level, count))
        table.advance(2e-4 * count)
        tables.append(table)
    return tables[0], tables[1], counts[0].count / counts[1].count


# Options, base and level, pulses, and by how much the up part and the cycles may differ. One
# by one is the reference: the table that test_table.py checks against scipy.
WEAR = Fatigue(scale_cycles=400.0)
CASES: dict[str, tuple[dict[str, Any], float, float, int, float, float]] = {
    "pairs, fully switched, with wear": ({"fatigue": WEAR}, -8.0, 8.0, 130, 1e-6, 1e-5),
    "pairs, partly switched": ({}, -4.0, 2.6, 130, 1e-4, 1e-4),
    "pairs, partly switched, with wear": ({"fatigue": WEAR}, -4.0, 2.6, 130, 1e-3, 1.5e-2),
    "up pulses that saturate": ({}, 0.0, 4.0, 150, 1e-6, 1e-6),
    "up pulses that go on for long": ({}, 0.0, 2.0, 150, 5e-4, 1e-3),
    "disturb pulses": ({}, 0.0, 1.0, 150, 1e-5, 1e-4),
    "disturb pulses below, in the other direction": ({}, 0.0, -1.0, 150, 1e-9, 1e-6),
    "disturb pulses, longer than incubation": (
        {"incubation": Incubation(seconds=50e-6)},
        0.0,
        1.0,
        150,
        5e-5,
        5e-4,
    ),
    "disturb pulses, shorter than incubation": (
        {"incubation": Incubation(seconds=150e-6)},
        0.0,
        1.2,
        150,
        0.0,
        0.0,
    ),
    "disturb pulses, incubation over before the next one": (
        {"incubation": Incubation(seconds=3e-3)},
        0.9,
        1.4,
        110,
        5e-4,
        1e-3,
    ),
    "disturb pulses, incubation over in the last ones": (
        {"incubation": Incubation(seconds=21e-3)},
        0.9,
        1.4,
        110,
        1e-4,
        1e-3,
    ),
    "loss between disturb pulses": (
        {"retention": Retention(loss_per_decade=1e-3, onset_seconds=1e-5, side=-1)},
        0.0,
        1.0,
        150,
        1e-3,
        1e-2,
    ),
    "a leak": ({"leak_ohms": 1e5}, 0.0, 2.0, 150, 5e-4, 1e-3),
    "imprint and retention": (
        {
            "imprint_growth": ImprintGrowth(volts_per_decade=0.05, onset_seconds=1e-2),
            "retention": Retention(law="stretched", onset_seconds=1.0),
        },
        -4.0,
        2.6,
        250,
        1e-3,
        1e-2,
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_a_long_train_at_once_is_as_good_as_one_by_one(name: str) -> None:
    options, base, level, count, up_within, cycles_within = CASES[name]
    at_once, singly, work = both_ways(options, base, level, count)
    assert work < 0.95
    assert at_once.delivered == singly.delivered == count
    assert at_once.presets == singly.presets
    assert at_once.now == singly.now
    assert at_once.up_fraction == pytest.approx(singly.up_fraction, abs=up_within)
    assert at_once.cycles == pytest.approx(singly.cycles, rel=cycles_within)
    assert at_once.remanent_polarization == pytest.approx(singly.remanent_polarization, rel=3e-3)
    assert at_once.imprint_volts == pytest.approx(singly.imprint_volts, abs=2e-3)
    assert at_once.node_volts == pytest.approx(singly.node_volts, abs=1e-3)


# Far below coercive, one region: u = 1 - exp(-n w/tau) with Merz's law, where a pulse lasts w
# between its half heights; n w/tau is 3.9e-3 after so many pulses (closed form).
def test_disturb_pulses_too_small_for_one_step_add_up() -> None:
    cell = CellDescription(
        regions=1, activation_spread=0.0, activation_volts=15.0, remanent_polarization=1e-6
    )
    wiring = Wiring(series_ohms=100.0, probe_ohms=math.inf, probe_farads=0.0)
    table = connected(cell, wiring)
    volts, count = 0.375, 10**10
    rate = math.exp(-15.0 / volts) / 2e-9
    # Less than what the solver takes for nothing in each of them.
    assert rate * 100e-6 < 1e-12
    table.play(train(0.0, volts, count))
    table.advance(2e-4 * count)
    assert table.delivered == count
    # The edges of 1.25 us switch next to nothing, and the flat top is 98.75 us long.
    assert table.up_fraction == pytest.approx(-math.expm1(-rate * 98.75e-6 * count), rel=0.03)


def test_disturb_pulses_shorter_than_incubation_never_add_up() -> None:
    cell = CellDescription(regions=8, incubation=Incubation(seconds=150e-6))
    table = connected(cell, FAST)
    table.play(train(0.0, 1.5, 10**10))
    table.advance(2e-4 * 10**10)
    assert table.delivered == 10**10
    assert table.up_fraction == 0.0
    assert table.cycles == 0.0


# A: exp(-(1e8/1e10)^0.3), the cell being switched wholly by each pulse.
def test_a_hundred_million_pairs_take_no_time() -> None:
    table = connected(CellDescription(fatigue=Fatigue(scale_cycles=1e10)), FAST)
    table.play(train(-8.0, 8.0, 10**8))
    began = time.process_time()
    table.advance(2e4)
    assert time.process_time() - began < 1.0
    assert table.delivered == 10**8
    assert table.cycles == pytest.approx(1e8, rel=1e-5)
    expected = 0.25 * math.exp(-(0.01**0.3))
    assert table.remanent_polarization == pytest.approx(expected, rel=1e-5)


def test_a_cell_breaks_down_within_a_burst() -> None:
    breakdown = Breakdown(scale_cycles=1e6, shape=3.0)
    table = connected(CellDescription(breakdown=breakdown, regions=8), FAST, seed=4)
    table.play(train(-8.0, 8.0, 10**8))
    table.advance(2e4)
    assert table.broken
    assert table.delivered == 10**8
    assert table.breakdown_cycles <= table.cycles < table.breakdown_cycles + 2


def test_an_open_relay_delivers_nothing_of_a_long_burst() -> None:
    table = Table(CellDescription(regions=8), FAST)
    table.play(train(-8.0, 8.0, 10**8))
    table.advance(2e4)
    assert table.delivered == 0
    assert table.cycles == 0


def test_a_long_burst_may_be_cut_and_looked_at_anywhere() -> None:
    whole, cut = (connected(CellDescription(regions=4), FAST) for _ in range(2))
    for table in (whole, cut):
        table.play(train(-8.0, 8.0, 5000))
    whole.advance(1.0)
    for seconds in np.diff([0.0, 0.0023456, 0.43210987, 1.0]).tolist():
        cut.advance(seconds)
        ended = math.floor((cut.now - 101.25e-6) / 2e-4 + 1e-9) + 1
        assert cut.delivered == ended
    assert cut.delivered == whole.delivered == 5000
    assert cut.cycles == pytest.approx(whole.cycles, rel=1e-5)


# Region by region: u' = kept u + added, many times over.
def test_many_periods_are_the_period_many_times() -> None:
    random = np.random.default_rng(2)
    cell = Cell(CellDescription(regions=5), seed=1)
    cell.up = random.uniform(size=5)
    kept, side = random.uniform(0.9, 1.0, (3, 5)), (1, -1, 1)

    def pass_one(up: Floats) -> tuple[Floats, float]:
        cycles = 0.0
        for keep, way in zip(kept, side, strict=True):
            after = 1 - (1 - up) * keep if way > 0 else up * keep
            cycles += abs(float(cell.weights @ (after - up))) / 2
            up = after
        return up, cycles

    period, up = Period(cell, repeats=100), cell.up
    for keep, way in zip(kept, side, strict=True):
        cell.up = 1 - (1 - cell.up) * keep if way > 0 else cell.up * keep
        period.add(np.array([0.0, 1.0]), np.zeros(2))
    up, _ = pass_one(up)
    total = 0.0
    for repeats in range(1, 40):
        up, cycles = pass_one(up)
        total += cycles
        assert np.allclose(period.after(repeats), up, atol=1e-14)
        assert period.mean_use(repeats)[0] == pytest.approx(total / repeats, rel=1e-12)


RESTING = {
    "log time": Retention(onset_seconds=1e-3, loss_per_decade=0.1, side=-1),
    "stretched": Retention(law="stretched", onset_seconds=1.0, side=-1),
}


# A: pulses that stay at rest do nothing to the law of the loss. A cell wholly down, at rest
# from 0 s on, has the mean of 1 and what the law keeps left of it.
@pytest.mark.parametrize("law", RESTING)
@pytest.mark.parametrize("count", [150, 10**6, 10**10])
def test_a_rest_goes_on_through_pulses_below_rest_voltage(law: str, count: int) -> None:
    retention = RESTING[law]
    table = connected(CellDescription(regions=8, retention=retention), FAST)
    table.play(train(0.0, 0.3, count))
    table.advance(2e-4 * count)
    expected = (1 - retention.kept(2e-4 * count)) / 2
    assert expected > 0.005
    assert table.up_fraction == pytest.approx(expected, abs=1e-6)
    # What is lost is not switched.
    assert table.cycles == pytest.approx(0.0, abs=1e-6)


# What each family calls a burst, and how many pulses it takes at most.
FAMILIES: dict[str, dict[str, str]] = {
    "scpi99": {
        "set": ":VOLT:HIGH 4;LOW -4;:PULS:WIDT 1E-4;PER 2E-4",
        "count": ":PULS:COUN {}",
        "most": "1000000000000",
        "fire": ":INIT;*TRG",
        "on": ":OUTP ON",
        "stop": ":ABOR",
        "sent": ":PULS:COUN:SENT?",
    },
    "perdiv": {
        "set": ":SOUR:VOLT 8;VOLT:OFFS 0;:SOUR:FUNC:PULS:WIDT 1E-4;:SOUR:FREQ 5E3;BURS:STAT ON",
        "count": ":SOUR:BURS:NCYC {}",
        "most": "1000000000000",
        "fire": "*TRG",
        "on": ":OUTP ON",
        "stop": ":ABOR",
        "sent": ":SOUR:BURS:COUN?",
    },
    "stateword": {
        "set": "CH1:HIGH 4;:CH1:LOW -4;:CH1:PERIOD 2E-4;:CH1:WIDTH 1E-4;:CH1:TRIGMODE SOFT",
        "count": "CH1:CYCLES {}",
        "most": "999999999999",
        "fire": "CH1:ARM;:CH1:FIRE",
        "on": "CH1:OUTPUT 1",
        "stop": "CH1:STOP",
        "sent": "CH1:SENT?",
    },
}


class Source:
    """A generator of one family on a linear cell, its output closed and resting at -4 V."""

    def __init__(self, family: str) -> None:
        self.words = FAMILIES[family]
        self.bench = Bench(SimulationSettings(cell=LINEAR, family=family))
        self._line = Line(self.bench.generator)
        self.say("set")
        self.say("on")
        self.bench.clock.advance(0.1)

    def say(self, word: str, *values: object) -> str:
        answer = self._line.say(self.words[word].format(*values))
        return answer.rsplit(" ", 1)[-1]

    def error(self) -> int:
        return self.bench.generator.status.errors.pop().number


@pytest.mark.parametrize("family", FAMILIES)
def test_the_longest_burst_is_counted_to_the_pulse(family: str) -> None:
    source = Source(family)
    most = int(source.words["most"])
    source.say("count", most)
    assert source.error() == 0
    source.say("fire")
    source.bench.clock.advance(2e-4 * most)
    assert source.error() == 0
    assert source.say("sent") == str(most)
    assert source.bench.table.delivered == most
    assert not source.bench.generator_model.is_running


@pytest.mark.parametrize("family", FAMILIES)
def test_more_than_the_longest_burst_is_refused(family: str) -> None:
    source = Source(family)
    source.say("count", int(source.words["most"]) + 1)
    assert source.error() == -222


@pytest.mark.parametrize("family", FAMILIES)
def test_a_burst_that_is_stopped_says_how_far_it_came(family: str) -> None:
    source = Source(family)
    source.say("count", 10**9)
    assert source.say("sent") == "0"
    source.say("fire")
    # In the middle of the flat top of pulse 1,000,001.
    source.bench.clock.advance(200.00005)
    assert source.say("sent") == "1000000"
    source.say("stop")
    source.bench.clock.advance(1.0)
    assert source.say("sent") == "1000000"
    assert source.bench.table.delivered == 1_000_000
    source.say("count", 3)
    source.say("fire")
    source.bench.clock.advance(1.0)
    assert source.say("sent") == "3"
    assert source.bench.table.delivered == 1_000_003


def test_a_train_of_forty_pulses_fits_one_record() -> None:
    bench = Bench(SimulationSettings(cell=LINEAR))
    generator, oscilloscope = Line(bench.generator), Line(bench.oscilloscope)
    generator.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 1E-4;PER 1E-3;COUN 40;:OUTP ON")
    oscilloscope.say(":SENS:SWE:POIN 2E6;TINT 2E-8;:TRIG:SOUR INT1;LEV 2;:SENS1:VOLT:RANG:PTP 16")
    bench.clock.advance(0.1)
    oscilloscope.say(":INIT")
    bench.clock.advance(1e-3)
    generator.say(":INIT;*TRG")
    bench.clock.advance(0.1)
    record = bench.digitizer.record()
    assert record.points == 2_000_000
    assert record.interval_seconds == 2e-8
    high = record.volts(0) > 2
    # The first rise is the trigger itself, at or before the first sample.
    rises = np.flatnonzero(~high[:-1] & high[1:]) * 2e-8
    falls = np.flatnonzero(high[:-1] & ~high[1:]) * 2e-8
    assert len(falls) == 40
    assert np.allclose(rises[-39:], 1e-3 * np.arange(1, 40), atol=1e-7)
    assert np.allclose(falls, 1e-4 + 1e-3 * np.arange(40), atol=1e-7)


@pytest.mark.parametrize("count", [150, 300])
def test_an_acquisition_under_way_sees_each_pulse_of_a_long_burst(count: int) -> None:
    assert count > table_module.MANY_PERIODS
    bench = Bench(SimulationSettings(cell=LINEAR))
    generator, oscilloscope = Line(bench.generator), Line(bench.oscilloscope)
    generator.say(f":VOLT:HIGH 4;LOW 0;:PULS:WIDT 1E-4;PER 2E-4;COUN {count};:OUTP ON")
    oscilloscope.say(":SENS:SWE:POIN 1E5;TINT 1E-6;:TRIG:SOUR EXT;:SENS1:VOLT:RANG:PTP 16")
    bench.clock.advance(0.1)
    oscilloscope.say(":INIT")
    generator.say(":INIT;*TRG")
    bench.clock.advance(0.2)
    high = bench.digitizer.record().volts(0) > 2
    assert np.count_nonzero(high[:-1] & ~high[1:]) == count
