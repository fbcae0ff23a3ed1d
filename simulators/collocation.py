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

from pulsetally.simulators.cell import Cell, SwitchingLaw, rates_and_slopes
from pulsetally.simulators.circuit import Branches, Circuit, node_current

Array = NDArray[np.float64]
Triple = tuple[float, float, float]

NODES: Triple = ((4 - math.sqrt(6)) / 10, (4 + math.sqrt(6)) / 10, 1.0)


def _integrals_of_lagrange_polynomials() -> Array:
    powers = np.vander(np.array(NODES), 3, increasing=True)
    integrals = np.array([[node ** (k + 1) / (k + 1) for k in range(3)] for node in NODES])
    return np.asarray(integrals @ np.linalg.inv(powers), dtype=np.float64)


MATRIX = _integrals_of_lagrange_polynomials()
_ROW1, _ROW2, _ROW3 = (tuple(row) for row in MATRIX.tolist())
# Lagrange polynomials of the nodes, evaluated at the step's begin.
AT_BEGIN = np.linalg.inv(np.vander(np.array(NODES), 3, increasing=True))[0]
WEIGHTS_AT_BEGIN: Triple = (float(AT_BEGIN[0]), float(AT_BEGIN[1]), float(AT_BEGIN[2]))
# The embedded formula of order 3 gives the begin of the step this weight: the real
# eigenvalue of MATRIX, so that its error is filtered with a factor that is at hand.
EMBEDDED = 1 / (3 + 3 ** (2 / 3) - 3 ** (1 / 3))

# Newton's method doubles the right digits: below this correction the next one is noise.
NEWTON_TOLERANCE_VOLTS = 5e-5
MOST_NEWTON = 10
_LARGEST_CORRECTION_VOLTS = 0.5


class Equations(NamedTuple):
    """One cell and its circuit, as plain numbers.

    weights: share of each region, sum 1. switchable_coulombs: of a full reversal. frozen:
    nothing switches. deals: the cell deals domains when it has become fully down. linear:
    the node follows the EMF through resistances alone, and settles to gain of it.
    """

    law: SwitchingLaw
    weights: Array
    imprint_volts: float
    switchable_coulombs: float
    frozen: bool
    deals: bool
    farads: float
    linear: bool
    gain: float
    branches: Branches


def equations_of(cell: Cell, circuit: Circuit) -> Equations:
    """Put what a cell and its circuit are now into plain numbers."""
    law, branches = cell.law, circuit.branches
    # Settings may be whole numbers; what is compiled tells them from fractions.
    return Equations(
        law=SwitchingLaw(law.barriers, float(law.alpha), float(law.attempts_per_second)),
        weights=cell.weights,
        imprint_volts=float(cell.imprint_volts),
        switchable_coulombs=float(cell.switchable_coulombs),
        frozen=cell.frozen,
        deals=cell.description.domains is not None,
        farads=float(circuit.farads),
        linear=circuit.is_linear,
        gain=float(circuit.gain),
        branches=Branches(branches.relay_on, *map(float, branches[1:])),
    )


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
    """A step that was tried.

    solved: whether Newton's method converged; if not, the rest means nothing. seconds: its
    length. volts: node at NODES. end: the state after it. kept: exp(-S) of each region over
    the step. moved: part of the cell that switched. error_volts, missed_fraction: the embedded
    errors of the node and of the part that switched.
    """

    solved: bool
    seconds: float
    volts: Triple
    end: Point
    kept: Array
    moved: float
    error_volts: float
    missed_fraction: float


def open_shares(equations: Equations, up: Array, side: int) -> Array:
    """Return each region's share of the cell that can go up (side 1) or down (side -1)."""
    if equations.frozen:
        return np.zeros_like(up)
    return equations.weights * (1 - up) if side > 0 else equations.weights * up


def switching_rate(equations: Equations, up: Array, up_volts: float, down_volts: float) -> float:
    """Return the part of the cell that switches, 1/s, with both distances from imprint, V.

    Whatever is up goes down at the one and the other way round, as if both came at once.
    """
    if equations.frozen:
        return 0.0
    rates, _ = rates_and_slopes(equations.law, (up_volts, down_volts))
    return float((rates[0] * (1 - up) + rates[1] * up) @ equations.weights)


def point_at(
    equations: Equations,
    up: Array,
    node_volts: float,
    side: int,
    emf_volts: float,
    emf_slope: float,
) -> Point:
    """Evaluate the equations at an instant; emf_slope is de/dt, V/s."""
    distance = side * (node_volts - equations.imprint_volts)
    rates, slopes = rates_and_slopes(equations.law, (distance,))
    current = node_current(equations.branches, emf_volts, node_volts)
    shares = open_shares(equations, up, side)
    return _point(equations, node_volts, side, shares, rates[0], slopes[0], current, emf_slope)


