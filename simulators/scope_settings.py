"""What an oscilloscope can be set to, what it is doing, and the record it makes."""

import math
from dataclasses import dataclass, field, replace
from enum import Enum, auto

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.imperfections import DigitizerImperfections

CHANNELS = 2
DIVISIONS = 8
TIME_DIVISIONS = 10

LARGEST_DELAY_SECONDS = 1e4
FEWEST_POINTS = 10

_Floats = NDArray[np.float64]


class TriggerInput(Enum):
    """What triggers an acquisition."""

    CHANNEL1 = auto()
    CHANNEL2 = auto()
    EXTERNAL = auto()
    AT_ONCE = auto()
    COMMAND = auto()

    @property
    def column(self) -> int | None:
        """Place of the channel in a stretch of the table's course; None for no channel."""
        return {TriggerInput.CHANNEL1: 1, TriggerInput.CHANNEL2: 2}.get(self)


class ScopeState(Enum):
    """How far an acquisition is."""

    STOPPED = auto()
    FILLING = auto()
    ARMED = auto()
    ACQUIRING = auto()
    COMPLETE = auto()


@dataclass(frozen=True, slots=True, kw_only=True)
class Converter:
    """bits: of the digitizer. noise_codes: its noise, a standard deviation in codes."""

    bits: int
    noise_codes: float

    @property
    def codes(self) -> int:
        """How many codes the range is cut into."""
        return 1 << self.bits


@dataclass(frozen=True, slots=True, kw_only=True)
class ScopeSettings:
    """What the oscilloscope is set to.

    range_volts: peak to peak, for each channel; offset_volts: the middle of the screen.
    points, interval_seconds: of the record. With span_seconds, the record lasts that long
    instead, and has fewer points where the converter is too slow for so many.
    reference: the place in the record, 0 to 1, that lies delay_seconds after the trigger.
    A record never ends before its trigger: an earlier delay is cut to that.
    digitizer: what the oscilloscope can do.
    """

    digitizer: DigitizerImperfections = field(default_factory=DigitizerImperfections)

    range_volts: tuple[float, ...] = (8.0,) * CHANNELS
    offset_volts: tuple[float, ...] = (0.0,) * CHANNELS
    points: int = 1000
    interval_seconds: float = 1e-6
    span_seconds: float | None = None
    reference: float = 0.0
    delay_seconds: float = 0.0
    source: TriggerInput = TriggerInput.AT_ONCE
    level_volts: float = 0.0
    rising: bool = True

    @property
    def record_points(self) -> int:
        """How many samples a record has."""
        if self.span_seconds is None:
            return self.points
        return min(self.points, round(self.span_seconds / self.digitizer.shortest_interval_seconds))

    @property
    def sample_seconds(self) -> float:
        """From one sample to the next."""
        if self.span_seconds is None:
            return self.interval_seconds
        return self.span_seconds / self.record_points

    @property
    def possible_delay_seconds(self) -> float:
        """The delay, cut where the record would end before its trigger."""
        behind = (1 - self.reference) * (self.record_points - 1) * self.sample_seconds
        return max(self.delay_seconds, -behind)

    @property
    def points_before(self) -> int:
        """How many samples lie before the trigger; negative when it begins later."""
        intervals = self.possible_delay_seconds / self.sample_seconds
        return round(self.reference * (self.record_points - 1) - intervals)

    def within(self, digitizer: DigitizerImperfections) -> "ScopeSettings":
        """Return the nearest settings that an oscilloscope can have."""
        interval, span_seconds = interval_limits(digitizer), self.span_seconds
        if span_seconds is not None:
            span_seconds = TIME_DIVISIONS * _clipped(span_seconds / TIME_DIVISIONS, interval)
        return replace(
            self,
            digitizer=digitizer,
            range_volts=tuple(_clipped(v, range_limits(digitizer)) for v in self.range_volts),
            points=min(self.points, digitizer.longest_record_points),
            interval_seconds=_clipped(self.interval_seconds, interval),
            span_seconds=span_seconds,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Record:
    """One finished acquisition.

    codes: int16, shape (channels, points), 0 in the middle of the range.
    first_seconds: instant of the first sample relative to the trigger.
    """

    codes: NDArray[np.int16]
    volts_per_code: tuple[float, ...]
    offset_volts: tuple[float, ...]
    interval_seconds: float
    first_seconds: float

    @property
    def points(self) -> int:
        """How many samples each channel has."""
        return int(self.codes.shape[1])

    def volts(self, channel: int) -> _Floats:
        """Return what a channel saw."""
        codes = self.codes[channel].astype(np.float64)
        volts: _Floats = codes * self.volts_per_code[channel] + self.offset_volts[channel]
        return volts


def next_step(value: float) -> float:
    """Return the smallest 1-2-5 step that is not below a positive value."""
    exponent = math.floor(math.log10(value))
    for step in (1, 2, 5, 10):
        # Read from text: 2e-9 written so is the same number everywhere.
        candidate = float(f"{step}e{exponent}")
        if value <= candidate * (1 + 1e-9):
            return candidate
    return float(f"2e{exponent + 1}")


def last_step(value: float) -> float:
    """Return the largest 1-2-5 step that is not above a positive value."""
    exponent = math.floor(math.log10(value))
    for step in (10, 5, 2):
        candidate = float(f"{step}e{exponent}")
        if candidate <= value * (1 + 1e-9):
            return candidate
    return float(f"1e{exponent}")


def range_limits(digitizer: DigitizerImperfections) -> tuple[float, float]:
    """Return the smallest and the largest range that has a step, V peak to peak."""
    return (
        DIVISIONS * next_step(digitizer.smallest_range_volts / DIVISIONS),
        DIVISIONS * last_step(digitizer.largest_range_volts / DIVISIONS),
    )


def interval_limits(digitizer: DigitizerImperfections) -> tuple[float, float]:
    """Return the shortest and the longest interval that is a step, s; per division, too."""
    return (
        next_step(digitizer.shortest_interval_seconds),
        last_step(digitizer.longest_interval_seconds),
    )


def _clipped(value: float, limits: tuple[float, float]) -> float:
    return max(limits[0], min(value, limits[1]))
