"""Find the value of one setting that gives a wanted full count.

A full count scatters from round to round and can be told only between the first pulse and the
most that a read may take. So the search begins with both ends of the range, halves it where
reads end without a count, and else fits a line to what was seen near the target, until the count
at the fitted value is sure enough. It does no I/O: it says which value to try, and is told what
came.
"""

import math
from dataclasses import dataclass, replace
from enum import StrEnum
from itertools import groupby
from operator import itemgetter

import numpy as np
from scipy.special import stdtrit

from pulsetally.sequencer.analysis.pulses import Samples

# The scatter of one round, in pulses, that is believed before any was seen, and how many
# observations that belief is worth.
_PRIOR_SCATTER = 0.25
_PRIOR_WEIGHT = 4
# How far the law of log(count) bends away from a line: this times the square of the distance
# from the target in log(count). For a power law against a linear setting it is 1/(2 p), for
# exp(k/V) against log(V) it is V/(2 k) (closed forms, second order): 0.7 to 0.01.
_BEND = 0.4
# A count this many scatters from the target lies on a certain side of it.
_CERTAIN_SCATTERS = 3.0
# Where the first pulse passed, the count is at most 1; where none did, it is taken as this many
# times what was seen; both are bounds, so that the logarithm may be off by this.
_MORE = 2.0
_BOUND_UNCERTAINTY = 3.0
# Before a search ends, a count must have come this close to what is wanted.
_NEAR_SCATTERS = 2.0
# A fitted value keeps this share of the bracket away from its ends, so that it says something.
_MARGIN = 0.02
_SURENESS = 0.95
# With less than this part of the bracket gone after two rounds, it is halved instead.
_SLOW = 0.5


class TuneStatus(StrEnum):
    """How a search ended."""

    FOUND = "found"
    NOT_BRACKETED = "not bracketed"
    AT_MOST_REACHED = "at most reached"


@dataclass(frozen=True, slots=True, kw_only=True)
class TuneResult:
    """Say what a search found.

    value, uncertainty: of the setting and its standard uncertainty, in the setting's unit.
    count: the mean full count estimated there, in pulses. All three are None where the target is
    not bracketed, or no count came near it in all the rounds. scatter: of one round, pulses, from
    residuals and what is believed beforehand. rounds: how many were told.
    """

    value: float | None
    uncertainty: float | None
    count: float | None
    scatter: float
    status: TuneStatus
    rounds: int


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    """What the rounds at one position gave.

    many, few: rounds that gave no count. side: 1 where the mean count is certainly more than the
    target, -1 where it is certainly less, 0 where neither is certain.
    """

    position: float
    counts: tuple[float, ...]
    many: int
    few: int
    side: int

    @property
    def mean(self) -> float:
        return math.fsum(self.counts) / len(self.counts)

    def judge(self, target: float, scatter: float) -> int:
        """Return the side; rounds without a count outvote those with one."""
        if self.many != self.few and abs(self.many - self.few) >= len(self.counts):
            return 1 if self.many > self.few else -1
        if not self.counts:
            return 0
        off = self.mean - target
        if abs(off) <= _CERTAIN_SCATTERS * scatter / math.sqrt(len(self.counts)):
            return 0
        return 1 if off > 0 else -1


@dataclass(frozen=True, slots=True, kw_only=True)
class _Line:
    """A line of log(count) against position through the weighted centre; variances of both."""

    centre: float
    level: float
    slope: float
    level_variance: float
    slope_variance: float

    def at(self, position: float) -> float:
        return self.level + self.slope * (position - self.centre)

    def meets(self, target: float) -> float:
        return self.centre + (math.log(target) - self.level) / self.slope

    def uncertainty(self, position: float) -> float:
        away = position - self.centre
        return math.sqrt(self.level_variance + self.slope_variance * away**2)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Estimate:
    """Where the target is thought to be; count_bound: half of the mean count's 95 % interval."""

    position: float
    position_uncertainty: float
    count: float
    count_bound: float


