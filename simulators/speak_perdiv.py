"""The perdiv family: amplitude and offset, frequency, volts and seconds per division.

The oscilloscope has 8 bits and a screen of 8 by 10 divisions.
"""

import numpy as np

from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.function_generator import FunctionGenerator, load
from pulsetally.simulators.generator_model import FireSource, GeneratorModel
from pulsetally.simulators.oscilloscope import DELAY, Oscilloscope
from pulsetally.simulators.scope_settings import (
    DIVISIONS,
    TIME_DIVISIONS,
    Converter,
    ScopeSettings,
    ScopeState,
    TriggerInput,
    interval_limits,
    next_step,
    range_limits,
)
from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import Answer, Call, Command, Manner, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_real
from pulsetally.simulators.scpi_parameters import Number, number
from pulsetally.simulators.scpi_rows import (
    action,
    channel_quantity,
    choice,
    on_off,
    quantity,
    question,
    whole,
)

CONVERTER = Converter(bits=8, noise_codes=0.5)
# Of one burst.
MOST_PULSES = 10**12
# Codes are sent without a sign; this one is the middle of the screen.
MIDDLE_CODE = 128

SCOPE_POWER_ON = ScopeSettings(span_seconds=1e-3, reference=0.5, source=TriggerInput.CHANNEL1)

_FIRE_SOURCES = {
    "BUS": FireSource.COMMAND,
    "IMMediate": FireSource.AT_ONCE,
    "EXTernal": FireSource.EXTERNAL,
}
_TRIGGER_INPUTS = {
    "CHANnel1": TriggerInput.CHANNEL1,
    "CHANnel2": TriggerInput.CHANNEL2,
    "EXTernal": TriggerInput.EXTERNAL,
}
_STATES = {
    ScopeState.STOPPED: 0,
    ScopeState.FILLING: 1,
    ScopeState.ARMED: 2,
    ScopeState.ACQUIRING: 3,
    ScopeState.COMPLETE: 4,
}


def _system(device: ScpiDevice) -> list[Command]:
    return [question(":SYSTem:ERRor", lambda: device.status.errors.pop().entry("+d"))]


PERDIV = Manner(name="perdiv", identity="PERDIV", system=_system)


class PerdivGenerator(FunctionGenerator):
    """A function generator of the perdiv family; *TRG alone fires it."""

    def __init__(self, identity: str, model: GeneratorModel) -> None:
        super().__init__(identity, model, PERDIV)
        self._bursts = False
        self.declare([*self._source_commands(), *self._burst_commands()])
        self.declare(self._output_commands())

    def reset(self) -> None:
        """Make no bursts any more, too."""
        super().reset()
        self._bursts = False

    def trigger(self) -> None:
        """Fire (*TRG); -211 without bursts, during one, or with another source."""
        self.model.refuse_after_conflict()
        ready = self._bursts and self.model.fire_source is FireSource.COMMAND
        if not ready or self.model.is_running:
            raise ScpiError(-211)
        if not self.model.ignores_trigger():
            self.model.initiate()
            self.model.fire()

    def _source_commands(self) -> list[Command]:
        source = ":SOURce<1>"
        origin, initial = self.model.source, self.model.power_on
        high, low = initial.high_volts, initial.low_volts
        amplitude = Number(
            limits=lambda: self.level_limits(
                origin.volts_per_code, 2 * origin.span_volts, high - low
            ),
            unit="V",
        )
        offset = self.level((high + low) / 2)
        frequency = number(
            1 / origin.longest_period_seconds,
            1 / origin.shortest_period_seconds,
            1 / initial.period_seconds,
            unit="HZ",
        )
        pulse = f"{source}:FUNCtion:PULSe"

        def set_edges(seconds: float) -> None:
            self.set_leading(seconds)
            self.set_trailing(seconds)

        return [
            choice(
                f"{source}:FUNCtion", {"PULSe": None}, lambda _: None, lambda: None, coupled=True
            ),
            quantity(
                f"{source}:VOLTage", amplitude, self.set_amplitude, self.amplitude, coupled=True
            ),
            quantity(
                f"{source}:VOLTage:OFFSet", offset, self.set_middle, self.middle, coupled=True
            ),
            quantity(
                f"{source}:FREQuency",
                frequency,
                lambda hertz: self.set_period(1 / hertz),
                lambda: 1 / self.period(),
                coupled=True,
            ),
            quantity(
                f"{pulse}:WIDTh", self.width_parameter, self.set_width, self.width, coupled=True
            ),
            quantity(
                f"{pulse}:TRANsition", self.edge_parameter, set_edges, self.leading, coupled=True
            ),
        ]

    def _burst_commands(self) -> list[Command]:
        burst = ":SOURce<1>:BURSt"

        def set_bursts(on: bool) -> None:
            self._bursts = on

        def set_mode(gated: bool) -> None:
            if gated:
                raise ScpiError(-224, "gated bursts are not made")

        def set_source(source: FireSource) -> None:
            self.model.fire_source = source

        return [
            on_off(f"{burst}:STATe", set_bursts, lambda: self._bursts),
            choice(f"{burst}:MODE", {"TRIGgered": False, "GATed": True}, set_mode, lambda: False),
            quantity(
                f"{burst}:NCYCles",
                self.count_parameter(MOST_PULSES),
                self.set_count,
                self.count,
                write=whole,
                coupled=True,
            ),
            question(f"{burst}:COUNt", self.sent_pulses),
            question(f"{burst}:RUNNing", lambda: "1" if self.model.is_running else "0"),
            choice(":TRIGger<1>:SOURce", _FIRE_SOURCES, set_source, lambda: self.model.fire_source),
            action(":ABORt", self.model.abort),
        ]

    def _output_commands(self) -> list[Command]:
        output = ":OUTPut<1>"
        polarities = {"NORMal": False, "INVerted": True}
        return [
            on_off(f"{output}[:STATe]", self.model.switch_output, lambda: self.model.relay_on),
            choice(
                f"{output}:POLarity", polarities, self.set_inverted, self.inverted, coupled=True
            ),
            quantity(
                f"{output}:LOAD", load("INFinity"), self.set_load, self.load_ohms, coupled=True
            ),
        ]