def _point(
    equations: Equations,
    volts: float,
    side: int,
    shares: Array,
    rates: Array,
    slopes: Array,
    current: Triple,
    emf_slope: float,
) -> Point:
    flow = shares * rates
    sums = (float(flow.sum()), float(shares @ slopes), float(flow @ rates))
    return point_of(equations, volts, side, shares, rates, sums, current, emf_slope)


def point_of(
    equations: Equations,
    volts: float,
    side: int,
    shares: Array,
    rates: Array,
    sums: Triple,
    current: Triple,
    emf_slope: float,
) -> Point:
    """Put a point together; sums: over all regions, of shares times rates, slopes, rates^2."""
    amperes, siemens, emf_siemens = current
    moving, steepening, dying = sums
    coulombs = equations.switchable_coulombs
    slope = (amperes - side * coulombs * moving) / equations.farads
    # The switching current grows with the voltage and dies with what has switched.
    growth = slope * steepening - side * dying
    bend = (emf_siemens * emf_slope + siemens * slope - coulombs * growth) / equations.farads
    return Point(volts, side, shares, rates, amperes, slope, bend, moving)


def try_step(
    equations: Equations,
    begin: Point,
    seconds: float,
    guess_volts: Triple,
    emf_volts: float,
    emf_slope: float,
) -> Trial:
    """Solve one step by Newton's method.

    emf_volts, emf_slope: EMF at the step's begin, V, and its rise, V/s. guess_volts:
    first guess of the node at NODES.
    """
    side, law, branches = begin.side, equations.law, equations.branches
    origin_volts = side * equations.imprint_volts
    open_total = float(begin.open_shares.sum())
    ones = np.ones(len(begin.open_shares))
    # Negative, so that exp() takes the product as it is.
    scaled = -seconds * MATRIX
    (_, _, _), (_, _, _), (a31, a32, a33) = scaled.tolist()
    v1, v2, v3 = guess_volts
    e1, e2, e3 = emf_at_nodes(emf_volts, emf_slope * seconds)
    for _ in range(MOST_NEWTON):
        currents = (
            node_current(branches, e1, v1),
            node_current(branches, e2, v2),
            node_current(branches, e3, v3),
        )
        rates, slopes = rates_and_slopes(
            law, (side * v1 - origin_volts, side * v2 - origin_volts, side * v3 - origin_volts)
        )
        exponents = scaled @ rates
        # Between the nodes a steep rise can make an exposure negative for a moment.
        np.minimum(exponents, 0.0, out=exponents)
        shares = np.exp(exponents)
        shares *= begin.open_shares
        left1, left2, left3 = (shares @ ones).tolist()
        growth1, growth2, growth3 = (shares @ slopes.T).tolist()
        x1, x2, x3 = correction(
            equations,
            begin,
            seconds,
            (v1, v2, v3),
            currents,
            (open_total - left1, open_total - left2, open_total - left3),
            (growth1, growth2, growth3),
        )
        largest = max(abs(x1), abs(x2), abs(x3))
        if not largest < math.inf:
            return unsolved(begin, seconds, guess_volts)
        v1, v2, v3 = v1 - x1, v2 - x2, v3 - x3
        if largest < NEWTON_TOLERANCE_VOLTS:
            break
    else:
        return unsolved(begin, seconds, guess_volts)
    # The last correction goes into the exposures too, or charge would be lost.
    changes = np.array((-side * a31 * x1, -side * a32 * x2, -side * a33 * x3))
    exponents = exponents[2] + changes @ slopes
    np.minimum(exponents, 0.0, out=exponents)
    kept = np.exp(exponents)
    shares_left = begin.open_shares * kept
    end_rates = rates[2] - side * x3 * slopes[2]
    amperes, siemens, emf_siemens = currents[2]
    end = _point(
        equations,
        v3,
        side,
        shares_left,
        end_rates,
        slopes[2],
        (amperes - siemens * x3, siemens, emf_siemens),
        emf_slope,
    )
    # What the nodes extrapolate to at the begin differs from what is there.
    missed_rate = float(shares_left @ (begin.rates - AT_BEGIN @ rates))
    error_volts = embedded_error(
        equations, begin, seconds, currents, missed_rate, float(shares_left @ slopes[2])
    )
    moved = open_total - float(shares_left.sum())
    missed_fraction = EMBEDDED * seconds * abs(missed_rate)
    return Trial(True, seconds, (v1, v2, v3), end, kept, moved, error_volts, missed_fraction)


