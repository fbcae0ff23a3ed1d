"""The stateword family: words for every state, and answers that repeat the header.

Headers have no short forms. Samples are 16-bit numbers of a 12-bit converter, the low
byte first, and no newline follows their block.
"""

import math

from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.function_generator import FunctionGenerator, load
from pulsetally.simulators.generator_model import FireSource, GeneratorModel
from pulsetally.simulators.oscilloscope import DELAY, Oscilloscope
from pulsetally.simulators.scope_settings import (
    Converter,
    ScopeSettings,
    ScopeState,
    TriggerInput,
    interval_limits,
    range_limits,
)
from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import Answer, Call, Command, Manner, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_real
from pulsetally.simulators.scpi_parameters import number
from pulsetally.simulators.scpi_rows import (
    action,
    channel_quantity,
    choice,
    on_off,
    quantity,
    question,
    whole,
)

CONVERTER = Converter(bits=12, noise_codes=1.5)
# A 12-bit code fills the upper bits of a 16-bit number.
SENT_CODES_PER_CODE = 16

# Of one burst: twelve digits.
MOST_PULSES = 10**12 - 1

SCOPE_POWER_ON = ScopeSettings(source=TriggerInput.CHANNEL1)

_FIRE_SOURCES = {
    "SOFT": FireSource.COMMAND,
    "FREE": FireSource.AT_ONCE,
    "EXT": FireSource.EXTERNAL,
}
_TRIGGER_INPUTS = {
    "CH1": TriggerInput.CHANNEL1,
    "CH2": TriggerInput.CHANNEL2,
    "EXT": TriggerInput.EXTERNAL,
}
_STATES = {
    ScopeState.STOPPED: "HALT",
    ScopeState.FILLING: "PREFILL",
    ScopeState.ARMED: "READY",
    ScopeState.ACQUIRING: "ACQ",
    ScopeState.COMPLETE: "DONE",
}


def real(value: float) -> str:
    """Write a number as every instrument of the family does."""
    return format_real(value, 7)


def _system(device: ScpiDevice) -> list[Command]:
    def error() -> str:
        # Without quotes, a detail of ours could be taken for another answer.
        entry = device.status.errors.pop()
        return f"{entry.number},{entry.standard_text}"

    return [question(":ERROR", error)]


STATEWORD = Manner(name="stateword", identity="STATEWORD", system=_system, echoes=True)


class StatewordGenerator(FunctionGenerator):
    """A function generator of the stateword family."""

    def __init__(self, identity: str, model: GeneratorModel) -> None:
        super().__init__(identity, model, STATEWORD)
        self.declare([*self._level_commands(), *self._time_commands(), *self._burst_commands()])

    def _level_commands(self) -> list[Command]:
        initial = self.model.power_on
        high, low = self.level(initial.high_volts), self.level(initial.low_volts)

        def write_load(ohms: float) -> str:
            return "HIZ" if math.isinf(ohms) else real(ohms)

        return [
            choice(":CH<1>:WAVE", {"PULSE": None}, lambda _: None, lambda: None, coupled=True),
            quantity(":CH<1>:HIGH", high, self.set_high, self.high, write=real, coupled=True),
            quantity(":CH<1>:LOW", low, self.set_low, self.low, write=real, coupled=True),
            choice(
                ":CH<1>:POLARITY",
                {"NORM": False, "INV": True},
                self.set_inverted,
                self.inverted,
                coupled=True,
            ),
            quantity(
                ":CH<1>:LOAD",
                load("HIZ"),
                self.set_load,
                self.load_ohms,
                write=write_load,
                coupled=True,
            ),
            on_off(
                ":CH<1>:OUTPUT",
                self.model.switch_output,
                lambda: self.model.relay_on,
                parameter=number(0, 1, 0, whole=True),
            ),
        ]

    def _time_commands(self) -> list[Command]:
        rows = (
            ("PERIOD", self.period_parameter, self.set_period, self.period, real),
            ("WIDTH", self.width_parameter, self.set_width, self.width, real),
            ("RISE", self.edge_parameter, self.set_leading, self.leading, real),
            ("FALL", self.edge_parameter, self.set_trailing, self.trailing, real),
            ("CYCLES", self.count_parameter(MOST_PULSES), self.set_count, self.count, whole),
        )
        return [
            quantity(f":CH<1>:{word}", parameter, put, get, write=write, coupled=True)
            for word, parameter, put, get, write in rows
        ]

    def _burst_commands(self) -> list[Command]:
        def set_source(source: FireSource) -> None:
            self.model.fire_source = source

        def arm() -> None:
            if self.model.fire_source is not FireSource.COMMAND:
                raise ScpiError(-221, "only a soft trigger is armed")
            self.model.initiate()

        def state() -> str:
            if self.model.is_running:
                return "RUN"
            return "READY" if self.model.is_waiting else "IDLE"

        return [
            choice(":CH<1>:TRIGMODE", _FIRE_SOURCES, set_source, lambda: self.model.fire_source),
            action(":CH<1>:ARM", arm),
            action(":CH<1>:FIRE", self.model.fire),
            action(":CH<1>:STOP", self.model.abort),
            question(":CH<1>:STATE", state),
            question(":CH<1>:SENT", self.sent_pulses),
        ]


