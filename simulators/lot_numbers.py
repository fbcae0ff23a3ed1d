"""A lot of cells, and what is done to it, as arrays: a row for each cell."""

from collections.abc import Sequence
from dataclasses import replace
from statistics import NormalDist
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import LEAST_ACTIVATION_SHARE, CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.drive import PulseTrain

Array = NDArray[np.float64]


class LotNumbers(NamedTuple):
    """Cells and their circuits.

    barriers: activation voltages to the power alpha, V^alpha: a column for each region.
    """

    barriers: Array
    alphas: Array
    attempts_per_second: Array
    imprint_volts: Array
    switchable_coulombs: Array
    farads: Array
    shunt_siemens: Array
    branch_ohms: float


class Pieces(NamedTuple):
    """Straight pieces of the EMF, one after another.

    begin_volts: EMF at the begin. pulse: which pulse's flat top ends with the piece, counted
    from 0; -1 for none.
    """

    begin_volts: Array
    volts_per_second: Array
    seconds: Array
    pulse: NDArray[np.int64]


def numbers_of(cells: Sequence[CellDescription], wiring: Wiring) -> LotNumbers:
    """Put at least one cell, all of as many regions, into arrays."""

    def column(name: str) -> Array:
        return np.array([getattr(cell, name) for cell in cells], dtype=np.float64)

    regions = cells[0].regions
    normal = NormalDist()
    quantiles = np.array([normal.inv_cdf((k + 0.5) / regions) for k in range(regions)])
    means = column("activation_volts")[:, None]
    activations = means + column("activation_spread")[:, None] * quantiles
    activations = np.maximum(activations, LEAST_ACTIVATION_SHARE * means)
    alphas = column("alpha")
    return LotNumbers(
        barriers=activations ** alphas[:, None],
        alphas=alphas,
        attempts_per_second=1 / column("attempt_seconds"),
        imprint_volts=column("imprint_volts"),
        switchable_coulombs=column("switchable_coulombs"),
        farads=np.array([Circuit(cell, wiring).farads for cell in cells]),
        shunt_siemens=1 / column("leak_ohms") + 1 / wiring.probe_ohms,
        branch_ohms=float(wiring.branch_ohms),
    )


def pieces_of(pulses: Sequence[PulseTrain]) -> Pieces:
    """Cut pulses, each a train of one, into straight pieces."""
    rows: list[tuple[float, float, float]] = []
    tops: list[int] = []
    for index, train in enumerate(pulses):
        single = replace(train, start_seconds=0.0)
        at_seconds = 0.0
        while at_seconds < train.period_seconds:
            stretch = single.stretch_at(at_seconds)
            end_seconds = min(stretch.end_seconds, train.period_seconds)
            seconds = end_seconds - at_seconds
            slope = (stretch.end_volts - stretch.begin_volts) / seconds
            rows.append((stretch.begin_volts, slope, seconds))
            tops.append(index if stretch.end_volts == train.level_volts else -1)
            at_seconds = end_seconds
    begin_volts, slopes, seconds_long = np.array(rows).reshape(-1, 3).T.copy()
    return Pieces(begin_volts, slopes, seconds_long, np.array(tops, dtype=np.int64))