def unsolved(begin: Point, seconds: float, volts: Triple) -> Trial:
    """Return a trial that failed."""
    return Trial(False, seconds, volts, begin, begin.open_shares, 0.0, math.inf, math.inf)


def emf_at_nodes(emf_volts: float, rise_volts: float) -> Triple:
    """Return the EMF at NODES of a step over which it rises by rise_volts, V."""
    return (
        emf_volts + NODES[0] * rise_volts,
        emf_volts + NODES[1] * rise_volts,
        emf_volts + rise_volts,
    )


def correction(
    equations: Equations,
    begin: Point,
    seconds: float,
    volts: Triple,
    currents: tuple[Triple, Triple, Triple],
    gone: Triple,
    growth: tuple[Triple, Triple, Triple],
) -> Triple:
    """Return what Newton's method takes off the volts at NODES; inf without an answer.

    gone: part of the cell that has switched until each node. growth: sums over the regions
    of what is left at one node (row) times the slope of the rates at another (column).
    """
    farads, coulombs = equations.farads, equations.switchable_coulombs
    signed = begin.side * coulombs
    (v1, v2, v3), (gone1, gone2, gone3) = volts, gone
    (i1, d1, _), (i2, d2, _), (i3, d3, _) = currents
    (s11, s12, s13), (s21, s22, s23), (s31, s32, s33) = growth
    a11, a12, a13 = -seconds * _ROW1[0], -seconds * _ROW1[1], -seconds * _ROW1[2]
    a21, a22, a23 = -seconds * _ROW2[0], -seconds * _ROW2[1], -seconds * _ROW2[2]
    a31, a32, a33 = -seconds * _ROW3[0], -seconds * _ROW3[1], -seconds * _ROW3[2]
    v0 = begin.volts
    x1, x2, x3 = solve3(
        (
            farads - a11 * (coulombs * s11 - d1),
            -a12 * (coulombs * s12 - d2),
            -a13 * (coulombs * s13 - d3),
        ),
        (
            -a21 * (coulombs * s21 - d1),
            farads - a22 * (coulombs * s22 - d2),
            -a23 * (coulombs * s23 - d3),
        ),
        (
            -a31 * (coulombs * s31 - d1),
            -a32 * (coulombs * s32 - d2),
            farads - a33 * (coulombs * s33 - d3),
        ),
        (
            farads * (v1 - v0) + signed * gone1 + (a11 * i1 + a12 * i2 + a13 * i3),
            farads * (v2 - v0) + signed * gone2 + (a21 * i1 + a22 * i2 + a23 * i3),
            farads * (v3 - v0) + signed * gone3 + (a31 * i1 + a32 * i2 + a33 * i3),
        ),
    )
    largest = max(abs(x1), abs(x2), abs(x3))
    damp = _LARGEST_CORRECTION_VOLTS / largest if largest > _LARGEST_CORRECTION_VOLTS else 1.0
    if not largest < math.inf:
        return math.inf, math.inf, math.inf
    return damp * x1, damp * x2, damp * x3


def embedded_error(
    equations: Equations,
    begin: Point,
    seconds: float,
    currents: tuple[Triple, Triple, Triple],
    missed_rate: float,
    growth: float,
) -> float:
    """Return the embedded error of a step, V.

    missed_rate: by what the rates at the nodes, extrapolated to the begin, miss those there,
    summed over what is left of each region, 1/s. growth: the same sum of the slopes at the end.
    """
    weight = EMBEDDED * seconds
    coulombs = equations.switchable_coulombs
    found_amperes = (
        WEIGHTS_AT_BEGIN[0] * currents[0][0]
        + WEIGHTS_AT_BEGIN[1] * currents[1][0]
        + WEIGHTS_AT_BEGIN[2] * currents[2][0]
    )
    missed = weight * (begin.amperes - found_amperes - begin.side * coulombs * missed_rate)
    return abs(missed) / (equations.farads + weight * (coulombs * growth - currents[2][1]))


def solve3(first: Triple, second: Triple, third: Triple, right: Triple) -> Triple:
    """Solve three linear equations, given the rows and the right side; inf if singular."""
    (a, b, c), (d, e, f), (g, h, i), (x, y, z) = first, second, third, right
    minor1, minor2, minor3 = e * i - f * h, f * g - d * i, d * h - e * g
    determinant = a * minor1 + b * minor2 + c * minor3
    if determinant == 0:
        return math.inf, math.inf, math.inf
    return (
        (x * minor1 + y * (c * h - b * i) + z * (b * f - c * e)) / determinant,
        (x * minor2 + y * (a * i - c * g) + z * (c * d - a * f)) / determinant,
        (x * minor3 + y * (b * g - a * h) + z * (a * e - b * d)) / determinant,
    )
