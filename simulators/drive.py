"""The electromotive force that the generator puts behind its source resistance."""

import math
from collections.abc import Iterator
from dataclasses import dataclass

# A linear ramp goes from 10 % to 90 % in this part of its whole duration.
RAMP_SHARE = 0.8
# Settings arrive rounded to the generator's time step; edges that overlap by less than
# this are made to touch.
GRACE_SECONDS = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Stretch:
    """A piece of time over which the EMF is one straight line.

    end_seconds: absolute end; inf for ever.
    begin_volts, end_volts: EMF at its two ends (just inside, where it jumps), V.
    """

    end_seconds: float
    begin_volts: float
    end_volts: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Rest:
    """A constant EMF for ever, V."""

    base_volts: float = 0.0

    def __post_init__(self) -> None:
        _check_finite("base_volts", self.base_volts)

    def volts_at(self, at_seconds: float) -> float:
        """Return the EMF at an instant, V."""
        del at_seconds
        return self.base_volts

    def stretch_at(self, at_seconds: float) -> Stretch:
        """Return the straight piece that begins at an instant."""
        del at_seconds
        return Stretch(end_seconds=math.inf, begin_volts=self.base_volts, end_volts=self.base_volts)


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseTrain:
    """Equal trapezoidal pulses of the open-circuit EMF; before and after them it is at base.

    base_volts, level_volts: EMF at rest and on the flat top, V.
    width_seconds: between the two points at half amplitude, s, above 0.
    leading_seconds, trailing_seconds: 10 % to 90 % of a linear ramp, s; the whole ramp
    lasts 1.25 times that; 0 is a jump.
    period_seconds: from one pulse's start to the next, s.
    count: pulses, at least 1; a train of 1e9 pulses is never written out.
    start_seconds: absolute virtual time at which the first leading ramp begins, s.
    Raises ValueError where a pulse has no room for its ramps or its period.
    """

    base_volts: float = 0.0
    level_volts: float
    width_seconds: float
    leading_seconds: float = 100e-9
    trailing_seconds: float = 100e-9
    period_seconds: float
    count: int = 1
    start_seconds: float = 0.0

    def __post_init__(self) -> None:
        for name in ("base_volts", "level_volts", "start_seconds"):
            _check_finite(name, getattr(self, name))
        for name in ("width_seconds", "period_seconds"):
            if not 0 < getattr(self, name) < math.inf:
                raise ValueError(f"{name} is {getattr(self, name)} s; it must be above 0")
        for name in ("leading_seconds", "trailing_seconds"):
            if not 0 <= getattr(self, name) < math.inf:
                raise ValueError(f"{name} is {getattr(self, name)} s; it must be 0 or more")
        if self.count < 1:
            raise ValueError(f"count is {self.count}; it must be at least 1")
        half_ramps = (self.leading_seconds + self.trailing_seconds) / RAMP_SHARE / 2
        if self.width_seconds < half_ramps - GRACE_SECONDS:
            raise ValueError(
                f"width_seconds is {self.width_seconds} s; "
                f"half of both ramps takes {half_ramps:.6g} s"
            )
        if self.width_seconds + half_ramps > self.period_seconds + GRACE_SECONDS:
            raise ValueError(
                f"period_seconds is {self.period_seconds} s; width and ramps take "
                f"{self.width_seconds + half_ramps:.6g} s"
            )

    @property
    def pulse_seconds(self) -> float:
        """From the start of the leading ramp to the end of the trailing one, s."""
        return self._corners()[3]

    @property
    def end_seconds(self) -> float:
        """Absolute end of the last trailing ramp, s."""
        return self.pulse_start(self.count - 1) + self.pulse_seconds

    def pulse_start(self, index: int) -> float:
        """Return the absolute start of a pulse's leading ramp, s; index counts from 0."""
        return self.start_seconds + index * self.period_seconds

    def pulses_begun(self, at_seconds: float) -> int:
        """Return how many pulses have their start before an instant."""
        if at_seconds <= self.start_seconds:
            return 0
        index = self._pulse_at(at_seconds)
        return index if self.pulse_start(index) == at_seconds else index + 1

    def pulses_ended(self, at_seconds: float) -> int:
        """Return how many pulses have their end at or before an instant."""
        if at_seconds < self.start_seconds:
            return 0
        index = self._pulse_at(at_seconds)
        return index + (self.pulse_start(index) + self.pulse_seconds <= at_seconds)

    def volts_at(self, at_seconds: float) -> float:
        """Return the EMF at an instant, V; at a jump, the value after it."""
        return self.stretch_at(at_seconds).begin_volts

    def stretch_at(self, at_seconds: float) -> Stretch:
        """Return the straight piece that begins at an instant (within one, its remainder)."""
        base, level = self.base_volts, self.level_volts
        if at_seconds < self.start_seconds:
            return Stretch(end_seconds=self.start_seconds, begin_volts=base, end_volts=base)
        index = self._pulse_at(at_seconds)
        start = self.pulse_start(index)
        corners = self._corners()
        for begin, end, from_volts, to_volts in zip(
            corners, corners[1:], (base, level, level), (level, level, base), strict=False
        ):
            # Compared as absolute times, so that an instant handed out as the end of one
            # piece is the begin of the next, whatever the rounding.
            if at_seconds < start + end:
                into = max(at_seconds - start - begin, 0.0) / (end - begin)
                return Stretch(
                    end_seconds=start + end,
                    begin_volts=from_volts + (to_volts - from_volts) * min(into, 1.0),
                    end_volts=to_volts,
                )
        more = index + 1 < self.count
        return Stretch(
            end_seconds=self.pulse_start(index + 1) if more else math.inf,
            begin_volts=base,
            end_volts=base,
        )

    def knots_between(self, from_seconds: float, to_seconds: float) -> Iterator[float]:
        """Yield the instants after from_seconds, up to to_seconds, where the slope changes."""
        at_seconds = from_seconds
        while (at_seconds := self.stretch_at(at_seconds).end_seconds) <= to_seconds:
            if math.isinf(at_seconds):
                return
            yield at_seconds

    def _pulse_at(self, at_seconds: float) -> int:
        guess = int((at_seconds - self.start_seconds) / self.period_seconds)
        # The quotient may be off by one at a boundary; the starts themselves decide.
        while guess + 1 < self.count and self.pulse_start(guess + 1) <= at_seconds:
            guess += 1
        while guess > 0 and self.pulse_start(guess) > at_seconds:
            guess -= 1
        return min(guess, self.count - 1)

    def _corners(self) -> tuple[float, float, float, float]:
        leading = self.leading_seconds / RAMP_SHARE
        trailing = self.trailing_seconds / RAMP_SHARE
        top_end = max(leading, leading / 2 + self.width_seconds - trailing / 2)
        pulse_end = max(top_end, min(top_end + trailing, self.period_seconds))
        return 0.0, leading, top_end, pulse_end


def _check_finite(name: str, number: float) -> None:
    if not math.isfinite(number):
        raise ValueError(f"{name} is {number}; it must be finite")
