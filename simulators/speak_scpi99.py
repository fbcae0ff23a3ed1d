"""The scpi99 family: instruments that speak as SCPI-99 describes, where it does.

SCPI-99 has no node OUTPut:LOAD; it is here because bench generators have it.
"""

from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.function_generator import FunctionGenerator, load
from pulsetally.simulators.generator_model import FireSource, GeneratorModel
from pulsetally.simulators.oscilloscope import Oscilloscope
from pulsetally.simulators.scope_settings import (
    Converter,
    ScopeSettings,
    TriggerInput,
    interval_limits,
    range_limits,
)
from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import SCPI99, Answer, Call, Command
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_real
from pulsetally.simulators.scpi_parameters import Word, number
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
SCOPE_POWER_ON = ScopeSettings()
# Of one burst.
MOST_PULSES = 10**12

_FIRE_SOURCES = {
    "BUS": FireSource.COMMAND,
    "IMMediate": FireSource.AT_ONCE,
    "EXTernal": FireSource.EXTERNAL,
}
_TRIGGER_INPUTS = {
    "INTernal1": TriggerInput.CHANNEL1,
    "INTernal2": TriggerInput.CHANNEL2,
    "INTernal": TriggerInput.CHANNEL1,
    "EXTernal": TriggerInput.EXTERNAL,
    "IMMediate": TriggerInput.AT_ONCE,
    "BUS": TriggerInput.COMMAND,
}
_CHANNEL_WORDS = ("CHANnel1", "CHANnel2", "CHANnel")


class Scpi99Generator(FunctionGenerator):
    """A function generator of the scpi99 family."""

    def __init__(self, identity: str, model: GeneratorModel) -> None:
        super().__init__(identity, model, SCPI99)
        self.declare([*self._source_commands(), *self._output_commands()])
        self.declare(self._trigger_commands())

    def _source_commands(self) -> list[Command]:
        source = "[:SOURce<1>]"
        voltage = f"{source}:VOLTage[:LEVel][:IMMediate]"
        pulse = f"{source}:PULSe"
        edge = f"{pulse}:TRANsition"
        initial = self.model.power_on
        high, low = self.level(initial.high_volts), self.level(initial.low_volts)
        polarities = {"NORMal": False, "INVerted": True}
        return [
            choice(
                f"{source}:FUNCtion[:SHAPe]",
                {"PULSe": None},
                lambda _: None,
                lambda: None,
                coupled=True,
            ),
            quantity(f"{voltage}:HIGH", high, self.set_high, self.high, coupled=True),
            quantity(f"{voltage}:LOW", low, self.set_low, self.low, coupled=True),
            choice(f"{pulse}:POLarity", polarities, self.set_inverted, self.inverted, coupled=True),
            quantity(
                f"{pulse}:WIDTh", self.width_parameter, self.set_width, self.width, coupled=True
            ),
            quantity(
                f"{pulse}:PERiod", self.period_parameter, self.set_period, self.period, coupled=True
            ),
            quantity(
                f"{pulse}:COUNt",
                self.count_parameter(MOST_PULSES),
                self.set_count,
                self.count,
                write=whole,
                coupled=True,
            ),
            question(f"{pulse}:COUNt:SENT", self.sent_pulses),
            quantity(
                f"{edge}[:LEADing]",
                self.edge_parameter,
                self.set_leading,
                self.leading,
                coupled=True,
            ),
            quantity(
                f"{edge}:TRAiling",
                self.edge_parameter,
                self.set_trailing,
                self.trailing,
                coupled=True,
            ),
        ]

    def _output_commands(self) -> list[Command]:
        return [
            on_off(":OUTPut<1>[:STATe]", self.model.switch_output, lambda: self.model.relay_on),
            quantity(
                ":OUTPut<1>:LOAD", load("INFinity"), self.set_load, self.load_ohms, coupled=True
            ),
            question(":OUTPut<1>:IMPedance", lambda: format_real(self.model.source_ohms)),
        ]

    def _trigger_commands(self) -> list[Command]:
        def set_source(source: FireSource) -> None:
            self.model.fire_source = source

        def set_continuous(on: bool) -> None:
            if on:
                raise ScpiError(-224, "continuous bursts are not made")

        return [
            choice(
                ":TRIGger[:SEQuence]:SOURce",
                _FIRE_SOURCES,
                set_source,
                lambda: self.model.fire_source,
            ),
            action(":INITiate[:IMMediate]", self.model.initiate),
            on_off(":INITiate:CONTinuous", set_continuous, lambda: False),
            action(":ABORt", self.model.abort),
        ]


