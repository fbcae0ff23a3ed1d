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
from typing import NamedTuple

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
# Lagrange polynomials of the nodes, evaluated at the step's begin.
AT_BEGIN = np.linalg.inv(np.vander(np.array(NODES), 3, increasing=True))[0]
_A0, _A1, _A2 = (float(weight) for weight in AT_BEGIN)
# The embedded formula of order 3 gives the begin of the step this weight: the real
# eigenvalue of MATRIX, so that its error is filtered with a factor that is at hand.
EMBEDDED = 1 / (3 + 3 ** (2 / 3) - 3 ** (1 / 3))

# Newton's method doubles the right digits: below this correction the next one is noise.
NEWTON_TOLERANCE_VOLTS = 5e-5
_MOST_NEWTON = 10
_LARGEST_CORRECTION_VOLTS = 0.5


class Point(NamedTuple):
    """The state at one end of a step, with what the equations say about it.

    volts: of the node. side: 1 where the cell is driven up, -1 down. open_shares: each
    region's share of the cell that can still switch to that side. rates: of the regions,
    1/s. amperes: into the node, without switching. slope: dv/dt, V/s. bend: its rate, V/s2.
    moving: part of the cell that switches, 1/s.
    """

    volts: float
    side: int
    open_shares: Array
    rates: Array
    amperes: float
    slope: float
    bend: float
    moving: float


class Trial(NamedTuple):
    """A solved step.

    seconds: its length. volts: node at NODES. end: the state after it. kept: exp(-S) of
    each region over the step. moved: part of the cell that switched. error_volts: the
    embedded error.
    """

    seconds: float
    volts: Triple
    end: Point
    kept: Array
    moved: float
    error_volts: float


def point_at(
    cell: Cell,
    circuit: Circuit,
    node_volts: float,
    side: int,
    *,
    emf_volts: float,
    emf_slope: float,
) -> Point:
    """Evaluate the equations at an instant; emf_slope is de/dt, V/s."""
    open_shares = cell.weights * cell.remaining(side)
    distance = side * (node_volts - cell.imprint_volts)
    rates, slopes = cell.rates_and_slopes((distance,))
    current = circuit.node_current(emf_volts, node_volts)
    coulombs = cell.switchable_coulombs
    return _point(
        node_volts, side, open_shares, rates[0], slopes[0], current, emf_slope, coulombs, circuit
    )


def _point(
    volts: float,
    side: int,
    open_shares: Array,
    rates: Array,
    slopes: Array,
    current: Triple,
    emf_slope: float,
    coulombs: float,
    circuit: Circuit,
) -> Point:
    amperes, siemens, emf_siemens = current
    flow = open_shares * rates
    moving = float(flow.sum())
    slope = (amperes - side * coulombs * moving) / circuit.farads
    # The switching current grows with the voltage and dies with what has switched.
    growth = slope * float(open_shares @ slopes) - side * float(flow @ rates)
    bend = (emf_siemens * emf_slope + siemens * slope - coulombs * growth) / circuit.farads
    return Point(volts, side, open_shares, rates, amperes, slope, bend, moving)


