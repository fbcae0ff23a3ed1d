"""The part of an oscilloscope's language that every family shares."""

from dataclasses import replace

from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.scope_settings import (
    DIVISIONS,
    FEWEST_POINTS,
    LARGEST_DELAY_SECONDS,
    ScopeSettings,
    ScopeState,
    TriggerInput,
    next_step,
)
from pulsetally.simulators.scpi_device import Manner, ScpiDevice
from pulsetally.simulators.scpi_parameters import number

MEASURING = 16
WAITING_FOR_TRIGGER = 32

DELAY = number(-LARGEST_DELAY_SECONDS, LARGEST_DELAY_SECONDS, 0.0, unit="S")


class Oscilloscope(ScpiDevice):
    """A digitizer behind a SCPI engine; a family adds its commands.

    points_parameter: samples of a record. volts_parameter: of the middle of the screen, and
    of the trigger level, V.
    """

    def __init__(self, identity: str, model: Digitizer, manner: Manner) -> None:
        super().__init__(identity, manner)
        self.model = model
        digitizer = model.imperfections
        self.points_parameter = number(
            FEWEST_POINTS, digitizer.longest_record_points, model.power_on.points, whole=True
        )
        self.volts_parameter = number(
            -digitizer.largest_offset_volts, digitizer.largest_offset_volts, 0.0, unit="V"
        )
        model.changed = self.refresh

    # Hooks of the engine.

    def begin_message(self) -> None:
        """Come up to the present."""
        self.model.begin_message()

    def reset(self) -> None:
        """Forget the record and go back to the settings after power-on."""
        self.model.reset()

    def trigger(self) -> None:
        """Trigger (*TRG); -211 unless armed with the command as source."""
        self.model.trigger()

    def is_busy(self) -> bool:
        """Whether an acquisition is under way."""
        return self.model.is_acquiring

    def wait(self) -> None:
        """Let time pass until the record is complete; -214 when nothing triggers."""
        self.model.wait()

    def operation_condition(self) -> int:
        """Return the bits for measuring and for waiting for trigger, that is really armed."""
        return MEASURING * self.model.is_acquiring | WAITING_FOR_TRIGGER * (
            self.model.state is ScopeState.ARMED
        )

    # What rows of the families' tables are made of. Channels count from 0.

    def set_range(self, channel: int, volts: float) -> None:
        """Take the 1-2-5 step of volts per division that holds this peak-to-peak range."""
        ranges = self._settings.range_volts
        volts = DIVISIONS * next_step(volts / DIVISIONS)
        self._take(replace(self._settings, range_volts=_changed(ranges, channel, volts)))

    def range_volts(self, channel: int) -> float:
        """Return the peak-to-peak range, V."""
        return self._settings.range_volts[channel]

    def set_offset(self, channel: int, volts: float) -> None:
        """Put this voltage in the middle of the screen."""
        offsets = self._settings.offset_volts
        self._take(replace(self._settings, offset_volts=_changed(offsets, channel, volts)))

    def offset_volts(self, channel: int) -> float:
        """Return the voltage in the middle of the screen."""
        return self._settings.offset_volts[channel]

    def set_points(self, points: float) -> None:
        """Ask for a record of so many samples."""
        self._take(replace(self._settings, points=int(points)))

    def points(self) -> float:
        """Return how many samples a record will have."""
        return self._settings.record_points

    def set_interval(self, seconds: float) -> None:
        """Take the 1-2-5 step of the sample interval that is not shorter than this."""
        self._take(replace(self._settings, interval_seconds=next_step(seconds)))

    def interval_seconds(self) -> float:
        """Return the sample interval, s."""
        return self._settings.sample_seconds

    def set_span(self, seconds: float) -> None:
        """Have the record last so long."""
        self._take(replace(self._settings, span_seconds=seconds))

    def set_reference(self, share: float) -> None:
        """Put the trigger, plus the delay, at this place in the record, 0 to 1."""
        self._take(replace(self._settings, reference=share))

    def reference(self) -> float:
        """Return the share of the record before the trigger, plus the delay."""
        return self._settings.reference

    def set_delay(self, seconds: float) -> None:
        """Put the reference point of the record so long after the trigger."""
        self._take(replace(self._settings, delay_seconds=seconds))

    def delay_seconds(self) -> float:
        """Return the delay as far as it is possible, s."""
        return self._settings.possible_delay_seconds

    def set_source(self, source: TriggerInput) -> None:
        """Choose what triggers."""
        self._take(replace(self._settings, source=source))

    def source(self) -> TriggerInput:
        """Return what triggers."""
        return self._settings.source

    def set_level(self, volts: float) -> None:
        """Choose the voltage of the trigger channel that triggers."""
        self._take(replace(self._settings, level_volts=volts))

    def level_volts(self) -> float:
        """Return the trigger level, V."""
        return self._settings.level_volts

    def set_rising(self, rising: bool) -> None:
        """Choose the slope that triggers."""
        self._take(replace(self._settings, rising=rising))

    def rising(self) -> bool:
        """Return whether a rising slope triggers."""
        return self._settings.rising

    @property
    def _settings(self) -> ScopeSettings:
        return self.model.settings

    def _take(self, settings: ScopeSettings) -> None:
        self.model.settings = settings


def _changed(values: tuple[float, ...], index: int, value: float) -> tuple[float, ...]:
    return (*values[:index], value, *values[index + 1 :])
