"""Trains too fast for the node to follow: it sees their mean, for as many pulses as there are."""

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.ripple import ripple_of
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import ImprintGrowth, Incubation, Retention
from tests.simulators.table_pulses import connected
from tests.simulators.talking import LINEAR

Floats = NDArray[np.float64]


def train(level: float, period_seconds: float, count: int, *, base: float = 0.0) -> PulseTrain:
    return PulseTrain(
        base_volts=base,
        level_volts=level,
        width_seconds=period_seconds / 2,
        leading_seconds=0.0,
        trailing_seconds=0.0,
        period_seconds=period_seconds,
        count=count,
    )


class Witness:
    """Watches a table; it may want each pulse of a train."""

    def __init__(self, table: Table, *, in_detail: bool) -> None:
        self.stretches, self.last_volts = 0, table.node_volts
        table.observe(self, needs_detail=lambda: in_detail)

    def saw(self, times: Floats, terminal_volts: Floats, node_volts: Floats) -> None:
        assert times.shape == terminal_volts.shape == node_volts.shape
        # The node's capacitance lets it jump nowhere.
        assert node_volts[0] == pytest.approx(self.last_volts, abs=1e-9)
        self.stretches, self.last_volts = self.stretches + 1, float(node_volts[-1])


# A: closed form of one resistance and one capacitance driven by a square wave. Each period
# takes the node from v to kept v + gained, so that n of them end at
# gained (1 - kept^n)/(1 - kept).
@pytest.mark.parametrize("period_seconds", [40e-9, 1e-6, 20e-6, 200e-6])
@pytest.mark.parametrize("times_tau", [0.5, 3.0])
def test_a_node_fills_as_one_resistance_and_capacitance(
    period_seconds: float, times_tau: float
) -> None:
    wiring = Wiring()
    table = connected(LINEAR, wiring)
    siemens = 1 / wiring.branch_ohms + 1 / wiring.probe_ohms
    tau = (LINEAR.farads + wiring.probe_farads) / siemens
    count = max(200, round(times_tau * tau / period_seconds))
    half = math.exp(-period_seconds / 2 / tau)
    gained = 4.0 / wiring.branch_ohms / siemens * (1 - half) * half
    witness = Witness(table, in_detail=False)
    table.play(train(4.0, period_seconds, count))
    table.advance(period_seconds * count)
    expected = gained * -math.expm1(-count * period_seconds / tau) / (1 - half**2)
    assert table.node_volts == pytest.approx(expected, abs=2e-4)
    assert table.delivered == count
    assert witness.stretches < 2 * count


def test_a_floating_node_goes_on_decaying_through_a_train_behind_an_open_relay() -> None:
    wiring = Wiring(diode_saturation_amperes=1e-12)
    table = connected(LINEAR, wiring)
    table.rest_at(3.0)
    table.advance(1.0)
    table.connect(False)
    begin_volts = table.node_volts
    assert begin_volts > 1
    tau = (LINEAR.farads + wiring.probe_farads) * wiring.probe_ohms
    table.play(replace(train(4.0, 100e-9, 60_000), start_seconds=table.now))
    table.advance(6e-3)
    assert table.node_volts == pytest.approx(begin_volts * math.exp(-6e-3 / tau), rel=1e-4)
    assert table.delivered == 0


# Options, level, period and pulses. One by one is the reference.
CASES: dict[str, tuple[CellDescription, Wiring, float, float, int]] = {
    "a cell that switches": (CellDescription(regions=8), Wiring(), 10.0, 1e-6, 400),
    "with a megohm": (CellDescription(regions=8), Wiring(series_ohms=1e6), 10.0, 4e-6, 600),
    "incubation": (
        CellDescription(regions=8, incubation=Incubation(seconds=200e-6)),
        Wiring(),
        10.0,
        1e-6,
        500,
    ),
    "imprint and retention": (
        CellDescription(
            regions=8,
            imprint_growth=ImprintGrowth(volts_per_decade=0.02, onset_seconds=1e-5),
            retention=Retention(onset_seconds=1e-5, loss_per_decade=0.1, side=-1),
        ),
        Wiring(),
        10.0,
        1e-6,
        400,
    ),
    "a clamp": (CellDescription(regions=8), Wiring(clamp_volts=2.5), 10.0, 0.4e-6, 800),
}


@pytest.mark.parametrize("name", CASES)
def test_a_fast_train_at_once_is_as_good_as_one_by_one(name: str) -> None:
    cell, wiring, level, period_seconds, count = CASES[name]
    tables, stretches = [], []
    for in_detail in (False, True):
        table = connected(cell, wiring)
        witness = Witness(table, in_detail=in_detail)
        table.play(train(level, period_seconds, count))
        table.advance(period_seconds * count)
        tables.append(table)
        stretches.append(witness.stretches)
    at_once, singly = tables
    assert stretches[0] < 0.2 * stretches[1]
    assert at_once.now == singly.now
    assert at_once.delivered == singly.delivered == count
    assert singly.up_fraction > 0.05
    assert at_once.up_fraction == pytest.approx(singly.up_fraction, abs=1e-3)
    assert at_once.cycles == pytest.approx(singly.cycles, rel=5e-3)
    assert at_once.node_volts == pytest.approx(singly.node_volts, abs=1e-3)
    assert at_once.imprint_volts == pytest.approx(singly.imprint_volts, abs=2e-3)


# A: over times much shorter than RC the node only collects charge: a square wave of 8 V about
# its mean makes a triangle of 4 V T/(4 RC) up and down from its mean, sqrt(3) times its rms.
def test_the_ripple_of_a_square_wave_is_a_triangle() -> None:
    cell, wiring = CellDescription(), Wiring(source_ohms=0.0, probe_ohms=math.inf)
    circuit = Circuit(cell, wiring)
    circuit.relay_on = True
    tau = (cell.farads + wiring.probe_farads) * wiring.branch_ohms
    period_seconds = 1e-4 * tau
    ripple = ripple_of(train(5.0, period_seconds, 3, base=-3.0), circuit)
    assert ripple is not None
    assert ripple.mean_volts == pytest.approx(1.0)
    assert ripple.settled_volts == pytest.approx(1.0)
    peak = 4.0 * period_seconds / (4 * tau)
    assert ripple.begin_volts == pytest.approx(-peak, rel=1e-3)
    assert ripple.rms_volts == pytest.approx(peak / math.sqrt(3), rel=2e-2)


def test_a_diode_sees_more_than_the_mean() -> None:
    circuit = Circuit(CellDescription(), Wiring(diode_saturation_amperes=1e-12))
    circuit.relay_on = True
    assert ripple_of(train(4.0, 40e-9, 3), circuit) is None