class Scpi99Oscilloscope(Oscilloscope):
    """An oscilloscope of the scpi99 family: 16-bit numbers that hold 12-bit codes."""

    def __init__(self, identity: str, model: Digitizer) -> None:
        super().__init__(identity, model, SCPI99)
        self._binary = self._big_endian = True
        self.declare([*self._input_commands(), *self._trigger_commands()])
        self.declare(self._record_commands())

    def reset(self) -> None:
        """Go back to binary numbers, the high byte first, too."""
        super().reset()
        self._binary = self._big_endian = True

    def _input_commands(self) -> list[Command]:
        digitizer, initial = self.model.imperfections, self.model.power_on
        ranges = "[:SENSe<1-2>]:VOLTage[:DC]:RANGe"
        sweep = "[:SENSe<1>]:SWEep"
        peak_to_peak = number(*range_limits(digitizer), initial.range_volts[0], unit="V")
        interval = number(*interval_limits(digitizer), initial.interval_seconds, unit="S")
        share = number(0.0, 1.0, initial.reference)
        return [
            channel_quantity(f"{ranges}:PTPeak", peak_to_peak, self.set_range, self.range_volts),
            channel_quantity(
                f"{ranges}:OFFSet", self.volts_parameter, self.set_offset, self.offset_volts
            ),
            quantity(
                f"{sweep}:POINts", self.points_parameter, self.set_points, self.points, write=whole
            ),
            quantity(f"{sweep}:TINTerval", interval, self.set_interval, self.interval_seconds),
            quantity(f"{sweep}:OREFerence:LOCation", share, self.set_reference, self.reference),
        ]

    def _trigger_commands(self) -> list[Command]:
        trigger = ":TRIGger[:SEQuence]"
        slopes = {"POSitive": True, "NEGative": False}
        return [
            choice(f"{trigger}:SOURce", _TRIGGER_INPUTS, self.set_source, self.source),
            quantity(f"{trigger}:LEVel", self.volts_parameter, self.set_level, self.level_volts),
            choice(f"{trigger}:SLOPe", slopes, self.set_rising, self.rising),
            action(":INITiate[:IMMediate]", self.model.initiate),
            action(":TRIGger[:SEQuence][:IMMediate]", self.model.force),
            action(":ABORt", self.model.abort),
        ]

    def _record_commands(self) -> list[Command]:
        def set_format(call: Call) -> None:
            binary = call.word() == "INT"
            length = int(call.number(1)) if len(call.values) > 1 else 0
            if length not in ((0, 16) if binary else (0,)):
                raise ScpiError(-224)
            self._binary = binary

        def set_big_endian(big_endian: bool) -> None:
            self._big_endian = big_endian

        channel = (Word(_CHANNEL_WORDS),)
        return [
            Command(
                pattern=":FORMat[:DATA]",
                parameters=(Word(("INTeger", "ASCii")), number(0, 64, 0, whole=True)),
                required=1,
                execute=set_format,
                answer=lambda _: "INT,16" if self._binary else "ASC,0",
            ),
            choice(
                ":FORMat:BORDer",
                {"NORMal": True, "SWAPped": False},
                set_big_endian,
                lambda: self._big_endian,
            ),
            Command(pattern=":TRACe[:DATA]", query_parameters=channel, answer=self._data),
            Command(
                pattern=":TRACe[:DATA]:PREamble", query_parameters=channel, answer=self._preamble
            ),
        ]

    def _preamble(self, call: Call) -> Answer:
        record, channel = self.model.record(), _channel(call.word())
        return (
            "(DIF(VERSion 1999.0)"
            f"DIMension=X(TYPE IMPLicit SCALe {format_real(record.interval_seconds)} "
            f"OFFSet {format_real(record.first_seconds, 15)} "
            f'SIZE {record.points} UNITs "S")'
            f"DIMension=Y(TYPE EXPLicit SCALe {format_real(record.volts_per_code[channel])} "
            f"OFFSet {format_real(record.offset_volts[channel])} "
            f'SIZE {CONVERTER.codes} UNITs "V"))'
        )

    def _data(self, call: Call) -> Answer:
        record, channel = self.model.record(), _channel(call.word())
        if self._binary:
            order = ">i2" if self._big_endian else "<i2"
            return definite_block(record.codes[channel].astype(order).tobytes())
        return ",".join(format_real(value, 7) for value in record.volts(channel).tolist())


def _channel(word: str) -> int:
    return 1 if word == "CHAN2" else 0
