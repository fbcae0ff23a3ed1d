"""What a two-channel oscilloscope does, whatever language it is spoken to in.

Channel 1 sees the generator's terminal, channel 2 the cell's node. A converter with noise,
clipping at both ends, a bandwidth, errors of offset and gain, ranges and intervals that
become the next 1-2-5 step without a word, and a pre-trigger that must fill before a trigger
counts. How large all that is, is said by DigitizerImperfections. Refusals are the numbered
errors of SCPI-99.
"""

import math
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.bandwidth import knot_values, last_values, values_at
from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.imperfections import DigitizerImperfections
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
_PORTION = 1 << 16
# Of a long train while armed: 4 stretches make a pulse, so that these are 1000 pulses. A train
# of a million, at which nothing triggers, is not to be integrated for half an hour.
MOST_ARMED_STRETCHES = 4000


class _Stretch(NamedTuple):
    """A piece of the table's course, and what the bandwidth had made of the one before."""

    times: _Floats
    terminal_volts: _Floats
    node_volts: _Floats
    begin_volts: _Floats


@dataclass(slots=True, kw_only=True)
class _Acquisition:
    settings: ScopeSettings
    began_seconds: float
    stretches: deque["_Stretch"] = field(default_factory=deque)
    trigger_seconds: float | None = None
    first_seconds: float = math.inf
    armed_stretches: int = 0

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

    imperfections: what it can do and how wrong it is. seed: of what is random in that.
    power_on: the settings it starts with and is reset to, as near as it can have them.
    changed: called when something changed by itself, also for a moment, as time passed.
    ignores_trigger: asked at each trigger that would be taken; when so nothing happens.
    most_armed_stretches: how many of a long train's it wants to see while armed.
    """

    def __init__(
        self,
        *,
        clock: VirtualClock,
        converter: Converter,
        power_on: ScopeSettings,
        imperfections: DigitizerImperfections | None = None,
        seed: int = 1,
    ) -> None:
        self.imperfections = imperfections or DigitizerImperfections()
        self._clock, self._converter = clock, converter
        self.power_on = power_on.within(self.imperfections)
        self.changed: Callable[[], None] = lambda: None
        self.ignores_trigger: Callable[[], bool] = lambda: False
        self.most_armed_stretches = MOST_ARMED_STRETCHES
        self._random = np.random.default_rng(seed)
        # A stream of its own: the noise is the same with and without jitter.
        self._jitter = np.random.default_rng((seed, 3))
        self._lagging_volts: _Floats | None = None
        self.settings = self.power_on
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
    def needs_detail(self) -> bool:
        """Whether each pulse of the course matters to a record that is under way.

        While armed, it may trigger or lie before a trigger to come. That holds for the first
        most_armed_stretches; behind them a trigger on a level that the node creeps up to may
        come some pulses late, and a pre-trigger shows but the last pulses of a long train.
        """
        acquisition = self._acquisition
        if acquisition is None or self.state is not ScopeState.ARMED:
            return acquisition is not None
        if acquisition.armed_stretches >= self.most_armed_stretches:
            return False
        settings = acquisition.settings
        return settings.source.column is not None or settings.points_before > 0

    @property
    def kept_stretches(self) -> int:
        """How many stretches of the table's course are kept for the acquisition."""
        return 0 if self._acquisition is None else len(self._acquisition.stretches)

    # What it can be told.

    def begin_message(self) -> None:
        """Come up to the present."""
        self._clock.catch_up()

    def reset(self) -> None:
        """Forget the record and go back to the settings after power-on."""
        self._acquisition = self._record = None
        self.settings = self.power_on

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
        begin_volts = self._lag(times, terminal_volts, node_volts)
        acquisition = self._acquisition
        if acquisition is None:
            return
        before = acquisition.stretches[-1] if acquisition.stretches else None
        acquisition.stretches.append(_Stretch(times, terminal_volts, node_volts, begin_volts))
        if acquisition.trigger_seconds is None:
            acquisition.armed_stretches += self._is_armed()
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

    def _look_for_trigger(self, acquisition: _Acquisition, before: _Stretch | None) -> None:
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

    def _lag(self, times: _Floats, *signals: _Floats) -> _Floats:
        """Let the bandwidth follow one stretch; return what it had made of the one before."""
        begin_volts = self._lagging_volts
        if begin_volts is None:
            begin_volts = np.array([signal[0] for signal in signals])
        lag_seconds = self.imperfections.lag_seconds
        if lag_seconds > 0:
            self._lagging_volts = last_values(times, signals, begin_volts, lag_seconds)
        return begin_volts

    def _finish(self, acquisition: _Acquisition) -> None:
        settings = acquisition.settings
        assert acquisition.trigger_seconds is not None
        stretches = acquisition.stretches
        times = np.concatenate([stretch.times for stretch in stretches])
        signals = np.stack(
            [
                np.concatenate([stretch.terminal_volts for stretch in stretches]),
                np.concatenate([stretch.node_volts for stretch in stretches]),
            ]
        )
        lag_seconds = self.imperfections.lag_seconds
        knots = signals
        if lag_seconds > 0:
            knots = knot_values(times, signals, stretches[0].begin_volts, lag_seconds)
        # In portions, so that a long record needs no multiple of its own size in memory.
        codes = np.empty((CHANNELS, settings.record_points), dtype=np.int16)
        for channel in range(CHANNELS):
            chosen = slice(channel, channel + 1)
            for first in range(0, settings.record_points, _PORTION):
                last = min(first + _PORTION, settings.record_points)
                places = np.arange(first, last, dtype=np.float64)
                grid: _Floats = acquisition.first_seconds + settings.sample_seconds * places
                if lag_seconds > 0:
                    volts = values_at(grid, times, signals[chosen], knots[chosen], lag_seconds)[0]
                else:
                    volts = np.interp(grid, times, signals[channel])
                codes[channel, first:last] = self._convert(settings, channel, volts)
        first_seconds = acquisition.first_seconds - acquisition.trigger_seconds
        if self.imperfections.trigger_jitter_seconds:
            jitter = self._jitter.standard_normal()
            first_seconds += self.imperfections.trigger_jitter_seconds * jitter
        self._record = Record(
            codes=codes,
            volts_per_code=tuple(volts / self._converter.codes for volts in settings.range_volts),
            offset_volts=settings.offset_volts,
            interval_seconds=settings.sample_seconds,
            first_seconds=first_seconds,
        )
        self._acquisition = None

    def _convert(
        self, settings: ScopeSettings, channel: int, volts: _Floats
    ) -> NDArray[np.float64]:
        """Return the codes that the converter makes of voltages."""
        wrong, converter = self.imperfections, self._converter
        codes = converter.codes
        volts_per_code = settings.range_volts[channel] / codes
        noise_codes = converter.noise_codes
        if wrong.noise_share is not None:
            noise_codes = wrong.noise_share * codes
        exact = (volts * (1 + wrong.gain_errors[channel]) - settings.offset_volts[channel]) / (
            volts_per_code
        )
        exact += wrong.offset_shares[channel] * codes
        exact += noise_codes * self._random.standard_normal(len(volts))
        # Fewer bits than the family sends: the lowest of them stay 0.
        step = 1 << (converter.bits - (wrong.bits or converter.bits))
        half = codes // 2
        rounded: NDArray[np.float64] = np.clip(step * np.rint(exact / step), -half, half - step)
        return rounded


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
