"""Reduce the record of pulses: where a flat top ends, and the end voltage.

Times are seconds from the trigger, voltages are volts; arrays are 1-D and of equal length.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Samples = NDArray[np.float64]

# The share of the flat top that the end voltage is fitted to. The node still moves there, by
# an exponential, so a parabola is fitted and taken at the end: over a fifth of a flat top of
# 1.5 time constants its bias stays below 1 mV, and more samples would add more bias than they
# take noise away.
_FITTED_SHARE = 0.2
_LEAST_SAMPLES = 6


class PulseUnreadable(ValueError):
    """A record doesn't show the pulse it should."""


@dataclass(frozen=True, slots=True, kw_only=True)
class EndVoltage:
    """Give the node's voltage at the end of a pulse's flat top.

    volts: the estimate; uncertainty: its standard uncertainty from the samples' scatter, in
    volts; samples: how many were fitted; seconds: where the flat top ends, from the trigger.
    """

    volts: float
    uncertainty: float
    samples: int
    seconds: float


def half_crossings(
    times: Samples, source: Samples, base: float, level: float
) -> tuple[float, float]:
    """Find when the source's voltage passes half its pulse, up and down again, in seconds.

    base, level: volts before and on the pulse. The transitions' 50 % reference level and the
    linear interpolation between samples follow IEEE Std 181-2011 (5.3; clause from memory).
    Raises PulseUnreadable when the record doesn't hold both transitions.
    """
    inside = (source - (base + level) / 2) * math.copysign(1.0, level - base)
    on = np.flatnonzero(inside > 0)
    if on.size == 0:
        raise PulseUnreadable("the source channel shows no pulse")
    first, last = int(on[0]), int(on[-1])
    if first == 0 or last == inside.size - 1:
        raise PulseUnreadable("the record doesn't hold the whole pulse")

    def between(left: int) -> float:
        share = inside[left] / (inside[left] - inside[left + 1])
        return float(times[left] + share * (times[left + 1] - times[left]))

    return between(first - 1), between(last)


def end_voltage(
    times: Samples,
    source: Samples,
    node: Samples,
    *,
    base: float,
    level: float,
    ramp: float,
    seen: tuple[float, float] = (-math.inf, math.inf),
) -> EndVoltage:
    """Estimate the node's voltage at the end of the flat top.

    base, level: volts of the source before and on the pulse. ramp: seconds of one whole edge.
    seen: lowest and highest volts that the digitizer can tell of the node.
    A parabola is fitted by least squares to the last fifth of the flat top. Raises
    PulseUnreadable when the pulse isn't there or has too few samples.
    """
    begin, end = half_crossings(times, source, base, level)
    begin, end = begin + ramp / 2, end - ramp / 2
    start = end - _FITTED_SHARE * (end - begin)
    left, right = np.searchsorted(times, (start, end), side="left")
    count = int(right - left)
    if count < _LEAST_SAMPLES:
        raise PulseUnreadable(
            f"{count} samples lie on the last fifth of the flat top; {_LEAST_SAMPLES} are needed"
        )
    fitted = node[left:right]
    if not (np.isfinite(fitted).all() and seen[0] < fitted.min() and fitted.max() < seen[1]):
        raise PulseUnreadable(
            "the node leaves the digitizer's range; compare probe, series resistance and clamp in"
            " the bench file with the table"
        )
    # The variable runs from -1 at the window's start to 0 at its end, where the value is wanted.
    position = (times[left:right] - end) / (end - start)
    design = np.column_stack([np.ones(count), position, position**2])
    solution, _, _, _ = np.linalg.lstsq(design, fitted, rcond=None)
    residual = fitted - design @ solution
    variance = float(residual @ residual) / (count - 3)
    share = float(np.linalg.inv(design.T @ design)[0, 0])
    return EndVoltage(
        volts=float(solution[0]),
        uncertainty=math.sqrt(variance * share),
        samples=count,
        seconds=end,
    )


def train_ends(
    times: Samples,
    source: Samples,
    node: Samples,
    *,
    base: float,
    level: float,
    ramp: float,
    count: int,
    period: float,
    seen: tuple[float, float] = (-math.inf, math.inf),
) -> tuple[EndVoltage, ...]:
    """Estimate the end voltage of each of count pulses in one record, period seconds apart.

    The record's time 0 is where the first leading edge passes 50 %. Everything else as for
    end_voltage, whose errors it raises with the number of the pulse.
    """
    first, last = half_crossings(times, source, base, level)
    # Halfway between two pulses, as far as the generator keeps the period it was told.
    width = last - first - (count - 1) * period
    lead = (period - width) / 2
    found = []
    for place in range(count):
        begin = first + place * period - lead
        left, right = np.searchsorted(times, (begin, begin + period), side="left")
        part = slice(int(left), int(right))
        try:
            found.append(
                end_voltage(
                    times[part],
                    source[part],
                    node[part],
                    base=base,
                    level=level,
                    ramp=ramp,
                    seen=seen,
                )
            )
        except PulseUnreadable as error:
            raise PulseUnreadable(f"pulse {place + 1} of the train: {error}") from error
    return tuple(found)