def try_step(
    cell: Cell,
    circuit: Circuit,
    begin: Point,
    seconds: float,
    guess_volts: Triple,
    *,
    emf_volts: float,
    emf_slope: float,
) -> Trial | None:
    """Solve one step by Newton's method; None when it does not converge.

    emf_volts, emf_slope: EMF at the step's begin, V, and its rise, V/s. guess_volts:
    first guess of the node at NODES.
    """
    side, coulombs, farads = begin.side, cell.switchable_coulombs, circuit.farads
    origin_volts = side * cell.imprint_volts
    open_total = float(begin.open_shares.sum())
    signed = side * coulombs
    ones = np.ones(len(begin.open_shares))
    # Negative, so that exp() takes the product as it is.
    scaled = -seconds * MATRIX
    (a11, a12, a13), (a21, a22, a23), (a31, a32, a33) = scaled.tolist()
    v0 = begin.volts
    v1, v2, v3 = guess_volts
    rise = emf_slope * seconds
    e1, e2, e3 = emf_volts + NODES[0] * rise, emf_volts + NODES[1] * rise, emf_volts + rise
    for _ in range(_MOST_NEWTON):
        i1, d1, _g = circuit.node_current(e1, v1)
        i2, d2, _g = circuit.node_current(e2, v2)
        i3, d3, g3 = circuit.node_current(e3, v3)
        rates, slopes = cell.rates_and_slopes(
            (side * v1 - origin_volts, side * v2 - origin_volts, side * v3 - origin_volts)
        )
        exponents = scaled @ rates
        # Between the nodes a steep rise can make an exposure negative for a moment.
        np.minimum(exponents, 0.0, out=exponents)
        shares = np.exp(exponents)
        shares *= begin.open_shares
        left1, left2, left3 = (shares @ ones).tolist()
        (s11, s12, s13), (s21, s22, s23), (s31, s32, s33) = (shares @ slopes.T).tolist()
        x1, x2, x3 = _solve3(
            farads - a11 * (coulombs * s11 - d1),
            -a12 * (coulombs * s12 - d2),
            -a13 * (coulombs * s13 - d3),
            -a21 * (coulombs * s21 - d1),
            farads - a22 * (coulombs * s22 - d2),
            -a23 * (coulombs * s23 - d3),
            -a31 * (coulombs * s31 - d1),
            -a32 * (coulombs * s32 - d2),
            farads - a33 * (coulombs * s33 - d3),
            farads * (v1 - v0) + signed * (open_total - left1) + (a11 * i1 + a12 * i2 + a13 * i3),
            farads * (v2 - v0) + signed * (open_total - left2) + (a21 * i1 + a22 * i2 + a23 * i3),
            farads * (v3 - v0) + signed * (open_total - left3) + (a31 * i1 + a32 * i2 + a33 * i3),
        )
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
    # The last correction goes into the exposures too, or charge would be lost.
    changes = np.array((-side * a31 * x1, -side * a32 * x2, -side * a33 * x3))
    exponents = exponents[2] + changes @ slopes
    np.minimum(exponents, 0.0, out=exponents)
    kept = np.exp(exponents)
    open_shares = begin.open_shares * kept
    end_rates = rates[2] - side * x3 * slopes[2]
    end = _point(
        v3,
        side,
        open_shares,
        end_rates,
        slopes[2],
        (i3 - d3 * x3, d3, g3),
        emf_slope,
        coulombs,
        circuit,
    )
    # Both quadratures differ by what the nodes extrapolate to at the begin, and miss.
    missed_rates = begin.rates - AT_BEGIN @ rates
    missed_amperes = begin.amperes - (_A0 * i1 + _A1 * i2 + _A2 * i3)
    weight = EMBEDDED * seconds
    missed = weight * (missed_amperes - signed * float(open_shares @ missed_rates))
    stiffness = farads + weight * (coulombs * float(open_shares @ slopes[2]) - d3)
    moved = open_total - float(open_shares.sum())
    return Trial(seconds, (v1, v2, v3), end, kept, moved, abs(missed) / stiffness)


def _solve3(
    a: float,
    b: float,
    c: float,
    d: float,
    e: float,
    f: float,
    g: float,
    h: float,
    i: float,
    x: float,
    y: float,
    z: float,
) -> Triple:
    """Solve three linear equations: rows (a, b, c | x), (d, e, f | y), (g, h, i | z)."""
    minor1, minor2, minor3 = e * i - f * h, f * g - d * i, d * h - e * g
    determinant = a * minor1 + b * minor2 + c * minor3
    if determinant == 0:
        return math.inf, math.inf, math.inf
    return (
        (x * minor1 + y * (c * h - b * i) + z * (b * f - c * e)) / determinant,
        (x * minor2 + y * (a * i - c * g) + z * (c * d - a * f)) / determinant,
        (x * minor3 + y * (b * g - a * h) + z * (a * e - b * d)) / determinant,
    )
