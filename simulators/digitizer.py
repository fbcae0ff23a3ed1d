"""What a two-channel oscilloscope does, whatever language it is spoken to in.

Channel 1 sees the generator's terminal, channel 2 the cell's node. A converter with noise,
clipping at both ends, ranges and intervals that become the next 1-2-5 step without a
word, and a pre-trigger that must fill before a trigger counts. Bandwidth and offset errors
are not simulated. Refusals are the numbered errors of SCPI-99.
"""

import math
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.scope_settings import (
    CHANNELS,
    Converter,
    Record,
    ScopeSettings,
    ScopeState,
    TriggerInput,
)
from pulsetally.simulators.scpi_errors import ScpiError

_Floats = NDArray[np.float64]


@dataclass(slots=True, kw_only=True)
class _Acquisition:
    settings: ScopeSettings
    began_seconds: float
    stretches: deque[tuple[_Floats, _Floats, _Floats]] = field(default_factory=deque)
    trigger_seconds: float | None = None
    first_seconds: float = math.inf

    @property
    def armed_seconds(self) -> float:
        filling = max(self.settings.points_before, 0)
        return self.began_seconds + filling * self.settings.sample_seconds

    @property
    def last_seconds(self) -> float:
        points = self.settings.record_points
        return self.first_seconds + (points - 1) * self.settings.sample_seconds


