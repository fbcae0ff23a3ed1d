"""The charge that went into a cell, from two channels of a record, and how sure it is.

Times are seconds, voltages volts, charges coulombs; arrays are 1-D and of equal length. The
channels' offsets differ by more than the current's drop across the series resistance late in a
pulse, and an integral gathers them: the record must begin with the cell at rest, where the
difference between the channels shows the offsets alone.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.sequencer.analysis.pulses import Samples

_LEAST_REST_SAMPLES = 8
# At rest the source may wander by this share of what it does in the whole record.
_MOST_REST_SHARE = 0.25
# Neighbouring samples' noise may be alike; the means of this many blocks tell.
_BLOCKS = 10


class SwitchingUnclear(ValueError):
    """A record doesn't tell what was asked of it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ChargeNoise:
    """Say how sure an integrated charge is, by what makes it unsure.

    random: of the current's noise, in coulombs per root second. rest_amperes, step_amperes:
    standard uncertainties of the offset that was taken off, from noise and from the digitizer's
    steps. step_charge: what the latter gathers while the channels are away from their rest, in
    coulombs; back on the same code the error is the same and nothing is gathered.
    rounding: of the steps away from the rest, where noise doesn't blur them, in coulombs.
    edges: of edges that fall between samples, in coulombs.
    node_step, node_noise: one step of the node's digitizer (0 where none shows) and one sample's
    standard deviation, in volts.
    """

    random: float
    rest_amperes: float
    step_amperes: float
    step_charge: float
    rounding: float
    edges: float
    node_step: float
    node_noise: float

    @property
    def offset_amperes(self) -> float:
        """Return the standard uncertainty of the offset that was taken off, in amperes."""
        return math.hypot(self.rest_amperes, self.step_amperes)

    def after(self, seconds: float) -> float:
        """Return the charge's standard uncertainty this long after the rest, in coulombs."""
        return math.hypot(
            self.random * math.sqrt(seconds),
            self.rest_amperes * seconds,
            self.step_charge,
            self.rounding,
            self.edges,
        )

    def closed(self, seconds: float) -> float:
        """Return that of a difference across half of a record that was closed, in coulombs.

        Where a straight drift is taken off so that both ends agree, the offset drops out and
        the noise is a bridge between the ends: between two points half the time apart it
        gathers a quarter of the whole variance.
        """
        return math.hypot(self.random * math.sqrt(seconds / 4), self.rounding, self.edges)


def cell_charge(
    times: Samples,
    source_volts: Samples,
    node_volts: Samples,
    *,
    series_ohms: float,
    probe_ohms: float,
    probe_farads: float,
    before: float,
) -> Samples:
    """Return the charge that went into the cell since the first sample, in coulombs.

    times: seconds, rising, of shape (points,), as is what comes back; they need not be evenly
    spaced. source_volts, node_volts: on the two sides of the series resistance series_ohms;
    nothing else may lie between. probe_ohms (inf for none), probe_farads: across the cell; what
    they take is not the cell's. before: seconds on the same clock; until then the cell rests.

    The integral of (source - node)/series_ohms - node/probe_ohms - probe_farads dnode/dt by the
    trapezoid rule. The mean current over the rest is taken off: what the channels' offsets make
    (and a leakage current at rest; a loop's closing finds that again). Errors of gain stay in.
    Raises SwitchingUnclear where the rest is too short or not at rest, ValueError for arrays and
    resistances that can't be.
    """
    _check_circuit(series_ohms, probe_ohms, probe_farads)
    resting = _resting(times, source_volts, node_volts, before)
    current = _resistive_current(source_volts, node_volts, series_ohms, probe_ohms)
    current = current - np.mean(current[:resting])
    taken = running_integral(current, times)
    probe: Samples = probe_farads * (node_volts - node_volts[0])
    return taken - probe


def charge_noise(
    times: Samples,
    source_volts: Samples,
    node_volts: Samples,
    *,
    series_ohms: float,
    probe_ohms: float,
    before: float,
    steps: tuple[float, float] | None = None,
) -> ChargeNoise:
    """Estimate how sure the charge of the same record is; arguments and errors are the same.

    The noise is that of the rest. steps: one code of the source's and of the node's digitizer, in
    volts; None: told from the closest values of a channel that shows few of them, which is too
    much where it shows next to none. As long as a channel stays on one code, its rounding error
    (a uniform distribution, JCGM 100:2008, 4.3.7) is one and the same and gathers with time.
    """
    _check_circuit(series_ohms, probe_ohms, 0.0)
    resting = _resting(times, source_volts, node_volts, before)
    current = _resistive_current(source_volts, node_volts, series_ohms, probe_ohms)
    interval = float(times[-1] - times[0]) / (times.size - 1)
    variance = _long_run_variance(current[:resting])
    rounding_variance = offset_variance = gathered_variance = 0.0
    if steps is None:
        steps = digitizer_step(source_volts), digitizer_step(node_volts)
    for volts, step in zip((source_volts, node_volts), steps, strict=True):
        bias = _step_bias(volts[:resting], step)
        away = ~np.isin(volts[resting:], np.unique(volts[:resting]))
        runs = _run_seconds(volts[resting:], away, interval)
        rounding_variance += step**2 / 12 * float(runs @ runs)
        offset_variance += bias**2
        gathered_variance += (bias * interval * np.count_nonzero(away)) ** 2
    jump = float(np.max(np.abs(np.diff(current))))
    return ChargeNoise(
        random=math.sqrt(variance * interval),
        rest_amperes=math.sqrt(variance / resting),
        step_amperes=math.sqrt(offset_variance) / series_ohms,
        step_charge=math.sqrt(gathered_variance) / series_ohms,
        rounding=math.sqrt(rounding_variance) / series_ohms,
        # An edge is anywhere within its interval, and a pulse has two.
        edges=jump * interval / math.sqrt(6),
        node_step=steps[1],
        node_noise=float(np.std(node_volts[:resting], ddof=1)),
    )


