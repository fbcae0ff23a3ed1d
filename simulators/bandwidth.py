"""Limit the bandwidth of courses that are straight between their knots: one pole, exactly.

A resistance and a capacitance: lag dy/dt = x - y. Over a straight piece x = x0 + s t this has
the closed form y = x0 + s (t - lag) + (y0 - x0 + s lag) exp(-t/lag), so that nothing depends
on how densely the course or its record is sampled.
"""

import math
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# What was this many time constants ago no longer counts: exp(-40) is 4e-18.
FORGOTTEN_LAGS = 40.0
_NEGLIGIBLE = math.exp(-FORGOTTEN_LAGS)
_FEW_KNOTS = 12


def knot_values(times: Array, signals: Array, begin: Array, lag_seconds: float) -> Array:
    """Return what the pole makes of courses at each of their knots.

    times: of the knots, s, never falling; the same time twice is a jump. signals: shape
    (courses, knots). begin: the outputs at the first knot, one for each course.
    lag_seconds: time constant, above 0.
    """
    lags = np.diff(times) / lag_seconds
    kept = np.exp(-lags)
    # (1 - exp(-u))/u, which is 1 at a jump.
    mean_kept = np.ones_like(lags)
    np.divide(-np.expm1(-lags), lags, out=mean_kept, where=lags > 0)
    added = signals[:, 1:] - signals[:, :-1] * kept - np.diff(signals, axis=1) * mean_kept
    values = np.empty_like(signals)
    values[:, 0] = begin
    if not len(lags):
        return values
    added[:, 0] += kept[0] * begin
    kept[0] = 0.0
    # y[k+1] = kept[k] y[k] + added[k], for all k at once: after each turn every element
    # holds the sum over twice as many knots before it.
    reach = 1
    while reach < len(kept) and float(kept[reach:].max()) > _NEGLIGIBLE:
        added[:, reach:] = added[:, reach:] + kept[reach:] * added[:, :-reach]
        kept[reach:] = kept[reach:] * kept[:-reach]
        reach *= 2
    values[:, 1:] = added
    return values


def last_values(
    times: Array, signals: tuple[Array, ...], begin: Array, lag_seconds: float
) -> Array:
    """Return what the pole makes of courses at their last knot; as knot_values, but quicker."""
    length = float(times[-1] - times[-2])
    if length > FORGOTTEN_LAGS * lag_seconds:
        # Most stretches end at rest or on a slow piece, far from anything that is remembered.
        share = lag_seconds / length
        return np.array([signal[-1] - (signal[-1] - signal[-2]) * share for signal in signals])
    first = int(np.searchsorted(times, times[-1] - FORGOTTEN_LAGS * lag_seconds)) - 1
    if first > 0:
        # Whatever it was, it is forgotten at the end.
        begin = np.array([signal[first] for signal in signals])
    first = max(first, 0)
    if len(times) - first > _FEW_KNOTS:
        found = knot_values(
            times[first:], np.stack([signal[first:] for signal in signals]), begin, lag_seconds
        )
        return found[:, -1]
    instants = times[first:].tolist()
    lags = [(after - before) / lag_seconds for before, after in pairwise(instants)]
    factors = [(math.exp(-u), -math.expm1(-u) / u if u > 0 else 1.0) for u in lags]
    last = begin.tolist()
    for place, signal in enumerate(signals):
        course, value = signal[first:].tolist(), last[place]
        for x0, x1, (kept, mean_kept) in zip(course, course[1:], factors, strict=False):
            value = kept * (value - x0) + x1 - (x1 - x0) * mean_kept
        last[place] = value
    return np.array(last)


def values_at(
    instants: Array, times: Array, signals: Array, knots: Array, lag_seconds: float
) -> Array:
    """Return what the pole makes of courses at instants within them.

    instants: s, ascending, between the first and the last of times. knots: what
    knot_values found. Return shape (courses, instants).
    """
    place = np.searchsorted(times, instants, side="right") - 1
    np.clip(place, 0, len(times) - 2, out=place)
    length = times[place + 1] - times[place]
    into = np.minimum(instants - times[place], length)
    decayed = np.exp(-into / lag_seconds)
    found = np.empty((len(signals), len(instants)))
    for signal, knot, out in zip(signals, knots, found, strict=True):
        begin = signal[place]
        slope = np.zeros_like(length)
        np.divide(signal[place + 1] - begin, length, out=slope, where=length > 0)
        lagging = slope * lag_seconds
        out[:] = begin + slope * into - lagging + (knot[place] - begin + lagging) * decayed
    return found