class StatewordOscilloscope(Oscilloscope):
    """An oscilloscope of the stateword family."""

    def __init__(self, identity: str, model: Digitizer) -> None:
        super().__init__(identity, model, STATEWORD)
        self._channel = 0
        self.declare([*self._input_commands(), *self._trigger_commands()])
        self.declare(self._record_commands())

    def reset(self) -> None:
        """Send channel 1 again, too."""
        super().reset()
        self._channel = 0

    def _input_commands(self) -> list[Command]:
        digitizer, initial = self.model.imperfections, self.model.power_on
        full_scale = number(*range_limits(digitizer), initial.range_volts[0], unit="V")
        shortest, longest = interval_limits(digitizer)
        rate = number(1 / longest, 1 / shortest, 1 / initial.interval_seconds)
        return [
            channel_quantity(
                ":CH<1-2>:RANGE", full_scale, self.set_range, self.range_volts, write=real
            ),
            channel_quantity(
                ":CH<1-2>:POSITION",
                self.volts_parameter,
                self.set_offset,
                self.offset_volts,
                write=real,
            ),
            quantity(
                ":HOR:RATE",
                rate,
                # The longer interval is the lower rate.
                lambda per_second: self.set_interval(1 / per_second),
                lambda: 1 / self.interval_seconds(),
                write=real,
            ),
            quantity(
                ":HOR:LENGTH", self.points_parameter, self.set_points, self.points, write=whole
            ),
            quantity(":HOR:DELAY", DELAY, self.set_delay, self.delay_seconds, write=real),
        ]

    def _trigger_commands(self) -> list[Command]:
        def set_mode(single: bool) -> None:
            if single:
                self.model.initiate()
            else:
                self.model.abort()

        return [
            choice(":TRIG:CHANNEL", _TRIGGER_INPUTS, self.set_source, self.source),
            quantity(
                ":TRIG:LEVEL", self.volts_parameter, self.set_level, self.level_volts, write=real
            ),
            choice(":TRIG:SLOPE", {"RISE": True, "FALL": False}, self.set_rising, self.rising),
            choice(
                ":TRIG:MODE",
                {"SINGLE": True, "HALT": False},
                set_mode,
                lambda: self.model.is_acquiring,
            ),
            action(":TRIG:FORCE", self.model.force),
            question(":TRIG:STATE", lambda: _STATES[self.model.state]),
        ]

    def _record_commands(self) -> list[Command]:
        def set_channel(channel: int) -> None:
            self._channel = channel

        def gain() -> str:
            return real(self.model.record().volts_per_code[self._channel] / SENT_CODES_PER_CODE)

        def zero() -> str:
            return real(self.model.record().offset_volts[self._channel])

        return [
            choice(":DATA:SOURCE", {"CH1": 0, "CH2": 1}, set_channel, lambda: self._channel),
            question(":DATA:GAIN", gain),
            question(":DATA:ZERO", zero),
            question(":DATA:STEP", lambda: real(self.model.record().interval_seconds)),
            question(":DATA:START", lambda: real(self.model.record().first_seconds)),
            question(":DATA:COUNT", lambda: str(self.model.record().points)),
            Command(pattern=":DATA:SAMPLES", answer=self._samples, unterminated=True),
        ]

    def _samples(self, _: Call) -> Answer:
        codes = self.model.record().codes[self._channel] * SENT_CODES_PER_CODE
        return definite_block(codes.astype("<i2").tobytes())
