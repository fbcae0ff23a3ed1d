"""Turn end voltages into counts: the crossing of a read, the full count of many rounds."""

import math
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadCount:
    """Say how a read ended.

    count: pulses delivered, up to and including the first that passed. reached: whether one
    passed. crossing: the count with its fraction, interpolated between the last end voltage
    below and the first above the threshold; None when no pulse passed, or when the first one
    did and nothing lies below.
    """

    count: int
    reached: bool
    crossing: float | None


def passes(volts: float, threshold: float, *, rising: bool) -> bool:
    """Say whether an end voltage is past the threshold, in the direction of the pulses."""
    return volts > threshold if rising else volts < threshold


def count_read(
    end_voltages: Sequence[float], threshold: float, *, rising: bool = True
) -> ReadCount:
    """Find the first end voltage past the threshold.

    end_voltages: volts, one a pulse, in the order of the pulses. Pulses are counted from 1.
    """
    for index, volts in enumerate(end_voltages):
        if passes(volts, threshold, rising=rising):
            if index == 0:
                return ReadCount(count=1, reached=True, crossing=None)
            before = end_voltages[index - 1]
            crossing = index + (threshold - before) / (volts - before)
            return ReadCount(count=index + 1, reached=True, crossing=crossing)
    return ReadCount(count=len(end_voltages), reached=False, crossing=None)


@dataclass(frozen=True, slots=True, kw_only=True)
class CountStatistics:
    """Summarize the crossings of several rounds.

    mean: pulses. sd: standard deviation of one round, pulses; None with a single round.
    rounds: how many rounds the two stand on.
    """

    mean: float
    sd: float | None
    rounds: int

    @property
    def mean_uncertainty(self) -> float | None:
        """Return the standard uncertainty of the mean (JCGM 100:2008, 4.2.3), pulses."""
        return None if self.sd is None else self.sd / math.sqrt(self.rounds)


def full_count(crossings: Sequence[float]) -> CountStatistics | None:
    """Summarize the crossings of rounds that began full-down; None when there are none."""
    if not crossings:
        return None
    rounds = len(crossings)
    mean = math.fsum(crossings) / rounds
    if rounds == 1:
        return CountStatistics(mean=mean, sd=None, rounds=1)
    squares = math.fsum((each - mean) ** 2 for each in crossings)
    return CountStatistics(mean=mean, sd=math.sqrt(squares / (rounds - 1)), rounds=rounds)