class Tuning:
    """Search for the value of a setting at which the mean full count is the target.

    low, high: ends of the range, in the setting's unit; both above 0 where logarithmic.
    target: wanted full count, pulses, above 1. within: how far the mean count may be from it, in
    pulses. at_most: rounds, at least 2. logarithmic: search on the logarithm of the setting.
    The count may fall or rise with the setting, but not both. Raises ValueError for arguments
    that can't be.
    """

    def __init__(
        self,
        low: float,
        high: float,
        target: float,
        within: float,
        at_most: int,
        *,
        logarithmic: bool,
    ) -> None:
        if not -math.inf < low < high < math.inf:
            raise ValueError(f"low is {low} and high {high}; low must be the smaller")
        if logarithmic and low <= 0:
            raise ValueError(f"low is {low}; a logarithmic search needs it above 0")
        if not 1 < target < math.inf:
            raise ValueError(f"target is {target}; a count must be above 1 to be told")
        if not 0 < within < math.inf:
            raise ValueError(f"within is {within}; it must be above 0")
        if at_most < 2:
            raise ValueError(f"at_most is {at_most}; both ends need a round, so at least 2")
        self._low, self._high = low, high
        self._target, self._within, self._at_most = target, within, at_most
        self._logarithmic = logarithmic
        self._told: list[tuple[float, float | None, bool]] = []

    def add(self, value: float, count: float | None, *, too_many: bool = False) -> None:
        """Take what one round gave.

        value: the setting it ran with, which need not be the one proposed. count: the crossing,
        pulses with a fraction; or None: with too_many the read ended before a pulse passed, else
        the first pulse passed.
        """
        if not self._low <= value <= self._high:
            raise ValueError(f"value is {value}; it must be from {self._low} to {self._high}")
        if count is not None and not 0 < count < math.inf:
            raise ValueError(f"count is {count}; it must be above 0")
        if count is not None and too_many:
            raise ValueError("a round has a count or too many pulses, not both")
        self._told.append((self._position(value), count, too_many))

    def next_value(self) -> float | None:
        """Return the value to try next; None when the search has ended."""
        position = self._decide()
        return None if isinstance(position, TuneStatus) else self._value(position)

    def result(self) -> TuneResult:
        """Say what was found; ValueError while the search goes on."""
        status = self._decide()
        if not isinstance(status, TuneStatus):
            raise ValueError(f"the search goes on, at {self._value(status):.6g}")
        seen, scatter = _seen(self._told, self._target)
        estimate = None
        # Between ends that only bound the count, a line may cross the target where the law jumps.
        if status is not TuneStatus.NOT_BRACKETED and self._was_near(seen, scatter):
            estimate = self._estimate(seen, scatter)
        value = uncertainty = count = None
        if estimate is not None:
            value, count = self._value(estimate.position), estimate.count
            # d(value)/d(log value) is the value.
            slope = value if self._logarithmic else 1.0
            uncertainty = slope * estimate.position_uncertainty
        return TuneResult(
            value=value,
            uncertainty=uncertainty,
            count=count,
            scatter=scatter,
            status=status,
            rounds=len(self._told),
        )

    def _position(self, value: float) -> float:
        return math.log(value) if self._logarithmic else value

    def _value(self, position: float) -> float:
        for end in (self._low, self._high):
            # exp(log(end)) may be a little off, and an end is tried as it was written.
            if position == self._position(end):
                return end
        value = math.exp(position) if self._logarithmic else position
        return min(max(value, self._low), self._high)

    def _decide(self) -> float | TuneStatus:
        """Return the next position to try, or how the search has ended."""
        ends = self._position(self._low), self._position(self._high)
        if len(self._told) < len(ends):
            return ends[len(self._told)]
        seen, scatter = _seen(self._told, self._target)
        if seen[0].side * seen[-1].side > 0:
            return TuneStatus.NOT_BRACKETED
        estimate = self._estimate(seen, scatter)
        if estimate is not None:
            off = abs(estimate.count - self._target)
            sure = off + estimate.count_bound <= self._within
            if sure and self._was_near(seen, scatter):
                return TuneStatus.FOUND
        if len(self._told) >= self._at_most:
            return TuneStatus.AT_MOST_REACHED
        first, last = self._bracket(seen)
        if estimate is None or self._is_slow(seen):
            return (first + last) / 2
        # Beside a position that lies certainly on one side, a new one says nothing new.
        margin = _MARGIN * (last - first)
        certain = {each.position for each in seen if each.side != 0}
        if first in certain:
            first += margin
        if last in certain:
            last -= margin
        return min(max(estimate.position, first), last)

    def _estimate(self, seen: list[_Seen], scatter: float) -> _Estimate | None:
        """Return where the target is, within the bracket; None where no line can be laid."""
        first, last = self._bracket(seen)
        # Between the certain sides a line interpolates; what lies outside would bend it.
        inside = [each for each in seen if first <= each.position <= last]
        line = _fit(inside, scatter, self._target)
        if line is None or line.slope * _direction(seen) <= 0:
            return None
        position = min(max(line.meets(self._target), first), last)
        degrees = _PRIOR_WEIGHT + max(sum(len(each.counts) for each in seen) - 2, 1)
        count = math.exp(line.at(position))
        log_uncertainty = line.uncertainty(position)
        return _Estimate(
            position=position,
            position_uncertainty=log_uncertainty / abs(line.slope),
            count=count,
            count_bound=count * log_uncertainty * float(stdtrit(degrees, (1 + _SURENESS) / 2)),
        )

    def _was_near(self, seen: list[_Seen], scatter: float) -> bool:
        """Say whether a count near the target was seen, so that a line needn't be believed far."""
        return any(
            abs(each.mean - self._target)
            <= self._within + _NEAR_SCATTERS * scatter / math.sqrt(len(each.counts))
            for each in seen
            if each.counts
        )

    def _bracket(self, seen: list[_Seen]) -> tuple[float, float]:
        """Return the positions between which the target lies, as far as is certain."""
        below = -_direction(seen)
        first = max((each.position for each in seen if each.side * below > 0), default=None)
        last = min((each.position for each in seen if each.side * below < 0), default=None)
        ends = self._position(self._low), self._position(self._high)
        first, last = ends[0] if first is None else first, ends[1] if last is None else last
        # A law that isn't monotone, or a cell that changed, can make them contradict.
        return (first, last) if first < last else ends

    def _is_slow(self, seen: list[_Seen]) -> bool:
        """Say whether the last two rounds narrowed nothing and are still far from the target."""
        if len(self._told) < 4 or any(each.side == 0 for each in seen):
            return False
        before, _ = _seen(self._told[:-2], self._target)
        wide = self._bracket(before)
        narrow = self._bracket(seen)
        return narrow[1] - narrow[0] > _SLOW * (wide[1] - wide[0])