class PerdivOscilloscope(Oscilloscope):
    """An oscilloscope of the perdiv family: unsigned bytes."""

    def __init__(self, identity: str, model: Digitizer) -> None:
        super().__init__(identity, model, PERDIV)
        self._channel, self._binary = 0, True
        self.declare([*self._screen_commands(), *self._trigger_commands()])
        self.declare(self._record_commands())

    def reset(self) -> None:
        """Send channel 1 in bytes again, too."""
        super().reset()
        self._channel, self._binary = 0, True

    def _screen_commands(self) -> list[Command]:
        digitizer, initial = self.model.imperfections, self.model.power_on
        smallest, largest = range_limits(digitizer)
        volts_per_division = number(
            smallest / DIVISIONS, largest / DIVISIONS, initial.range_volts[0] / DIVISIONS, unit="V"
        )
        seconds_per_division = number(
            *interval_limits(digitizer), (initial.span_seconds or 0.0) / TIME_DIVISIONS, unit="S"
        )
        return [
            channel_quantity(
                ":CHANnel<1-2>:SCALe",
                volts_per_division,
                lambda channel, volts: self.set_range(channel, DIVISIONS * volts),
                lambda channel: self.range_volts(channel) / DIVISIONS,
            ),
            channel_quantity(
                ":CHANnel<1-2>:OFFSet", self.volts_parameter, self.set_offset, self.offset_volts
            ),
            quantity(
                ":TIMebase:SCALe",
                seconds_per_division,
                lambda seconds: self.set_span(TIME_DIVISIONS * next_step(seconds)),
                lambda: self.interval_seconds() * self.points() / TIME_DIVISIONS,
            ),
            quantity(":TIMebase:POSition", DELAY, self.set_delay, self.delay_seconds),
            quantity(
                ":ACQuire:POINts", self.points_parameter, self.set_points, self.points, write=whole
            ),
        ]

    def _trigger_commands(self) -> list[Command]:
        edge = ":TRIGger:EDGE"
        slopes = {"POSitive": True, "NEGative": False}

        def single() -> None:
            self.model.abort()
            self.model.initiate()

        return [
            choice(f"{edge}:SOURce", _TRIGGER_INPUTS, self.set_source, self.source),
            quantity(f"{edge}:LEVel", self.volts_parameter, self.set_level, self.level_volts),
            choice(f"{edge}:SLOPe", slopes, self.set_rising, self.rising),
            action(":SINGle", single),
            action(":STOP", self.model.abort),
            action(":FORCe", self.model.force),
            question(":ACQuire:STATe", lambda: str(_STATES[self.model.state])),
        ]

    def _record_commands(self) -> list[Command]:
        def set_channel(channel: int) -> None:
            self._channel = channel

        def set_binary(binary: bool) -> None:
            self._binary = binary

        return [
            choice(
                ":WAVeform:SOURce",
                {"CHANnel1": 0, "CHANnel2": 1},
                set_channel,
                lambda: self._channel,
            ),
            choice(
                ":WAVeform:FORMat",
                {"BYTE": True, "ASCii": False},
                set_binary,
                lambda: self._binary,
            ),
            question(":WAVeform:PREamble", self._preamble),
            Command(pattern=":WAVeform:DATA", answer=self._data),
        ]

    def _preamble(self) -> str:
        record = self.model.record()
        return ",".join(
            (
                "0" if self._binary else "1",
                "0",
                str(record.points),
                "1",
                format_real(record.interval_seconds),
                format_real(record.first_seconds, 15),
                "0",
                format_real(record.volts_per_code[self._channel]),
                format_real(record.offset_volts[self._channel]),
                str(MIDDLE_CODE),
            )
        )

    def _data(self, _: Call) -> Answer:
        record = self.model.record()
        if self._binary:
            codes = record.codes[self._channel] + MIDDLE_CODE
            return definite_block(codes.astype(np.uint8).tobytes())
        volts = record.volts(self._channel).tolist()
        return ",".join(format_real(value, 7) for value in volts)
