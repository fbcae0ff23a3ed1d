"""One implicit step of the node voltage and all regions together.

For a known course of the voltage every region is a quadrature: the part that has not
switched yet decays as exp(-S), with S the integral of its rate. So a collocation step
has only the node voltages at its three points as unknowns, whatever the number of
regions, and a region can't leave 0 <= u <= 1. The points are those of the Radau IIA
method of order 5 (Hairer and Wanner, Solving Ordinary Differential Equations II, section
IV.8, from memory), applied to S_i' = 1/tau_i(v) and to the charge on the node, with
charge = C v + A P as the constraint.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit

Array = NDArray[np.float64]
Triple = tuple[float, float, float]

NODES: Triple = ((4 - math.sqrt(6)) / 10, (4 + math.sqrt(6)) / 10, 1.0)


def _integrals_of_lagrange_polynomials() -> Array:
    powers = np.vander(np.array(NODES), 3, increasing=True)
    integrals = np.array([[node ** (k + 1) / (k + 1) for k in range(3)] for node in NODES])
    return np.asarray(integrals @ np.linalg.inv(powers), dtype=np.float64)


MATRIX = _integrals_of_lagrange_polynomials()
_ROWS: list[list[float]] = MATRIX.tolist()
# Lagrange polynomials of the nodes, evaluated at the step's begin.
_AT_BEGIN = np.linalg.inv(np.vander(np.array(NODES), 3, increasing=True))[0]
_A0, _A1, _A2 = (float(weight) for weight in _AT_BEGIN)
# The embedded formula of order 3 gives the begin of the step this weight: the real
# eigenvalue of MATRIX, so that its error is filtered with a factor that is at hand.
_EMBEDDED = 1 / (3 + 3 ** (2 / 3) - 3 ** (1 / 3))

NEWTON_TOLERANCE_VOLTS = 1e-6
_MOST_NEWTON = 10
_LARGEST_CORRECTION_VOLTS = 0.5


@dataclass(frozen=True, slots=True)
class Begin:
    """What a step starts from.

    volts: of the node. side: 1 where the cell is driven up, -1 down. open_shares: each
    region's share of the cell that can still switch to that side. rates: of the regions,
    1/s. amperes: into the node, without switching. slope: dv/dt, V/s.
    """

    volts: float
    side: int
    open_shares: Array
    rates: Array
    amperes: float
    slope: float


@dataclass(frozen=True, slots=True)
class Trial:
    """A solved step.

    seconds: its length. volts: node at NODES. exposures: S of each region over the step.
    open_shares, rates, amperes, slope: as in Begin, at the step's end.
    moved: part of the cell that switched. error_volts: embedded error.
    """

    seconds: float
    volts: Triple
    exposures: Array
    open_shares: Array
    rates: Array
    amperes: float
    slope: float
    moved: float
    error_volts: float


def begin_step(
    cell: Cell, circuit: Circuit, emf_volts: float, node_volts: float, side: int
) -> Begin:
    """Evaluate the equations where a step starts."""
    open_shares = cell.weights * cell.remaining(side)
    rates = cell.rates(side * (node_volts - cell.description.imprint_volts))
    amperes, _ = circuit.node_current(emf_volts, node_volts)
    switching = cell.description.switchable_coulombs * float(open_shares @ rates)
    return Begin(
        node_volts, side, open_shares, rates, amperes, (amperes - side * switching) / circuit.farads
    )


def try_step(
    cell: Cell,
    circuit: Circuit,
    begin: Begin,
    emf_volts: Triple,
    seconds: float,
    guess_volts: Triple,
) -> Trial | None:
    """Solve one step by Newton's method; None when it does not converge.

    emf_volts: at NODES. guess_volts: first guess of the node there.
    """
    side, coulombs, farads = begin.side, cell.description.switchable_coulombs, circuit.farads
    imprint_volts = cell.description.imprint_volts
    open_total = float(begin.open_shares.sum())
    scaled = seconds * MATRIX
    rows = scaled.tolist()
    v0 = begin.volts
    v1, v2, v3 = guess_volts
    e1, e2, e3 = emf_volts
    for _ in range(_MOST_NEWTON):
        i1, d1 = circuit.node_current(e1, v1)
        i2, d2 = circuit.node_current(e2, v2)
        i3, d3 = circuit.node_current(e3, v3)
        rates, slopes = cell.rates_and_slopes(
            np.array((v1 - imprint_volts, v2 - imprint_volts, v3 - imprint_volts)) * side
        )
        exposures = scaled @ rates
        # Between the nodes a steep rise can make an exposure negative for a moment.
        np.maximum(exposures, 0.0, out=exposures)
        shares = np.exp(-exposures)
        shares *= begin.open_shares
        left = shares.sum(axis=1).tolist()
        steep = (shares @ slopes.T).tolist()
        residual = []
        jacobian = []
        for k, (volts, row, steep_row) in enumerate(zip((v1, v2, v3), rows, steep, strict=True)):
            a1, a2, a3 = row
            residual.append(
                farads * (volts - v0)
                + side * coulombs * (open_total - left[k])
                - (a1 * i1 + a2 * i2 + a3 * i3)
            )
            s1, s2, s3 = steep_row
            line = [
                a1 * (coulombs * s1 - d1),
                a2 * (coulombs * s2 - d2),
                a3 * (coulombs * s3 - d3),
            ]
            line[k] += farads
            jacobian.append(line)
        x1, x2, x3 = _solve3(jacobian, residual)
        largest = max(abs(x1), abs(x2), abs(x3))
        if not largest < math.inf:
            return None
        if largest > _LARGEST_CORRECTION_VOLTS:
            damp = _LARGEST_CORRECTION_VOLTS / largest
            x1, x2, x3 = damp * x1, damp * x2, damp * x3
        v1, v2, v3 = v1 - x1, v2 - x2, v3 - x3
        if largest < NEWTON_TOLERANCE_VOLTS:
            break
    else:
        return None
    last = shares[2]
    # Both quadratures differ by what the nodes extrapolate to at the begin, and miss.
    missed_rates = begin.rates - _AT_BEGIN @ rates
    missed_amperes = begin.amperes - (_A0 * i1 + _A1 * i2 + _A2 * i3)
    weight = _EMBEDDED * seconds
    missed = weight * (missed_amperes - side * coulombs * float(last @ missed_rates))
    stiffness = farads + weight * (coulombs * steep[2][2] - d3)
    return Trial(
        seconds,
        (v1, v2, v3),
        exposures[2],
        last,
        rates[2],
        i3,
        (i3 - side * coulombs * float(last @ rates[2])) / farads,
        open_total - left[2],
        abs(missed) / stiffness,
    )


def _solve3(rows: list[list[float]], right: list[float]) -> Triple:
    """Solve three linear equations by elimination; the diagonal leads in all of ours."""
    (a, b, c), (d, e, f), (g, h, i) = rows
    minor1, minor2, minor3 = e * i - f * h, f * g - d * i, d * h - e * g
    determinant = a * minor1 + b * minor2 + c * minor3
    if determinant == 0:
        return math.inf, math.inf, math.inf
    x, y, z = right
    return (
        (x * minor1 + y * (c * h - b * i) + z * (b * f - c * e)) / determinant,
        (x * minor2 + y * (a * i - c * g) + z * (c * d - a * f)) / determinant,
        (x * minor3 + y * (b * g - a * h) + z * (a * e - b * d)) / determinant,
    )
