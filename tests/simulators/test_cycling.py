"""Endurance in closed form: the same as pulse by pulse, in no time."""

import math
import time
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import Breakdown, Fatigue, ImprintGrowth, Incubation, Retention
from tests.simulators.table_pulses import connected, preset, up

FAST = Wiring(series_ohms=10e3)


def train(volts: float, seconds: float = 100e-6) -> PulseTrain:
    return PulseTrain(
        level_volts=volts,
        width_seconds=seconds,
        leading_seconds=1e-6,
        trailing_seconds=1e-6,
        period_seconds=2 * seconds,
    )


def one_by_one(table: Table, down: PulseTrain, up_train: PulseTrain, pairs: int) -> None:
    for _ in range(pairs):
        for single in (down, up_train):
            table.play(replace(single, start_seconds=table.now))
            table.advance(single.period_seconds)


class Count:
    """Counts what a table shows."""

    def __init__(self, table: Table) -> None:
        self.stretches = 0
        table.observe(self)

    def saw(self, times: object, terminal_volts: object, node_volts: object) -> None:
        del times, terminal_volts, node_volts
        self.stretches += 1


# Options, the two levels, pairs, and by how much the cycles may differ, relatively: cells that
# a pair switches wholly are exact, of others each pair depends on the one before.
WEAR = Fatigue(scale_cycles=400.0)
RECOVERING = replace(WEAR, recovered_share=0.01, recovery_volts=6.0)
AGREEMENTS: dict[str, tuple[dict[str, Any], float, float, int, float]] = {
    "wear, fully switched": ({"fatigue": WEAR}, -8.0, 8.0, 20, 1e-5),
    "wear, partly switched": ({"fatigue": WEAR}, -4.0, 2.6, 45, 1e-2),
    "wear and recovery": ({"fatigue": RECOVERING}, -8.0, 8.0, 20, 1e-5),
    "imprint and retention": (
        {
            "imprint_growth": ImprintGrowth(volts_per_decade=0.05, onset_seconds=1e-2),
            "retention": Retention(law="stretched", onset_seconds=1.0),
        },
        -4.0,
        2.6,
        45,
        1e-2,
    ),
    "incubation": ({"incubation": Incubation(seconds=20e-6), "fatigue": WEAR}, -6.0, 6.0, 20, 1e-3),
}


@pytest.mark.parametrize("name", AGREEMENTS)
def test_many_pairs_at_once_are_as_good_as_one_by_one(name: str) -> None:
    options, down_volts, up_volts, pairs, tolerance = AGREEMENTS[name]
    cell = CellDescription(regions=8, **options)
    at_once, singly = connected(cell, FAST), connected(cell, FAST)
    counts = [Count(at_once), Count(singly)]
    at_once.cycle(train(down_volts), train(up_volts), pairs=pairs)
    one_by_one(singly, train(down_volts), train(up_volts), pairs)
    assert counts[0].stretches < 0.9 * counts[1].stretches
    assert at_once.delivered == singly.delivered == 2 * pairs
    assert at_once.now == pytest.approx(singly.now, rel=1e-9)
    assert singly.cycles > 0.1 * pairs
    assert at_once.cycles == pytest.approx(singly.cycles, rel=tolerance)
    assert at_once.polarization == pytest.approx(singly.polarization, abs=1e-3 * 0.25)
    assert at_once.remanent_polarization == pytest.approx(singly.remanent_polarization, rel=1e-3)
    assert at_once.imprint_volts == pytest.approx(singly.imprint_volts, abs=2e-3)
    assert at_once.node_volts == pytest.approx(singly.node_volts, abs=1e-3)


# A: exp(-(1e9/1e10)^0.3), the cell being switched wholly by each pulse.
def test_a_thousand_million_pairs_take_no_time() -> None:
    table = connected(CellDescription(fatigue=Fatigue(scale_cycles=1e10)), FAST)
    began = time.process_time()
    table.cycle(train(-8.0), train(8.0), pairs=10**9)
    assert time.process_time() - began < 2.0
    assert table.delivered == 2 * 10**9
    assert table.now == pytest.approx(4e5, rel=1e-9)
    assert table.cycles == pytest.approx(1e9, rel=1e-5)
    expected = 0.25 * math.exp(-(0.1**0.3))
    assert table.remanent_polarization == pytest.approx(expected, rel=1e-5)
    assert table.polarization == pytest.approx(expected, rel=1e-3)


