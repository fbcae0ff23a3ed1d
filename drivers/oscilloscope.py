"""Drive an oscilloscope that takes one record at a time, in any dialect."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.drivers.dialect import (
    CHANNEL_SETTINGS,
    SAMPLE_TYPES,
    OscilloscopeDialect,
    Predicate,
    Setting,
    fill,
    read_preamble,
)
from pulsetally.drivers.errors import BadReply
from pulsetally.drivers.instrument import OTHER_DIALECT, Instrument
from pulsetally.drivers.link import Link
from pulsetally.drivers.numbers import NumberError


@dataclass(frozen=True, slots=True, kw_only=True)
class AcquisitionSetting:
    """State how the next records are taken.

    sample_interval: seconds. points: samples a record. before: share of the record, 0 to 1,
    that lies before the trigger. ranges: lowest and highest volts to be seen, by channel.
    trigger_channel, trigger_volts, rising: the edge that triggers.
    """

    sample_interval: float
    points: int
    before: float
    ranges: dict[int, tuple[float, float]]
    trigger_channel: int
    trigger_volts: float
    rising: bool

    def values(self, divisions_wide: int) -> dict[str, float | str]:
        """Return all that a dialect may want to set for the whole instrument, by name."""
        window = self.sample_interval * self.points
        return {
            "points": float(self.points),
            "sample interval": self.sample_interval,
            "sample rate": 1 / self.sample_interval,
            "window": window,
            "time per division": window / divisions_wide,
            "share before trigger": self.before,
            "delay to start": -self.before * window,
            "delay to centre": (0.5 - self.before) * window,
            "trigger source": float(self.trigger_channel),
            "trigger level": self.trigger_volts,
            "trigger slope": "rising" if self.rising else "falling",
        }


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trace:
    """Hold one channel's record: codes as they came, and what they mean.

    codes: int16, shape (points,). volts = codes * volts_per_code + volts_at_zero.
    sample_interval, first_seconds: seconds; time 0 is the trigger.
    lowest_code, highest_code: the ends of the digitizer's range, where it clips.
    """

    codes: NDArray[np.int16]
    volts_per_code: float
    volts_at_zero: float
    sample_interval: float
    first_seconds: float
    lowest_code: int
    highest_code: int

    @property
    def volts(self) -> NDArray[np.float64]:
        """Return the samples in volts, shape (points,)."""
        return self.codes.astype(np.float64) * self.volts_per_code + self.volts_at_zero

    @property
    def range_volts(self) -> tuple[float, float]:
        """Return the voltages at which the digitizer clips, lowest first."""
        ends = [
            code * self.volts_per_code + self.volts_at_zero
            for code in (self.lowest_code, self.highest_code)
        ]
        return min(ends), max(ends)

    @property
    def clipped(self) -> bool:
        """Say whether any sample reached an end of the digitizer's range."""
        return bool(
            self.codes.size
            and (self.codes.min() <= self.lowest_code or self.codes.max() >= self.highest_code)
        )