class Digitizer:
    """The oscilloscope of the simulated bench; it observes the table.

    seed: of the noise. power_on: the settings it starts with and is reset to.
    changed: called when something changed by itself, also for a moment, as time passed.
    ignores_trigger: asked at each trigger that would be taken; when so nothing happens.
    """

    def __init__(
        self,
        *,
        clock: VirtualClock,
        converter: Converter,
        power_on: ScopeSettings,
        seed: int = 1,
    ) -> None:
        self._clock, self._converter, self._power_on = clock, converter, power_on
        self.changed: Callable[[], None] = lambda: None
        self.ignores_trigger: Callable[[], bool] = lambda: False
        self._random = np.random.default_rng(seed)
        self.settings = power_on
        self._acquisition: _Acquisition | None = None
        self._record: Record | None = None
        self._seen_seconds = clock.now

    @property
    def state(self) -> ScopeState:
        """How far the acquisition is."""
        acquisition = self._acquisition
        if acquisition is None:
            return ScopeState.STOPPED if self._record is None else ScopeState.COMPLETE
        if acquisition.trigger_seconds is not None:
            return ScopeState.ACQUIRING
        return ScopeState.ARMED if self._is_armed() else ScopeState.FILLING

    @property
    def is_acquiring(self) -> bool:
        """Whether an acquisition is under way, from filling to its last sample."""
        return self._acquisition is not None

    @property
    def kept_stretches(self) -> int:
        """How many stretches of the table's course are kept for the acquisition."""
        return 0 if self._acquisition is None else len(self._acquisition.stretches)

    # What it can be told.

    def reset(self) -> None:
        """Forget the record and go back to the settings after power-on."""
        self._acquisition = self._record = None
        self.settings = self._power_on

    def trigger(self) -> None:
        """Trigger by command; -211 unless armed with the command as source."""
        acquisition = self._acquisition
        if (
            acquisition is None
            or acquisition.settings.source is not TriggerInput.COMMAND
            or not self._is_armed()
        ):
            raise ScpiError(-211)
        self._consider(acquisition, self._seen_seconds)

    def force(self) -> None:
        """Trigger now, whatever the source; -211 unless armed."""
        acquisition = self._acquisition
        if acquisition is None or not self._is_armed():
            raise ScpiError(-211)
        self._consider(acquisition, self._seen_seconds)

    def initiate(self) -> None:
        """Begin an acquisition, the record before being lost; -213 during another."""
        if self._acquisition is not None:
            raise ScpiError(-213)
        self._record = None
        self._seen_seconds = self._clock.now
        acquisition = _Acquisition(settings=self.settings, began_seconds=self._clock.now)
        self._acquisition = acquisition
        if acquisition.settings.source is TriggerInput.AT_ONCE and self._is_armed():
            self._trigger_at(acquisition, acquisition.armed_seconds)

    def abort(self) -> None:
        """End an acquisition without a record."""
        self._acquisition = None

    def wait(self) -> None:
        """Let time pass until the record is complete.

        With nothing that triggers within one record's length, -214: a real instrument
        would keep silent until somebody triggers it.
        """
        acquisition = self._acquisition
        if acquisition is None:
            return
        settings = acquisition.settings
        if acquisition.trigger_seconds is None:
            window_seconds = settings.record_points * settings.sample_seconds
            self._clock.advance_to(acquisition.armed_seconds + window_seconds)
        if acquisition.trigger_seconds is None:
            raise ScpiError(-214)
        # One interval more, so that rounding can't leave the last sample out.
        self._clock.advance_to(acquisition.last_seconds + settings.sample_seconds)

    def record(self) -> Record:
        """Return the finished record; -230 without one."""
        if self._record is None:
            raise ScpiError(-230)
        return self._record

    # Signals from outside.

    def trigger_externally(self, at_seconds: float) -> None:
        """Take an edge on the external trigger input; without being armed it is lost."""
        acquisition = self._acquisition
        if (
            acquisition is not None
            and acquisition.settings.source is TriggerInput.EXTERNAL
            and self._is_armed()
        ):
            self._consider(acquisition, at_seconds)

    def saw(self, times: _Floats, terminal_volts: _Floats, node_volts: _Floats) -> None:
        """Take what the table did in one stretch of time (table.observe)."""
        self._seen_seconds = float(times[-1])
        acquisition = self._acquisition
        if acquisition is None:
            return
        before = acquisition.stretches[-1] if acquisition.stretches else None
        acquisition.stretches.append((times, terminal_volts, node_volts))
        if acquisition.trigger_seconds is None:
            self._look_for_trigger(acquisition, before)
        if self._seen_seconds >= acquisition.last_seconds:
            self._finish(acquisition)
        else:
            self._forget_what_scrolled_out(acquisition)
        self.changed()

    # Acquisition.

    def _is_armed(self) -> bool:
        acquisition = self._acquisition
        return (
            acquisition is not None
            and acquisition.trigger_seconds is None
            and self._seen_seconds >= acquisition.armed_seconds
        )

    def _look_for_trigger(
        self, acquisition: _Acquisition, before: tuple[_Floats, _Floats, _Floats] | None
    ) -> None:
        if not self._is_armed():
            return
        settings = acquisition.settings
        if settings.source is TriggerInput.AT_ONCE:
            self._trigger_at(acquisition, acquisition.armed_seconds)
        elif (column := settings.source.column) is not None:
            stretch = acquisition.stretches[-1]
            times, volts = stretch[0], stretch[column]
            if before is not None:
                # A jump between two stretches is an edge like any other.
                times = np.concatenate((before[0][-1:], times))
                volts = np.concatenate((before[column][-1:], volts))
            from_seconds = acquisition.armed_seconds
            while acquisition.trigger_seconds is None:
                at_seconds = first_crossing(
                    times,
                    volts,
                    level_volts=settings.level_volts,
                    rising=settings.rising,
                    from_seconds=from_seconds,
                )
                if at_seconds is None:
                    return
                self._consider(acquisition, at_seconds)
                from_seconds = math.nextafter(at_seconds, math.inf)

    def _consider(self, acquisition: _Acquisition, at_seconds: float) -> None:
        if not self.ignores_trigger():
            self._trigger_at(acquisition, at_seconds)

    def _trigger_at(self, acquisition: _Acquisition, at_seconds: float) -> None:
        # The moment of waiting may have been short; the event register saw it all the same.
        self.changed()
        settings = acquisition.settings
        # The sample clock runs since the beginning and knows nothing of the trigger.
        elapsed = (at_seconds - acquisition.began_seconds) / settings.sample_seconds
        index = math.ceil(elapsed - 1e-6) - settings.points_before
        acquisition.trigger_seconds = at_seconds
        acquisition.first_seconds = (
            acquisition.began_seconds + max(index, 0) * settings.sample_seconds
        )

    def _forget_what_scrolled_out(self, acquisition: _Acquisition) -> None:
        settings = acquisition.settings
        wanted_seconds = acquisition.first_seconds
        if acquisition.trigger_seconds is None:
            wanted_seconds = self._seen_seconds - settings.points_before * settings.sample_seconds
        oldest_seconds = wanted_seconds - settings.sample_seconds
        while len(acquisition.stretches) > 1 and acquisition.stretches[0][0][-1] < oldest_seconds:
            acquisition.stretches.popleft()

    def _finish(self, acquisition: _Acquisition) -> None:
        settings = acquisition.settings
        assert acquisition.trigger_seconds is not None
        grid = acquisition.first_seconds + settings.sample_seconds * np.arange(
            settings.record_points
        )
        times, *signals = (
            np.concatenate(part) for part in zip(*acquisition.stretches, strict=True)
        )
        volts_per_code = tuple(volts / self._converter.codes for volts in settings.range_volts)
        codes = np.empty((CHANNELS, settings.record_points), dtype=np.int16)
        for channel, signal in enumerate(signals):
            exact = (np.interp(grid, times, signal) - settings.offset_volts[channel]) / (
                volts_per_code[channel]
            )
            noisy = exact + self._converter.noise_codes * self._random.standard_normal(
                settings.record_points
            )
            half = self._converter.codes // 2
            codes[channel] = np.clip(np.rint(noisy), -half, half - 1)
        self._record = Record(
            codes=codes,
            volts_per_code=volts_per_code,
            offset_volts=settings.offset_volts,
            interval_seconds=settings.sample_seconds,
            first_seconds=acquisition.first_seconds - acquisition.trigger_seconds,
        )
        self._acquisition = None


def first_crossing(
    times: _Floats,
    volts: _Floats,
    *,
    level_volts: float,
    rising: bool,
    from_seconds: float,
) -> float | None:
    """Return the first instant at or after from_seconds at which volts pass a level.

    Linear between the samples; times never fall. None without a crossing.
    """
    above = volts >= level_volts if rising else volts <= level_volts
    for index in np.flatnonzero(~above[:-1] & above[1:]).tolist():
        share = (level_volts - volts[index]) / (volts[index + 1] - volts[index])
        at_seconds = float(times[index] + share * (times[index + 1] - times[index]))
        if at_seconds >= from_seconds:
            return at_seconds
    return None