def digitizer_step(volts: Samples) -> float:
    """Return the step between a channel's codes, in volts; 0 where no steps show."""
    values = np.unique(volts)
    if values.size < 2 or 2 * values.size > volts.size:
        return 0.0
    return float(np.min(np.diff(values)))


def _resistive_current(
    source: Samples, node: Samples, series_ohms: float, probe_ohms: float
) -> Samples:
    return (source - node) / series_ohms - node / probe_ohms


def _check_circuit(series_ohms: float, probe_ohms: float, probe_farads: float) -> None:
    if not 0 < series_ohms < math.inf:
        raise ValueError(f"series_ohms is {series_ohms}; it must be above 0 and finite")
    if not probe_ohms > 0:
        raise ValueError(f"probe_ohms is {probe_ohms}; it must be above 0, inf for no probe")
    if not 0 <= probe_farads < math.inf:
        raise ValueError(f"probe_farads is {probe_farads}; it must be 0 or more and finite")


def _resting(times: Samples, source: Samples, node: Samples, before: float) -> int:
    """Check a record; return how many of its samples lie in the rest at its begin."""
    check_record(times, source_volts=source, node_volts=node)
    resting = int(np.searchsorted(times, before, side="left"))
    if resting < _LEAST_REST_SAMPLES:
        raise SwitchingUnclear(
            f"{resting} samples lie before {before:.6g} s, where the cell rests;"
            f" {_LEAST_REST_SAMPLES} are needed to take the channels' offsets off:"
            " record longer before the pulse"
        )
    if resting == times.size:
        raise SwitchingUnclear(f"no sample lies after {before:.6g} s, where the pulse begins")
    moved = float(np.ptp(source[:resting]))
    if moved > _MOST_REST_SHARE * float(np.ptp(source)):
        raise SwitchingUnclear(
            f"the source moves by {moved:.3g} V before {before:.6g} s, of"
            f" {float(np.ptp(source)):.3g} V in the whole record: the pulse begins earlier, or"
            " there is none"
        )
    return resting


def running_integral(ordinate: Samples, times: Samples) -> Samples:
    """Return the integral from the first sample to each, by the trapezoid rule."""
    strips = (ordinate[1:] + ordinate[:-1]) / 2 * np.diff(times)
    integral: Samples = np.concatenate(([0.0], np.cumsum(strips)))
    return integral


def check_record(times: Samples, **channels: Samples) -> None:
    """Check that times rise and that every channel has a finite number for each.

    Raises ValueError, naming the array.
    """
    if times.ndim != 1 or times.size < 2:
        raise ValueError(f"times has the shape {times.shape}; it must have one dimension")
    for name, array in (("times", times), *channels.items()):
        if array.shape != times.shape:
            raise ValueError(f"{name} has the shape {array.shape}, times has {times.shape}")
        if not np.isfinite(array).all():
            raise ValueError(f"{name} holds something that is not a finite number")
    if not (np.diff(times) > 0).all():
        raise ValueError("times don't rise from each sample to the next")


def _long_run_variance(current: Samples) -> float:
    """Return the variance a sample that gives the right one for sums of many samples."""
    variance = float(np.var(current, ddof=1))
    length = current.size // _BLOCKS
    if length < 2:
        return variance
    blocks = current[: length * _BLOCKS].reshape(_BLOCKS, length).mean(axis=1)
    return max(variance, length * float(np.var(blocks, ddof=1)))


def _run_seconds(volts: Samples, counted: NDArray[np.bool_], interval: float) -> Samples:
    """Return how long each run of equal samples lasts, in seconds; 0 for those not counted."""
    ends = np.flatnonzero(np.diff(volts) != 0)
    firsts = np.concatenate(([0], ends + 1))
    lengths = np.diff(np.append(firsts, volts.size))
    return interval * np.where(counted[firsts], lengths, 0).astype(np.float64)


def _step_bias(volts: Samples, step: float) -> float:
    """Return the standard uncertainty that rounding leaves on the mean of a constant, volts.

    Noise blurs the steps: what is left of the rounding error falls as exp(-2 pi^2 (s/step)^2)
    with its standard deviation s (closed form: the first harmonic of a sawtooth, averaged over
    a normal distribution). On one or two codes the noise is too small to be told.
    """
    if step == 0:
        return 0.0
    if np.unique(volts).size <= 2:
        return step / math.sqrt(12)
    blurred = max(float(np.var(volts)) / step**2 - 1 / 12, 0.0)
    return step / math.sqrt(12) * math.exp(-2 * math.pi**2 * blurred)
