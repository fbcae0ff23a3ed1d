"""A lot of cells at once: each as the table has it."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.lot import draw_cells, run_lot
from pulsetally.simulators.wear import Fatigue
from tests.simulators.table_pulses import connected


def single(volts: float, seconds: float, *, edge_seconds: float = 100e-9) -> PulseTrain:
    return PulseTrain(
        level_volts=volts,
        width_seconds=seconds,
        leading_seconds=edge_seconds,
        trailing_seconds=edge_seconds,
        period_seconds=seconds + 1e-3,
    )


PRESET, UP = single(-5.0, 2e-3), single(4.0, 100e-6)


def on_the_table(
    cells: list[CellDescription], wiring: Wiring, pulses: list[PulseTrain]
) -> NDArray[np.float64]:
    ends = np.zeros((len(cells), len(pulses)))
    for row, cell in enumerate(cells):
        table = connected(cell, wiring)
        for column, train in enumerate(pulses):
            table.play(replace(train, start_seconds=table.now))
            # With equal edges the flat top ends one width after the pulse begins.
            table.advance(train.width_seconds)
            ends[row, column] = table.node_volts
            table.advance(train.period_seconds - train.width_seconds)
    return ends


# The table itself is checked against an independent integration, to 0.1 mV.
def test_a_lot_agrees_with_the_table() -> None:
    nominal = CellDescription()
    cells = [nominal, *draw_cells(nominal, 20, relative_spread=0.05, seed=1)]
    pulses = [PRESET] + 12 * [UP]
    found = run_lot(cells, Wiring(), pulses)
    assert found.shape == (21, 13)
    assert found == pytest.approx(on_the_table(cells, Wiring(), pulses), abs=1e-3)
    # The counts scatter: the cells are not one and the same.
    assert len(set((found[:, 1:] < 2.5).sum(axis=1).tolist())) > 2


def test_a_lot_of_unlike_cells_agrees_through_both_directions() -> None:
    nominal = CellDescription(activation_volts=12.0, activation_spread=4.0, regions=16)
    cells = [
        nominal,
        replace(nominal, imprint_volts=0.3),
        replace(nominal, alpha=1.3, attempt_seconds=1e-8),
        replace(nominal, leak_ohms=50e6, area=2e-8),
    ]
    pulses = [PRESET, UP, single(-3.0, 100e-6, edge_seconds=10e-6), UP]
    pulses += [single(-2.0, 50e-6), single(2.0, 50e-6, edge_seconds=0.0), UP]
    found = run_lot(cells, Wiring(), pulses)
    assert found == pytest.approx(on_the_table(cells, Wiring(), pulses), abs=1e-3)


def test_a_cell_does_not_feel_its_neighbours() -> None:
    cells = draw_cells(CellDescription(regions=8), 30, relative_spread=0.1, seed=2)
    pulses = [PRESET, UP, UP]
    together = run_lot(cells, Wiring(), pulses, threads=2)
    backwards = run_lot(cells[::-1], Wiring(), pulses, threads=1)[::-1]
    alone = run_lot(cells[4:5], Wiring(), pulses)
    # Newton's method goes on until the slowest of a group has converged, so steps differ a
    # little: by less than a fifth of what is promised.
    assert together == pytest.approx(backwards, abs=2e-4)
    assert together[4:5] == pytest.approx(alone, abs=2e-4)


def test_an_empty_lot_gives_no_rows() -> None:
    assert run_lot([], Wiring(), [PRESET, UP]).shape == (0, 2)


# A: the logarithm of a log-normal factor is normal with the spread as standard deviation;
# that of 4000 values is uncertain by 1.1 %.
def test_drawn_cells_scatter_by_their_spread() -> None:
    nominal = CellDescription()
    cells = draw_cells(nominal, 4000, relative_spread=0.05, seed=3)
    for name in ("area", "thickness", "remanent_polarization", "activation_volts"):
        logs = np.log([getattr(cell, name) / getattr(nominal, name) for cell in cells])
        assert logs.std() == pytest.approx(0.05, rel=0.04)
        assert logs.mean() == pytest.approx(0.0, abs=3 * 0.05 / 4000**0.5)
    assert draw_cells(nominal, 3, relative_spread=0.05, seed=3) != cells[:2]
    assert draw_cells(nominal, 4000, relative_spread=0.05, seed=3) == cells


PLAIN = CellDescription()
# Cells, wiring, pulses, the message.
MISTAKES = [
    (
        [PLAIN, CellDescription(regions=8)],
        Wiring(),
        [UP],
        "cell 1 has 8 regions, cell 0 has 64",
    ),
    ([PLAIN, CellDescription(domains=9)], Wiring(), [UP], "cell 1 has domains; a lot knows only"),
    ([CellDescription(fatigue=Fatigue())], Wiring(), [UP], "cell 0 has fatigue; a lot knows only"),
    ([PLAIN], Wiring(clamp_volts=3.0), [UP], "has a diode or a clamp"),
    ([PLAIN], Wiring(diode_saturation_amperes=1e-9), [UP], "has a diode or a clamp"),
    ([PLAIN], Wiring(), [UP, replace(UP, count=2)], "pulse 1 has a count of 2; it must be 1"),
]


@pytest.mark.parametrize(("cells", "wiring", "pulses", "message"), MISTAKES)
def test_what_a_lot_cannot_do_is_refused(
    cells: list[CellDescription], wiring: Wiring, pulses: list[PulseTrain], message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        run_lot(cells, wiring, pulses)