class Oscilloscope(Instrument):
    """Set up, arm and fetch single records of several channels."""

    def __init__(self, link: Link, dialect: OscilloscopeDialect) -> None:
        super().__init__(link, dialect)
        self._dialect = dialect
        self._points, self._interval = 0, 0.0

    def prepare(self) -> None:
        """Reset, and choose the form of the records."""
        self.reset()
        self._send(self._dialect.prepare)
        self.raise_errors("; ".join(self._dialect.prepare))

    def interval_for(self, window: float, points: int) -> float:
        """Return the sample interval that covers a window with so many points, in seconds."""
        return interval_for(self._dialect, window, points)

    def set_acquisition(self, setting: AcquisitionSetting) -> dict[str, float]:
        """Set up the next records; return the numbers as read back, by name.

        Raises SettingRefused when the oscilloscope made something else of it.
        """
        high, wide = self._dialect.divisions
        settings = self._dialect.settings
        each_channel = [each for each in settings if each.name in CHANNEL_SETTINGS]
        whole = [each for each in settings if each.name not in CHANNEL_SETTINGS]
        groups: list[tuple[list[Setting], dict[str, float | str], int]] = []
        for channel, (lowest, highest) in setting.ranges.items():
            span = highest - lowest
            wanted: dict[str, float | str] = {
                "span": span,
                "volts per division": span / high,
                "centre": (lowest + highest) / 2,
            }
            groups.append((each_channel, wanted, channel))
        groups.append((whole, setting.values(wide), setting.trigger_channel))
        *numbers, found = self.establish(groups, first=self._dialect.abort)
        for channel, told in zip(setting.ranges, numbers, strict=True):
            found |= {f"channel {channel} {name}": value for name, value in told.items()}
        self._points, self._interval = setting.points, setting.sample_interval
        return found

    @property
    def armed(self) -> Predicate:
        """Return how to ask whether it is armed, how often and for how long."""
        return self._dialect.armed

    @property
    def done(self) -> Predicate:
        """Return how to ask whether the record is complete, how often and for how long."""
        return self._dialect.done

    def arm(self) -> None:
        """Begin one acquisition. It is armed only once is_armed says so."""
        self._send(self._dialect.arm)

    def force(self) -> None:
        """Trigger an armed acquisition at once; without arming first it is lost."""
        self._send(self._dialect.force)

    def is_armed(self) -> bool:
        """Say whether the record before the trigger is full and a trigger would be taken."""
        return self.says_yes(self._dialect.armed)

    def is_done(self) -> bool:
        """Say whether the record is complete."""
        return self.says_yes(self._dialect.done)

    def fetch(self, channel: int) -> Trace:
        """Fetch the last record of one channel. Raises BadReply when it isn't whole."""
        form = self._dialect.waveform
        self._send(form.select, channel)
        fields, told = self._preamble(channel)
        points, step, gain = int(fields["points"]), fields["step"], fields["gain"]
        if not (step > 0 and gain != 0 and math.isfinite(gain) and math.isfinite(step)):
            raise self._faulty(told, "the preamble makes no sense")
        if points != self._points or abs(step - self._interval) > 0.01 * self._interval:
            raise self._faulty(
                told,
                f"{self._points} samples every {self._interval:.4g} s were set up, and the preamble"
                f" says {points} every {step:.4g} s",
            )
        command = fill(form.data, channel=channel)
        data = self._link.ask_block(
            command,
            line_end=form.line_end_after_block,
            header=self._dialect.line.echoed_headers,
        )
        kind, lowest, highest = SAMPLE_TYPES[form.samples]
        samples = np.dtype(kind)
        if len(data) != points * samples.itemsize:
            raise self._faulty(
                command, f"{points} samples of {samples.itemsize} bytes were due, {len(data)} came"
            )
        if form.clips_at is not None:
            lowest, highest = form.clips_at
        if "codes" in fields:
            half = int(fields["codes"]) // 2
            lowest, highest = -half, half - 1
        # Kept as int16 whatever came; unsigned 16-bit codes are moved down to fit.
        shift = 32768 if kind in (">u2", "<u2") else 0
        codes = (np.frombuffer(data, samples).astype(np.int32) - shift).astype(np.int16)
        return Trace(
            codes=codes,
            volts_per_code=gain,
            volts_at_zero=fields["zero"] + (shift - fields.get("reference", 0.0)) * gain,
            sample_interval=step,
            first_seconds=fields["first"] - fields.get("first index", 0.0) * step,
            lowest_code=lowest - shift,
            highest_code=highest - shift,
        )

    def _preamble(self, channel: int) -> tuple[dict[str, float], str]:
        fields: dict[str, float] = {}
        told = ""
        for query in self._dialect.waveform.preamble:
            told = fill(query.ask, channel=channel)
            answer = self.ask(told)
            try:
                fields |= read_preamble(query, answer)
            except (NumberError, ValueError) as error:
                problem = f"the preamble {answer[:120]!r} can't be read: {error}"
                raise self._faulty(told, problem) from error
        return fields, told

    def _faulty(self, command: str, problem: str) -> BadReply:
        return BadReply(self.address, command, problem, OTHER_DIALECT)


def interval_for(dialect: OscilloscopeDialect, window: float, points: int) -> float:
    """Return the shortest sample interval whose record covers a window, in seconds.

    window: seconds. points: of the record. Instruments that step their time base in 1-2-5 do so
    by division, sample or rate; none samples faster than it can, so that a record may last longer
    than its window.
    """
    wanted = max(window / points, dialect.shortest_interval or 0.0)
    for name, scale in (
        ("sample interval", 1.0),
        ("time per division", points / dialect.divisions[1]),
        ("window", float(points)),
    ):
        setting = dialect.setting(name)
        if setting is not None and setting.stepped:
            return next_step(wanted * scale) / scale
    rate = dialect.setting("sample rate")
    if rate is not None and rate.stepped:
        return 1 / previous_step(1 / wanted)
    return wanted


def next_step(value: float) -> float:
    """Return the smallest of ... 1, 2, 5, 10 ... that is not below value."""
    decade = math.floor(math.log10(value))
    for digit in (1, 2, 5, 10):
        # Written as text and read back, so that 2e-7 is 2e-7 and not its neighbour.
        candidate = float(f"{digit}e{decade}")
        if candidate >= value * (1 - 1e-9):
            return candidate
    return float(f"1e{decade + 1}")


def previous_step(value: float) -> float:
    """Return the largest of ... 1, 2, 5, 10 ... that is not above value."""
    decade = math.floor(math.log10(value) + 1e-9)
    for digit in (5, 2, 1):
        candidate = float(f"{digit}e{decade}")
        if candidate <= value * (1 + 1e-9):
            return candidate
    return float(f"5e{decade - 1}")
