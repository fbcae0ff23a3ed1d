"""Sample what the solver found, densely enough to draw straight lines between the samples."""

import math

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.collocation import NODES, Point, Trial, Triple

Array = NDArray[np.float64]

# A straight line between two samples leaves the curve by at most this, V.
CHORD_VOLTS = 2e-5
_MOST_SAMPLES = 4000
_SURE_VOLTS = 1e-7
_CURVATURE_PLACES = (0.0, 0.2, 0.4, 0.6, 0.8, 1.0)


# Coefficients of x, x^2, x^3 of the cubic through the begin and NODES.
_CUBIC1, _CUBIC2, _CUBIC3 = (
    tuple(row)
    for row in np.linalg.inv(np.array([[node, node**2, node**3] for node in NODES])).tolist()
)

# Coefficients of 1, x, ... x^5, in V, with x from 0 to 1 over a step.
Quintic = tuple[float, float, float, float, float, float]


def quintic_of(begin: Point, trial: Trial) -> Quintic:
    """Return the quintic with a step's values, slopes and bends at both of its ends.

    The ends are of order 5, the inner nodes only of order 3, so this is the better curve.
    """
    seconds, end = trial.seconds, trial.end
    c0, c1, c2 = begin.volts, seconds * begin.slope, seconds**2 * begin.bend / 2
    values = end.volts - c0 - c1 - c2
    slopes = seconds * end.slope - c1 - 2 * c2
    bends = (seconds**2 * end.bend - 2 * c2) / 2
    return (
        c0,
        c1,
        c2,
        10 * values - 4 * slopes + bends,
        -15 * values + 7 * slopes - 2 * bends,
        6 * values - 3 * slopes + bends,
    )


def value(quintic: Quintic, place: float) -> float:
    """Return a step's curve at a place from 0, its begin, to 1, V."""
    c0, c1, c2, c3, c4, c5 = quintic
    return c0 + place * (c1 + place * (c2 + place * (c3 + place * (c4 + place * c5))))


def dot(one: Triple, other: Triple) -> float:
    """Return the scalar product."""
    return one[0] * other[0] + one[1] * other[1] + one[2] * other[2]


def curve_of(begin: Point, trial: Trial) -> tuple[Quintic, float]:
    """Return the curve to draw for a step, and how far it may be off, V."""
    quintic = quintic_of(begin, trial)
    off_volts = max(
        abs(value(quintic, NODES[0]) - trial.volts[0]),
        abs(value(quintic, NODES[1]) - trial.volts[1]),
    )
    # Over a step much longer than the node's own time, rounding alone spoils slopes and
    # bends; the nodes themselves are then as good as the embedded error says.
    if off_volts > CHORD_VOLTS and trial.error_volts < _SURE_VOLTS:
        x1, x2, x3 = trial.volts
        moves = (x1 - begin.volts, x2 - begin.volts, x3 - begin.volts)
        c1, c2, c3 = dot(_CUBIC1, moves), dot(_CUBIC2, moves), dot(_CUBIC3, moves)
        return (begin.volts, c1, c2, c3, 0.0, 0.0), trial.error_volts
    return quintic, off_volts


def extrapolate(quintic: Quintic, ratio: float) -> Triple:
    """Continue a step's quintic to NODES of a next step that is ratio times as long, V."""
    return (
        value(quintic, 1 + ratio * NODES[0]),
        value(quintic, 1 + ratio * NODES[1]),
        value(quintic, 1 + ratio * NODES[2]),
    )


def samples_of(quintic: Quintic) -> int:
    """Return how many equal parts of a step a curve needs to be drawn by straight lines."""
    _, _, c2, c3, c4, c5 = quintic
    curvature = 0.0
    for place in _CURVATURE_PLACES:
        bend = abs(2 * c2 + place * (6 * c3 + place * (12 * c4 + place * 20 * c5)))
        curvature = max(curvature, bend)
    return min(math.ceil(math.sqrt(curvature / (8 * CHORD_VOLTS))) + 1, _MOST_SAMPLES)


def draw_step(
    quintic: Quintic,
    seconds: float,
    begin_seconds: float,
    count: int,
    place: int,
    times: Array,
    volts: Array,
) -> None:
    """Write the ends of so many equal parts of a step, and the node voltages there.

    They go into times (s) and volts from place on.
    """
    c0, c1, c2, c3, c4, c5 = quintic
    shares: Array = np.arange(1, count + 1, dtype=np.float64) * (1 / count)
    shares[-1] = 1.0
    curve = c5 * shares
    for coefficient in (c4, c3, c2, c1):
        curve += coefficient
        curve *= shares
    curve += c0
    times[place : place + count] = begin_seconds + seconds * shares
    volts[place : place + count] = curve


def decay_times(seconds: float, tau_seconds: float, decaying_volts: float) -> Array:
    """Return times (s, the end included) that follow an exponential within CHORD_VOLTS."""
    amplitude = abs(decaying_volts)
    if amplitude <= CHORD_VOLTS or math.isinf(tau_seconds):
        return np.array([seconds])
    # The chord error goes with the second derivative, so samples get as rare as
    # exp(-t/2 tau) does; share runs linearly over that.
    whole = -math.expm1(-seconds / (2 * tau_seconds))
    count = math.ceil(math.sqrt(amplitude / (2 * CHORD_VOLTS)) * whole) + 1
    shares = whole * np.arange(1, count) / count
    times = -2 * tau_seconds * np.log1p(-shares)
    return np.append(times[times < seconds], seconds)
