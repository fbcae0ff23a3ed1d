"""Tell from a small pulse whether a cell is there: open, short or good.

Behind a series resistance the node charges as an exponential. Its end says whether something
conducts across the cell, its time constant how much capacitance hangs there: without a cell it
is the probe's alone.
"""

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from pulsetally.sequencer.analysis.pulses import Samples, half_crossings

# Below this share of what it should reach, the node is held down by something that conducts.
_SHORT_SHARE = 0.2
# A time constant below twice that of the bare probe: there is no cell worth the name.
_OPEN_FACTOR = 2.0
_LEAST_SAMPLES = 20


class ContactUnclear(ValueError):
    """A record doesn't allow a judgement."""


class Verdict(StrEnum):
    """What is at the end of the wires."""

    GOOD = "good"
    OPEN = "open"
    SHORT = "short"


@dataclass(frozen=True, slots=True, kw_only=True)
class ContactResult:
    """Say what a small pulse found.

    final_volts: what the node goes to. tau: its time constant, seconds; 0 where it is too fast
    to be seen. expected_tau: from wiring and cell, seconds; None where the bench doesn't tell.
    resolution: the shortest time constant that this record could show, seconds.
    """

    verdict: Verdict
    final_volts: float
    tau: float
    expected_tau: float | None
    resolution: float

    @property
    def note(self) -> str:
        """Return a sentence where the time constant is far from what was expected."""
        expected = self.expected_tau
        if self.verdict is not Verdict.GOOD or expected is None:
            return ""
        ratio = self.tau / expected
        if 0.5 <= ratio <= 2:
            return ""
        return (
            f"the time constant is {ratio:.2g} times the one expected from wiring and cell:"
            " look at series resistance, area, thickness and permittivity in the bench file"
        )


def judge_contact(
    times: Samples,
    source: Samples,
    node: Samples,
    *,
    base: float,
    level: float,
    node_base: float,
    ramp: float,
    reached_volts: float,
    probe_tau: float,
    expected_tau: float | None,
) -> ContactResult:
    """Judge a pulse that is too small to switch anything.

    base, level: volts of the source. ramp: seconds of one whole edge. node_base: where the node
    is before the pulse; reached_volts: where it goes with a cell that doesn't conduct.
    probe_tau: time constant of wiring and probe alone, seconds. The exponential is fitted by
    least squares: its end value exactly, its time constant by search. Raises ContactUnclear or
    PulseUnreadable.
    """
    begin, end = half_crossings(times, source, base, level)
    inside = (times > begin + ramp / 2) & (times < end - ramp / 2)
    elapsed, volts = times[inside] - begin, node[inside] - node_base
    if elapsed.size < _LEAST_SAMPLES:
        raise ContactUnclear(
            f"only {elapsed.size} samples lie on the pulse; use a longer pulse or shorter edges"
        )
    interval = float(times[1] - times[0])
    resolution = max(2 * interval, ramp)
    tail = float(np.mean(volts[-max(5, elapsed.size // 10) :]))
    if abs(tail) < _SHORT_SHARE * abs(reached_volts - node_base):
        return ContactResult(
            verdict=Verdict.SHORT,
            final_volts=node_base + tail,
            tau=0.0,
            expected_tau=expected_tau,
            resolution=resolution,
        )
    final, tau = _fit_charge(elapsed, volts, resolution, float(elapsed[-1]))
    if tau <= resolution and expected_tau is not None and expected_tau <= 2 * resolution:
        raise ContactUnclear(
            f"with this wiring even a good cell has a time constant of {expected_tau:.2g} s, and"
            f" the record shows none below {resolution:.2g} s; use a shorter pulse and edges"
        )
    is_open = tau <= max(_OPEN_FACTOR * probe_tau, resolution)
    return ContactResult(
        verdict=Verdict.OPEN if is_open else Verdict.GOOD,
        final_volts=node_base + final,
        tau=0.0 if tau <= resolution else tau,
        expected_tau=expected_tau,
        resolution=resolution,
    )


def _fit_charge(
    elapsed: Samples, volts: Samples, shortest: float, longest: float
) -> tuple[float, float]:
    """Fit final (1 - exp(-t/tau)); return final and tau, tau within a factor 10 of the bounds."""
    from scipy.optimize import minimize_scalar

    def shape(log_tau: float) -> Samples:
        return -np.expm1(-elapsed / math.exp(log_tau))

    def misfit(log_tau: float) -> float:
        curve = shape(log_tau)
        final = float(curve @ volts) / float(curve @ curve)
        residual = volts - final * curve
        return float(residual @ residual)

    bounds = math.log(shortest / 10), math.log(longest * 10)
    found = minimize_scalar(misfit, bounds=bounds, method="bounded", options={"xatol": 1e-4})
    if not found.success:
        raise ContactUnclear(
            "the time constant could not be fitted; use a longer pulse, or look at its record"
        )
    curve = shape(float(found.x))
    return float(curve @ volts) / float(curve @ curve), math.exp(float(found.x))
