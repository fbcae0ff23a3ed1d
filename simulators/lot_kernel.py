"""A whole lot of cells through the compiled march, one cell after another.

Importing this module needs numba: use it through pulsetally.simulators.compiled.
"""

import math
from pathlib import Path
from typing import Any

import numpy as np
from numba import njit, typeof

from pulsetally.simulators.cell import SwitchingLaw
from pulsetally.simulators.circuit import Branches
from pulsetally.simulators.collocation import Equations
from pulsetally.simulators.kernel import kept_in
from pulsetally.simulators.lot_numbers import LotNumbers, Pieces
from pulsetally.simulators.march import FIRST_STRIDE, NEVER, State

# The compiled march: numba wants what it calls to be a global.
_march: Any = None


def _run(lot: LotNumbers, pieces: Pieces, ends: Any) -> bool:
    regions = lot.barriers.shape[1]
    weights = np.full(regions, 1 / regions)
    for c in range(len(ends)):
        siemens = lot.shunt_siemens[c] + 1 / lot.branch_ohms
        gain = 1 / (lot.branch_ohms * siemens)
        tau_seconds = lot.farads[c] / siemens
        equations = Equations(
            SwitchingLaw(lot.barriers[c], lot.alphas[c], lot.attempts_per_second[c]),
            weights,
            lot.imprint_volts[c],
            lot.switchable_coulombs[c],
            False,
            False,
            lot.farads[c],
            True,
            gain,
            Branches(True, lot.branch_ohms, lot.shunt_siemens[c], 0.0, 1.0, math.inf),
        )
        state = State(np.zeros(regions), 0.0, 1, False)
        for p in range(len(pieces.seconds)):
            emf_volts, emf_slope = pieces.begin_volts[p], pieces.volts_per_second[p]
            seconds = pieces.seconds[p]
            course = _march(
                equations, state, FIRST_STRIDE, emf_volts, emf_slope, seconds, False, NEVER
            )
            if course.failed:
                return False
            state = course.state
            if course.quiet:
                # As Solver follows it: the forced solution lags the EMF by tau.
                left_seconds = seconds - course.seconds
                forced_volts = gain * (emf_volts + emf_slope * (course.seconds - tau_seconds))
                decaying = (state.volts - forced_volts) * math.exp(-left_seconds / tau_seconds)
                end_volts = forced_volts + gain * emf_slope * left_seconds + decaying
                state = State(state.up, end_volts, state.side, state.used)
            if pieces.pulse[p] >= 0:
                ends[c, pieces.pulse[p]] = state.volts
    return True


def compile_lot(march: Any, folder: Path) -> Any:
    """Load from a folder, or compile, what runs a lot; one of CompileErrors.

    march: compiled. What comes back takes LotNumbers, Pieces and a place for the end voltages,
    a row for each cell and a column for each pulse, and tells whether all steps were solved.
    """
    global _march
    _march = march
    row, table = np.zeros(1), np.zeros((1, 1))
    lot = LotNumbers(table, row, row, row, row, row, row, 1.0)
    pieces = Pieces(row, row, row, np.zeros(1, dtype=np.int64))
    types = (typeof(lot), typeof(pieces), typeof(table))
    with kept_in(folder):
        return njit(types, cache=True, nogil=True)(_run)
