"""A cell that loses contact or becomes a short, as the node shows it."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import STRAY_FARADS, Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import SHORT_OHMS, Table
from pulsetally.simulators.wear import Breakdown, Incubation, Retention
from tests.simulators.table_pulses import connected, preset, up

WIRING = Wiring()
OPEN_VOLTS = 4.0 * WIRING.probe_ohms / (WIRING.probe_ohms + WIRING.branch_ohms)
LEAKY = CellDescription(leak_ohms=1e6)
ANY_CELL = [
    CellDescription(),
    LEAKY,
    CellDescription(incubation=Incubation(threshold_volts=1.0, seconds=1e-6)),
    CellDescription(domains=100),
]


class Watch:
    """An observer that keeps what it saw."""

    def __init__(self) -> None:
        self.times: list[NDArray[np.float64]] = []
        self.volts: list[NDArray[np.float64]] = []

    def saw(
        self,
        times: NDArray[np.float64],
        terminal_volts: NDArray[np.float64],
        node_volts: NDArray[np.float64],
    ) -> None:
        del terminal_volts
        self.times.append(times)
        self.volts.append(node_volts)


def branch_and_probe(wiring: Wiring) -> float:
    return wiring.branch_ohms * wiring.probe_ohms / (wiring.branch_ohms + wiring.probe_ohms)


# A (closed form): the probe alone charges through the branch from an EMF that jumps at 0 s.
@pytest.mark.parametrize("cell", ANY_CELL)
def test_an_open_cell_leaves_the_probe_alone(cell: CellDescription) -> None:
    table, watch = connected(cell), Watch()
    preset(table)
    table.advance(1.0)
    table.open_cell()
    table.observe(watch)
    assert not table.connected_cell
    begin_seconds, begin_volts, up_before = table.now, table.node_volts, table.up_fraction
    table.rest_at(4.0)
    table.advance(100e-6)
    tau = branch_and_probe(WIRING) * WIRING.probe_farads
    times = np.concatenate(watch.times) - begin_seconds
    expected = OPEN_VOLTS + (begin_volts - OPEN_VOLTS) * np.exp(-times / tau)
    assert np.concatenate(watch.volts) == pytest.approx(expected, abs=1e-9)
    assert table.up_fraction == up_before


# A: with the relay off the node falls through the probe alone, tau 10 Mohm x 12 pF = 120 us.
def test_the_node_keeps_its_voltage_when_the_cell_opens() -> None:
    table = connected(CellDescription())
    table.rest_at(1.0)
    table.advance(1.0)
    volts = table.node_volts
    table.open_cell()
    assert table.node_volts == volts
    table.connect(False)
    table.advance(120e-6)
    assert table.node_volts == pytest.approx(volts * math.exp(-1), rel=1e-9)


def test_an_open_cell_neither_counts_nor_is_preset() -> None:
    table = connected(CellDescription())
    preset(table)
    for _ in range(3):
        up(table)
    before = table.up_fraction
    assert before > 0.1
    table.open_cell()
    preset(table)
    assert up(table) == pytest.approx(OPEN_VOLTS, abs=1e-6)
    assert table.up_fraction == before
    # The generator delivered them all the same.
    assert (table.delivered, table.presets) == (6, 2)


# The periods of a long train are carried over in closed form, which must leave the cell alone.
def test_a_long_train_leaves_an_open_cell_as_it_is() -> None:
    table = connected(CellDescription())
    preset(table)
    for _ in range(3):
        up(table)
    before, delivered = table.up_fraction, table.delivered
    table.open_cell()
    table.play(
        PulseTrain(
            base_volts=-5.0,
            level_volts=4.0,
            width_seconds=100e-6,
            period_seconds=200e-6,
            count=10**6,
            start_seconds=table.now,
        )
    )
    table.advance(200.0)
    assert table.up_fraction == before
    assert table.delivered - delivered == 10**6


# A: through a diode the node still settles at what the probe lets through.
def test_an_open_cell_behind_a_diode() -> None:
    wiring = Wiring(diode_saturation_amperes=1e-12, clamp_volts=15.0)
    table = connected(CellDescription(), wiring)
    table.open_cell()
    table.rest_at(4.0)
    table.advance(10e-3)
    amperes = table.node_volts / wiring.probe_ohms
    diode_volts = 1.380649e-23 * 300.15 / 1.602176634e-19 * math.log1p(amperes / 1e-12)
    assert table.node_volts == pytest.approx(
        4.0 - diode_volts - amperes * wiring.branch_ohms, abs=1e-6
    )


def test_without_a_probe_the_node_has_only_its_stray_capacitance() -> None:
    wiring = Wiring(probe_farads=0.0, probe_ohms=math.inf)
    table = connected(CellDescription(), wiring)
    table.open_cell()
    table.rest_at(4.0)
    table.advance(wiring.branch_ohms * STRAY_FARADS)
    assert table.node_volts == pytest.approx(4.0 * (1 - math.exp(-1)), rel=1e-9)


# A: 5 ohm against 220 050 ohm and 10 Mohm; the leak of a leaky cell changes nothing of it.
@pytest.mark.parametrize("cell", ANY_CELL)
@pytest.mark.parametrize("ohms", [SHORT_OHMS, 1000.0])
def test_a_short_is_a_divider(cell: CellDescription, ohms: float) -> None:
    table = connected(cell)
    preset(table)
    table.short_cell(ohms)
    assert table.broken
    siemens = 1 / ohms + 1 / WIRING.probe_ohms + 1 / cell.leak_ohms
    expected = 4.0 / (1 + WIRING.branch_ohms * siemens)
    before = table.up_fraction
    assert up(table) == pytest.approx(expected, rel=1e-6)
    assert table.up_fraction == pytest.approx(before, abs=1e-9)


def test_a_short_discharges_the_node_at_once() -> None:
    table = connected(CellDescription())
    table.rest_at(1.0)
    table.advance(1.0)
    assert table.node_volts > 0.9
    table.short_cell()
    # A: tau is 5 ohm x 307 pF = 1.5 ns.
    table.advance(100e-9)
    assert table.node_volts == pytest.approx(1.0 * 5 / 220_055, rel=1e-3)


def test_a_cell_shorts_only_once() -> None:
    table = connected(CellDescription(breakdown=Breakdown()))
    table.short_cell(1000.0)
    table.short_cell(1.0)
    assert up(table) == pytest.approx(4 * 1000 / 221_050, rel=1e-3)


def test_an_open_cell_that_shorts_or_a_short_that_opens_is_open() -> None:
    for first, second in ((Table.open_cell, Table.short_cell), (Table.short_cell, Table.open_cell)):
        table = connected(CellDescription())
        first(table)
        second(table)
        table.open_cell()
        assert up(table) == pytest.approx(OPEN_VOLTS, abs=1e-6)


def test_an_open_cell_ages_as_one_at_rest() -> None:
    retention = Retention(loss_per_decade=0.05)
    states = []
    for is_open in (False, True):
        table = connected(CellDescription(retention=retention))
        preset(table)
        for _ in range(4):
            up(table)
        table.connect(False)
        table.advance(10.0)
        before = table.up_fraction
        if is_open:
            table.open_cell()
        table.advance(1e4)
        states.append(table.up_fraction)
        assert states[-1] < 0.95 * before
    assert states[0] == pytest.approx(states[1], rel=1e-9)


def test_a_short_needs_some_ohms() -> None:
    table = connected(CellDescription())
    for ohms in (0.0, -1.0, math.inf, math.nan):
        with pytest.raises(ValueError, match=f"ohms is {ohms}"):
            table.short_cell(ohms)
