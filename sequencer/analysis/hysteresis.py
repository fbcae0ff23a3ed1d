"""Reduce a hysteresis loop: remanent charge, coercive voltages, imprint, capacitance, leakage.

Charges are coulombs, voltages volts at the node, times seconds; arrays are 1-D and of equal
length.
"""

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pulsetally.sequencer.analysis.charge import (
    ChargeNoise,
    SwitchingUnclear,
    check_record,
    running_integral,
)
from pulsetally.sequencer.analysis.pulses import Samples

# The share of the extreme node voltage beyond which a branch that comes from saturation is taken
# as a straight line.
_STRAIGHT_SHARE = 0.5
# Near the tips the branches must have met, to this share of the opening.
_TIP_SHARE = 0.9
_MOST_UNMET_SHARE = 0.05
_CLOSED_SHARE = 0.05
_LEAST_OPENING_SHARE = 0.01
# The samples about 0 V, and about half the switched charge, that a curve is laid through.
_ZERO_SHARE = 0.05
_HALF_SHARE = 0.1
_LEAST_FITTED = 8
_BINS = 40
_SMOOTHING = 400
# Leakage of fewer standard uncertainties can't be told from none, and isn't taken off.
_TELLING = 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopResult:
    """Describe a hysteresis loop.

    remanent_coulombs: half the opening at 0 V, P_r A. coercive_up_volts, coercive_down_volts:
    node voltages at which half of the charge has switched, going up and coming down;
    imprint_volts: their mean. linear_farads: slope of the saturated branches.
    leakage_siemens: of the cell, with errors of the channels' gain; where it is less than three
    times its uncertainty, none was taken off. drift_coulombs: by how much the loop stood open
    at its end before it was closed. Each uncertainty is a standard uncertainty; that of the
    voltages holds for both and, for imprint_volts, with the channel's offset in it.
    node_volts, coulombs: the loop without drift and leakage, its saturated branches as far
    above 0 as below, from the end of the rest on.
    """

    remanent_coulombs: float
    remanent_uncertainty: float
    coercive_up_volts: float
    coercive_down_volts: float
    imprint_volts: float
    volts_uncertainty: float
    linear_farads: float
    leakage_siemens: float
    leakage_uncertainty: float
    drift_coulombs: float
    node_volts: Samples = field(compare=False, repr=False)
    coulombs: Samples = field(compare=False, repr=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Branches:
    """Where a triangle's record turns: samples on the straight branches and the two ways."""

    down_branch: NDArray[np.intp]
    up_branch: NDArray[np.intp]
    end: NDArray[np.intp]
    rising: NDArray[np.intp]
    falling: NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Straight:
    """The saturated branches: charge = level + farads v + siemens (volt-seconds) + drift t."""

    up_coulombs: float
    down_coulombs: float
    farads: float
    drift_amperes: float
    siemens: float
    siemens_uncertainty: float
    covariance: NDArray[np.float64]

    @property
    def opening(self) -> float:
        return self.up_coulombs - self.down_coulombs


def loop_of(
    times: Samples,
    node_volts: Samples,
    charge: Samples,
    *,
    before: float,
    noise: ChargeNoise,
    offset_volts: float = 0.0,
) -> LoopResult:
    """Reduce the record of one triangle from -A to +A and back, the cell fully down at both ends.

    times: seconds. node_volts: as measured; the series resistance lets the node lag, so the
    source's voltage is not the cell's. charge: of cell_charge; noise: of charge_noise for the same
    record. before: seconds; until then the source rests at -A. offset_volts: standard uncertainty
    of the node channel's offset, which shifts both coercive voltages and can't be seen here.

    A straight line each through the two saturated branches, with one slope, a drift that closes
    the loop and a leakage current: weighted least squares. The capacitance that the line finds is
    taken out before the coercive voltages are read: otherwise charge crosses the middle early by
    farads times volts. Raises SwitchingUnclear where the loop isn't one: not from -A over +A to
    -A, no opening, no saturation.
    """
    check_record(times, node_volts=node_volts, charge=charge)
    resting = int(np.searchsorted(times, before, side="left"))
    if resting == 0 or times.size - resting < 10 * _LEAST_FITTED:
        raise SwitchingUnclear(
            f"{resting} samples lie before the loop and {times.size - resting} on it; it needs"
            f" some before and {10 * _LEAST_FITTED} on it"
        )
    rest_volts = float(np.mean(node_volts[:resting]))
    seconds = times[resting:] - before
    volts = node_volts[resting:]
    taken = charge[resting:] - np.mean(charge[:resting])
    volt_seconds = running_integral(volts, seconds)
    branches = _branches(volts, rest_volts)
    columns = np.column_stack([volts, seconds, volt_seconds])
    line = _straight(columns, taken, branches, rest_volts, noise)
    _check_opening(line, taken, noise.closed(float(seconds[-1])))
    loop = taken - line.drift_amperes * seconds - line.siemens * volt_seconds
    loop = loop - (line.up_coulombs + line.down_coulombs) / 2
    switched = loop - line.farads * volts
    _check_saturation(line, switched, volts, branches, rest_volts)

    opening = [_at_zero(volts, loop, way) for way in (branches.rising, branches.falling)]
    rising = _crossing(volts, switched, branches.rising, line.opening)
    falling = _crossing(volts, switched, branches.falling, line.opening)
    # What an error of drift and leakage does between the two ways through 0 V.
    between = columns[opening[1].index, 1:] - columns[opening[0].index, 1:]
    closing = math.sqrt(max(float(between @ line.covariance @ between), 0.0))
    coulombs_uncertainty = math.hypot(noise.closed(float(seconds[-1])), closing)
    volts_uncertainty = math.hypot(
        max(rising.uncertainty, falling.uncertainty),
        max(abs(rising.slope), abs(falling.slope)) * coulombs_uncertainty,
        noise.node_step / math.sqrt(12),
        offset_volts,
    )
    return LoopResult(
        remanent_coulombs=(opening[1].height - opening[0].height) / 2,
        remanent_uncertainty=math.hypot(
            coulombs_uncertainty, opening[0].uncertainty, opening[1].uncertainty
        )
        / 2,
        coercive_up_volts=rising.height,
        coercive_down_volts=falling.height,
        imprint_volts=(rising.height + falling.height) / 2,
        volts_uncertainty=volts_uncertainty,
        linear_farads=line.farads,
        leakage_siemens=line.siemens,
        leakage_uncertainty=line.siemens_uncertainty,
        drift_coulombs=float(
            line.drift_amperes * seconds[-1] + line.siemens * volt_seconds[-1],
        ),
        node_volts=volts,
        coulombs=loop,
    )


def _smooth(volts: Samples) -> Samples:
    """Average over a window short against the loop, so that noise makes no turns."""
    half = volts.size // _SMOOTHING // 2
    if half == 0:
        return volts
    sums = np.cumsum(np.concatenate(([0.0], volts)))
    index = np.arange(volts.size)
    # The window shrinks towards the ends, so that it stays centred.
    reach = np.minimum(half, np.minimum(index, volts.size - 1 - index))
    smooth: Samples = (sums[index + reach + 1] - sums[index - reach]) / (2 * reach + 1)
    return smooth


def _branches(volts: Samples, rest_volts: float) -> _Branches:
    """Find the two ways and the straight branches; SwitchingUnclear without them."""
    smooth = _smooth(volts)
    top = int(np.argmax(smooth))
    top_volts, end_volts = float(smooth[top]), float(smooth[-1])
    if not rest_volts < 0 < top_volts:
        raise SwitchingUnclear(
            f"the node goes from {rest_volts:.3g} V to {top_volts:.3g} V; a loop goes from below"
            " 0 V to above it"
        )
    if end_volts - rest_volts > _CLOSED_SHARE * (top_volts - rest_volts):
        raise SwitchingUnclear(
            f"the record ends with the node at {end_volts:.3g} V, but the loop began at"
            f" {rest_volts:.3g} V: record to the triangle's end and a little longer"
        )
    index = np.arange(volts.size)
    left = int(np.argmax(smooth > _STRAIGHT_SHARE * rest_volts))
    right = top + int(np.argmax(smooth[top:] < _STRAIGHT_SHARE * top_volts))
    near_end = index[index >= volts.size - max(_LEAST_FITTED, volts.size // 100)]
    if left < _LEAST_FITTED or right - top < _LEAST_FITTED:
        raise SwitchingUnclear(
            f"only {min(left, right - top)} samples lie on a saturated branch;"
            f" {_LEAST_FITTED} are needed"
        )
    return _Branches(
        down_branch=index[:left],
        up_branch=index[top:right],
        end=near_end,
        rising=index[: top + 1],
        falling=index[top:],
    )


def _straight(
    columns: Samples,
    taken: Samples,
    branches: _Branches,
    rest_volts: float,
    noise: ChargeNoise,
) -> _Straight:
    """Fit the saturated branches; columns: volts, seconds and volt-seconds of each sample.

    Leakage bends the branches, and at rest it was taken for an offset: the drift that the closing
    finds is then the leakage current at rest, as surely as the offset was known.
    """
    seconds = float(columns[-1, 1])
    swing = float(np.ptp(taken))
    rows, heights = [], []
    for group, up in ((branches.down_branch, 0.0), (branches.up_branch, 1.0), (branches.end, 0.0)):
        for part in np.array_split(group, min(_BINS, group.size // 2)):
            rows.append([up, 1 - up, *columns[part].mean(axis=0)])
            heights.append(float(taken[part].mean()))
    rows.append([0.0, 1.0, rest_volts, 0.0, 0.0])
    heights.append(0.0)
    floor = 1e-9 * swing
    scale = np.full(len(rows), max(noise.closed(seconds), floor))
    rows.append([0.0, 0.0, 0.0, 1.0, rest_volts])
    heights.append(0.0)
    scale = np.append(scale, max(noise.offset_amperes, floor / seconds))
    design = np.array(rows) / scale[:, np.newaxis]
    wanted = np.array(heights) / scale
    solution, covariance = _least_squares(design, wanted)
    siemens_uncertainty = math.sqrt(float(covariance[4, 4]))
    if abs(float(solution[4])) < _TELLING * siemens_uncertainty:
        # Without leakage the current at rest says nothing of the drift.
        reduced, _ = _least_squares(design[:-1, :4], wanted[:-1])
        solution = np.append(reduced, 0.0)
    up, down, farads, drift, siemens = (float(each) for each in solution)
    return _Straight(
        up_coulombs=up,
        down_coulombs=down,
        farads=farads,
        drift_amperes=drift,
        siemens=siemens,
        siemens_uncertainty=siemens_uncertainty,
        covariance=covariance[3:, 3:],
    )


def _least_squares(design: Samples, wanted: Samples) -> tuple[Samples, Samples]:
    """Solve; return the solution and its covariance, enlarged where the misfit says so."""
    # Columns of coulombs, volts and seconds differ by many decades.
    sizes = np.linalg.norm(design, axis=0)
    if not (sizes > 0).all():
        raise SwitchingUnclear("the saturated branches have no extent")
    scaled, _, rank, _ = np.linalg.lstsq(design / sizes, wanted, rcond=None)
    if rank < sizes.size:
        raise SwitchingUnclear("the saturated branches can't be told apart from drift")
    residual = wanted - design @ (scaled / sizes)
    excess = max(1.0, float(residual @ residual) / (wanted.size - sizes.size))
    inverse = np.linalg.inv((design / sizes).T @ (design / sizes))
    return scaled / sizes, excess * inverse / np.outer(sizes, sizes)


def _check_opening(line: _Straight, taken: Samples, uncertainty: float) -> None:
    least = max(_LEAST_OPENING_SHARE * float(np.ptp(taken)), _TELLING * uncertainty)
    if line.opening < least:
        raise SwitchingUnclear(
            f"the loop has no opening: its branches lie {line.opening:.3g} C apart, and less than"
            f" {least:.3g} C says nothing; is a ferroelectric cell there, and the amplitude above"
            " coercive?"
        )


def _check_saturation(
    line: _Straight,
    switched: Samples,
    volts: Samples,
    branches: _Branches,
    rest_volts: float,
) -> None:
    """Check that near either tip both ways run together."""
    smooth = _smooth(volts)
    top_volts = float(smooth[branches.up_branch[0]])
    at_top = branches.rising[smooth[branches.rising] > _TIP_SHARE * top_volts]
    at_bottom = branches.falling[smooth[branches.falling] < _TIP_SHARE * rest_volts]
    for tip, volts_there, samples, side in (
        ("upper", top_volts, at_top, 1),
        ("lower", rest_volts, at_bottom, -1),
    ):
        unmet = 0.5 - side * float(np.mean(switched[samples])) / line.opening
        if unmet > _MOST_UNMET_SHARE:
            raise SwitchingUnclear(
                f"the loop doesn't saturate: near its {tip} tip, {volts_there:.3g} V, {unmet:.0%}"
                " of the charge has yet to switch; raise the amplitude or slow the triangle down"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Reading:
    """A height read off a curve, its standard uncertainty, the slope there and the sample."""

    height: float
    uncertainty: float
    slope: float
    index: int


def _at_zero(volts: Samples, loop: Samples, way: NDArray[np.intp]) -> _Reading:
    """Read the charge where a way passes 0 V."""
    reach = _ZERO_SHARE * float(np.ptp(volts))
    return _read(volts[way], loop[way], reach, way)


def _crossing(volts: Samples, switched: Samples, way: NDArray[np.intp], opening: float) -> _Reading:
    """Read the voltage where half of the charge has switched on a way."""
    return _read(switched[way], volts[way], _HALF_SHARE * opening, way)


def _read(abscissa: Samples, ordinate: Samples, reach: float, way: NDArray[np.intp]) -> _Reading:
    """Read the ordinate where the abscissa passes 0: by a parabola through the samples within
    reach of it, by a straight line between two samples where there are too few.
    """
    sides = np.flatnonzero(np.diff(np.signbit(abscissa)))
    if sides.size == 0:
        raise SwitchingUnclear("a branch of the loop never passes 0")
    # Noise may make it pass several times.
    middle = int(sides[sides.size // 2])
    near = np.flatnonzero(np.abs(abscissa) < reach)
    if near.size < _LEAST_FITTED:
        low, high = abscissa[middle], abscissa[middle + 1]
        slope = float((ordinate[middle + 1] - ordinate[middle]) / (high - low))
        return _Reading(
            height=float(ordinate[middle] - slope * low),
            uncertainty=abs(float(ordinate[middle + 1] - ordinate[middle])) / math.sqrt(12),
            slope=slope,
            index=int(way[middle]),
        )
    position = abscissa[near] / reach
    design = np.column_stack([np.ones(near.size), position, position**2])
    solution, _, rank, _ = np.linalg.lstsq(design, ordinate[near], rcond=None)
    if rank < design.shape[1]:
        raise SwitchingUnclear("too few different samples lie about a crossing of the loop")
    residual = ordinate[near] - design @ solution
    variance = float(residual @ residual) / (near.size - design.shape[1])
    share = float(np.linalg.inv(design.T @ design)[0, 0])
    return _Reading(
        height=float(solution[0]),
        uncertainty=math.sqrt(variance * share),
        slope=float(solution[1]) / reach,
        index=int(way[middle]),
    )