def _seen(told: list[tuple[float, float | None, bool]], target: float) -> tuple[list[_Seen], float]:
    """Group what was told by position, rising; return it with the scatter of one round."""
    groups = []
    for position, rounds in groupby(sorted(told, key=itemgetter(0)), key=itemgetter(0)):
        listed = list(rounds)
        counts = tuple(count for _, count, _ in listed if count is not None)
        # The median of all rounds of a position decides where only some gave a count.
        many = sum(too_many for _, _, too_many in listed)
        few = len(listed) - many - len(counts)
        groups.append(_Seen(position=position, counts=counts, many=many, few=few, side=0))
    scatter = _scatter(groups, target)
    return [replace(each, side=each.judge(target, scatter)) for each in groups], scatter


def _direction(seen: list[_Seen]) -> int:
    """Return 1 where the count rises with the setting, -1 where it falls."""
    first, last = seen[0], seen[-1]
    if first.side != last.side:
        return 1 if last.side > first.side else -1
    # Both ends lie near the target, or neither was judged: any count is better than none.
    return 1 if last.counts > first.counts else -1


def _scatter(seen: list[_Seen], target: float) -> float:
    """Estimate the standard deviation of one round from what is believed and from residuals.

    Only rounds so close to the target count that the line's bend is small beside the scatter.
    """
    line = _fit(seen, _PRIOR_SCATTER, target)
    squares, degrees = 0.0, -1
    for each in seen:
        if not each.counts:
            continue
        distance = math.log(each.mean / target)
        if line is None or _BEND * distance**2 * each.mean > _PRIOR_SCATTER / 2:
            expected, lost = each.mean, 1
        else:
            expected, lost = math.exp(line.at(each.position)), 0
        squares += math.fsum((count - expected) ** 2 for count in each.counts)
        degrees += len(each.counts) - lost
    degrees = max(degrees, 0)
    prior = _PRIOR_WEIGHT * _PRIOR_SCATTER**2
    return math.sqrt((prior + squares) / (_PRIOR_WEIGHT + degrees))


def _fit(seen: list[_Seen], scatter: float, target: float) -> _Line | None:
    """Fit log(count) against the position, each by how sure it is and how close to the target.

    Weighted least squares (closed form for a line); None with fewer than two positions that
    gave counts.
    """
    told = [each for each in seen if each.counts]
    positions = [each.position for each in told]
    logs = [math.log(each.mean) for each in told]
    noise = [scatter / each.mean / math.sqrt(len(each.counts)) for each in told]
    if told:
        # Reads without a count say little of the slope, but more than two counts side by side.
        most = math.log(_MORE * max(target, max(each.mean for each in told)))
        for bound, blind in (
            (0.0, [each.position for each in seen if each.few and not each.counts]),
            (most, [each.position for each in seen if each.many and not each.counts]),
        ):
            if blind:
                positions.append(min(blind, key=lambda position: abs(position - positions[0])))
                logs.append(bound)
                noise.append(_BOUND_UNCERTAINTY)
    if len(positions) < 2:
        return None
    return _line(np.array(positions), np.array(logs), np.array(noise), math.log(target))


def _line(positions: Samples, logs: Samples, noise: Samples, log_target: float) -> _Line | None:
    bend = _BEND * (logs - log_target) ** 2
    weights = 1 / (noise**2 + bend**2)
    total = float(weights.sum())
    centre = float(weights @ positions) / total
    spread = float(weights @ (positions - centre) ** 2)
    slope = float(weights @ ((positions - centre) * logs)) / spread
    if slope == 0:
        return None
    return _Line(
        centre=centre,
        level=float(weights @ logs) / total,
        slope=slope,
        level_variance=1 / total,
        slope_variance=1 / spread,
    )