# A: the mean of 1 and of what the law keeps of a cell wholly down, at rest from 0 s on.
def test_pairs_below_rest_voltage_let_a_rest_go_on() -> None:
    retention = Retention(onset_seconds=1e-3, side=-1)
    table = connected(CellDescription(regions=8, retention=retention), FAST)
    table.cycle(train(-0.3), train(0.3), pairs=10**6)
    expected = (1 - retention.kept(400.0)) / 2
    assert table.up_fraction == pytest.approx(expected, abs=1e-6)
    assert table.cycles == pytest.approx(0.0, abs=1e-6)


# A: exp(-(1e8/1e9)^0.3); presets that bring nothing back change nothing.
def test_wear_goes_on_through_a_hundred_million_recoveries_of_nothing() -> None:
    fatigue = Fatigue(scale_cycles=1e9, recovered_share=0.0, recovery_volts=4.0)
    table = connected(CellDescription(regions=8, fatigue=fatigue), FAST)
    table.cycle(train(-8.0), train(8.0), pairs=10**8)
    expected = 0.25 * math.exp(-(0.1**0.3))
    assert table.remanent_polarization == pytest.approx(expected, rel=1e-5)


def test_a_cell_breaks_down_on_its_way() -> None:
    breakdown = Breakdown(scale_cycles=1e6, shape=3.0, short_ohms=50.0)
    table = connected(CellDescription(breakdown=breakdown, regions=8), FAST, seed=4)
    table.cycle(train(-8.0), train(8.0), pairs=10**8)
    assert table.broken
    assert table.delivered == 2 * 10**8
    assert table.now == pytest.approx(4e4, rel=1e-9)
    assert table.breakdown_cycles <= table.cycles < table.breakdown_cycles + 2
    assert up(table) == pytest.approx(0.0, abs=0.03)


def test_domains_are_cycled_at_once_too() -> None:
    table = connected(CellDescription(regions=8, domains=100, fatigue=Fatigue()), FAST)
    count = Count(table)
    table.cycle(train(-8.0), train(8.0), pairs=10**6)
    # A: a pair is some eight stretches; a handful of them at the begin and the end.
    assert count.stretches < 100
    assert table.cycles == pytest.approx(1e6, rel=1e-5)


def test_a_cell_that_is_not_connected_only_waits() -> None:
    table = Table(CellDescription(fatigue=Fatigue()), FAST)
    table.cycle(train(-8.0), train(8.0), pairs=10**6)
    assert table.delivered == 0
    assert table.cycles == 0
    assert table.now == pytest.approx(400.0)


def test_worn_cells_fill_with_fewer_pulses() -> None:
    table = connected(CellDescription(fatigue=Fatigue()))
    counts = []
    for _ in range(2):
        preset(table)
        counts.append(next(count for count in range(1, 30) if up(table) > 2.5))
        table.cycle(train(-8.0, 2e-3), train(8.0, 2e-3), pairs=10**8)
    assert counts[0] == 9
    assert 5 < counts[1] < 9


def test_observers_see_the_repeated_pairs_as_rest() -> None:
    class Watch:
        def __init__(self) -> None:
            self.times = [0.0]

        def saw(
            self,
            times: NDArray[np.float64],
            terminal_volts: NDArray[np.float64],
            node_volts: NDArray[np.float64],
        ) -> None:
            assert times[0] == self.times[-1]
            assert np.all(np.diff(times) > 0)
            assert times.shape == terminal_volts.shape == node_volts.shape
            self.times = [*self.times, *times.tolist()]

    table = connected(CellDescription(regions=8), FAST)
    watch = Watch()
    table.observe(watch)
    table.cycle(train(-8.0), train(8.0), pairs=10**6)
    assert watch.times[-1] == table.now
    assert max(np.diff(watch.times)) > 399


def test_only_pairs_of_single_pulses_are_cycled() -> None:
    table = connected(CellDescription())
    with pytest.raises(ValueError, match="up has a count of 3; a pair has one of each"):
        table.cycle(train(-5.0), replace(train(4.0), count=3), pairs=5)
    with pytest.raises(ValueError, match="pairs is 0; it must be at least 1"):
        table.cycle(train(-5.0), train(4.0), pairs=0)
