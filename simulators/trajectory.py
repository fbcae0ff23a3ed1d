"""Sample what the solver found, densely enough to draw straight lines between the samples."""

import math

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.collocation import NODES, Triple

Array = NDArray[np.float64]

# A straight line between two samples leaves the curve by at most this, V.
CHORD_VOLTS = 2e-5
_MOST_SAMPLES = 4000


def _hermite_inverse() -> Array:
    """Invert the conditions on a quintic: values at 0 and NODES, slopes at 0 and 1."""
    rows = [[float(place) ** k for k in range(6)] for place in (0.0, *NODES)]
    rows += [[0.0, 1.0, 0.0, 0.0, 0.0, 0.0], [float(k) for k in range(6)]]
    return np.linalg.inv(np.array(rows))


_INVERSE = _hermite_inverse()
# Slope at the begin of the quartic that takes every condition but that slope.
_QUARTIC_INVERSE = np.linalg.inv(
    np.array(
        [[float(place) ** k for k in range(5)] for place in (0.0, *NODES)]
        + [[float(k) for k in range(5)]]
    )
)[1].tolist()
_PLACES = np.linspace(0, 1, 9)
_CURVATURE = np.array(
    [[k * (k - 1) * place ** (k - 2) if k > 1 else 0.0 for k in range(6)] for place in _PLACES]
)
# The quintic and the quartic differ by a multiple of this polynomial.
_BUMP = max(
    abs(x * (x - NODES[0]) * (x - NODES[1]) * (x - 1) ** 2) for x in np.linspace(0, 1, 401)
) / (NODES[0] * NODES[1])


def dense_error(
    seconds: float, begin_volts: float, begin_slope: float, stage_volts: Triple, end_slope: float
) -> float:
    """Return how far the step's polynomial changes when one condition is left out, V."""
    q = _QUARTIC_INVERSE
    quartic_slope = (
        q[0] * begin_volts
        + q[1] * stage_volts[0]
        + q[2] * stage_volts[1]
        + q[3] * stage_volts[2]
        + q[4] * end_slope * seconds
    )
    return float(_BUMP * abs(seconds * begin_slope - quartic_slope))


def sample_step(
    seconds: float, begin_volts: float, begin_slope: float, stage_volts: Triple, end_slope: float
) -> tuple[Array, Array]:
    """Return times after the step's begin (s, its end included) and node voltages there."""
    conditions = np.array([begin_volts, *stage_volts, begin_slope * seconds, end_slope * seconds])
    coefficients = _INVERSE @ conditions
    curvature = float(np.abs(_CURVATURE @ coefficients).max())
    count = min(math.ceil(math.sqrt(curvature / (8 * CHORD_VOLTS))) + 1, _MOST_SAMPLES)
    places = np.arange(1, count + 1) / count
    volts = np.full(count, coefficients[5])
    for coefficient in coefficients[4::-1].tolist():
        volts *= places
        volts += coefficient
    volts[-1] = stage_volts[2]
    return places * seconds, volts


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
