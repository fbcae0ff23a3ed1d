"""A two-channel oscilloscope that speaks SCPI, as imperfect as a real one.

Channel 1 sees the generator's terminal, channel 2 the cell's node. Twelve bits with
noise, clipping at both ends, ranges and intervals that become the next 1-2-5 step
without a word, and a pre-trigger that must fill before a trigger counts. Bandwidth and
offset errors are not simulated.
"""

import math
from collections import deque
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import Answer, Call, Command, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import Word, number

CHANNELS = 2
CODE_BITS = 12
CODES = 2**CODE_BITS
NOISE_CODES = 1.5
DIVISIONS = 8

SMALLEST_RANGE_VOLTS = 0.008
LARGEST_RANGE_VOLTS = 80.0
LARGEST_OFFSET_VOLTS = 40.0
SMALLEST_INTERVAL_SECONDS = 1e-9
LARGEST_INTERVAL_SECONDS = 10.0
FEWEST_POINTS = 10
MOST_POINTS = 1_000_000

MEASURING = 16
WAITING_FOR_TRIGGER = 32

_Floats = NDArray[np.float64]
_CHANNEL_WORDS = ("CHANnel1", "CHANnel2", "CHANnel")
_SOURCE_WORDS = ("INTernal1", "INTernal2", "INTernal", "EXTernal", "IMMediate", "BUS")


@dataclass(frozen=True, slots=True, kw_only=True)
class ScopeSettings:
    """What the oscilloscope is set to.

    range_volts: peak to peak, for each channel; offset_volts: the middle of the screen.
    reference: share of the record that lies before the trigger, 0 to 1.
    """

    range_volts: tuple[float, ...] = (8.0,) * CHANNELS
    offset_volts: tuple[float, ...] = (0.0,) * CHANNELS
    points: int = 1000
    interval_seconds: float = 1e-6
    reference: float = 0.0
    source: str = "IMM"
    level_volts: float = 0.0
    rising: bool = True
    binary: bool = True
    big_endian: bool = True

    @property
    def points_before(self) -> int:
        """How many samples must be taken before a trigger counts."""
        return round(self.reference * (self.points - 1))


@dataclass(frozen=True, slots=True, kw_only=True)
class Record:
    """One finished acquisition.

    codes: int16, shape (channels, points). first_seconds: instant of the first sample
    relative to the trigger.
    """

    codes: NDArray[np.int16]
    volts_per_code: tuple[float, ...]
    offset_volts: tuple[float, ...]
    interval_seconds: float
    first_seconds: float


@dataclass(slots=True, kw_only=True)
class _Acquisition:
    settings: ScopeSettings
    began_seconds: float
    stretches: deque[tuple[_Floats, _Floats, _Floats]] = field(default_factory=deque)
    trigger_seconds: float | None = None
    first_seconds: float = math.inf

    @property
    def armed_seconds(self) -> float:
        return self.began_seconds + self.settings.points_before * self.settings.interval_seconds

    @property
    def last_seconds(self) -> float:
        return self.first_seconds + (self.settings.points - 1) * self.settings.interval_seconds


class Oscilloscope(ScpiDevice):
    """The oscilloscope of the simulated bench; it observes the table.

    seed: of the noise.
    """

    def __init__(self, identity: str, *, clock: VirtualClock, seed: int = 1) -> None:
        super().__init__(identity)
        self._clock = clock
        self._random = np.random.default_rng(seed)
        self._settings = ScopeSettings()
        self._acquisition: _Acquisition | None = None
        self._record: Record | None = None
        self._seen_seconds = clock.now
        self.declare(self._commands())

    # Hooks of the engine.

    def reset(self) -> None:
        """Forget the record and go back to the settings after power-on."""
        self._acquisition = self._record = None
        self._settings = ScopeSettings()

    def trigger(self) -> None:
        """Trigger (*TRG); -211 unless armed with the bus as source."""
        acquisition = self._acquisition
        if acquisition is None or acquisition.settings.source != "BUS" or not self._is_armed():
            raise ScpiError(-211)
        self._trigger_at(acquisition, self._seen_seconds)

    def is_busy(self) -> bool:
        """Whether an acquisition is under way."""
        return self._acquisition is not None

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
            window_seconds = settings.points * settings.interval_seconds
            self._clock.advance_to(acquisition.armed_seconds + window_seconds)
        if acquisition.trigger_seconds is None:
            raise ScpiError(-214)
        # One interval more, so that rounding can't leave the last sample out.
        self._clock.advance_to(acquisition.last_seconds + settings.interval_seconds)

    def operation_condition(self) -> int:
        """Return the bits for measuring and for waiting for trigger, that is really armed."""
        return MEASURING * (self._acquisition is not None) | WAITING_FOR_TRIGGER * self._is_armed()

    # Signals from outside.

    def trigger_externally(self, at_seconds: float) -> None:
        """Take an edge on the external trigger input; without being armed it is lost."""
        acquisition = self._acquisition
        if acquisition is not None and acquisition.settings.source == "EXT" and self._is_armed():
            self._trigger_at(acquisition, at_seconds)

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
        if acquisition.trigger_seconds is None:
            self._forget_what_scrolled_out(acquisition)
        elif self._seen_seconds >= acquisition.last_seconds:
            self._finish(acquisition)
        self.refresh()

    # Acquisition.

    def _is_armed(self) -> bool:
        acquisition = self._acquisition
        return (
            acquisition is not None
            and acquisition.trigger_seconds is None
            and self._seen_seconds >= acquisition.armed_seconds
        )

    def _initiate(self) -> None:
        if self._acquisition is not None:
            raise ScpiError(-213)
        self._record = None
        self._seen_seconds = self._clock.now
        acquisition = _Acquisition(settings=self._settings, began_seconds=self._clock.now)
        self._acquisition = acquisition
        if acquisition.settings.source == "IMM" and self._is_armed():
            self._trigger_at(acquisition, acquisition.armed_seconds)

    def _abort(self) -> None:
        self._acquisition = None

    def _look_for_trigger(
        self, acquisition: _Acquisition, before: tuple[_Floats, _Floats, _Floats] | None
    ) -> None:
        if not self._is_armed():
            return
        settings = acquisition.settings
        if settings.source == "IMM":
            self._trigger_at(acquisition, acquisition.armed_seconds)
        elif settings.source in ("INT1", "INT2"):
            stretch = acquisition.stretches[-1]
            channel = int(settings.source[-1])
            times, volts = stretch[0], stretch[channel]
            if before is not None:
                # A jump between two stretches is an edge like any other.
                times = np.concatenate((before[0][-1:], times))
                volts = np.concatenate((before[channel][-1:], volts))
            at_seconds = first_crossing(
                times,
                volts,
                level_volts=settings.level_volts,
                rising=settings.rising,
                from_seconds=acquisition.armed_seconds,
            )
            if at_seconds is not None:
                self._trigger_at(acquisition, at_seconds)

    def _trigger_at(self, acquisition: _Acquisition, at_seconds: float) -> None:
        # The moment of waiting may have been short; the event register saw it all the same.
        self.status.operation.update(MEASURING | WAITING_FOR_TRIGGER)
        settings = acquisition.settings
        # The sample clock runs since INITiate and knows nothing of the trigger.
        elapsed = (at_seconds - acquisition.began_seconds) / settings.interval_seconds
        index = math.ceil(elapsed - 1e-6) - settings.points_before
        acquisition.trigger_seconds = at_seconds
        acquisition.first_seconds = (
            acquisition.began_seconds + max(index, 0) * settings.interval_seconds
        )

    def _forget_what_scrolled_out(self, acquisition: _Acquisition) -> None:
        settings = acquisition.settings
        oldest_seconds = (
            self._seen_seconds - (settings.points_before + 1) * settings.interval_seconds
        )
        while len(acquisition.stretches) > 1 and acquisition.stretches[0][0][-1] < oldest_seconds:
            acquisition.stretches.popleft()

    def _finish(self, acquisition: _Acquisition) -> None:
        settings = acquisition.settings
        assert acquisition.trigger_seconds is not None
        grid = acquisition.first_seconds + settings.interval_seconds * np.arange(settings.points)
        times, *signals = (
            np.concatenate(part) for part in zip(*acquisition.stretches, strict=True)
        )
        volts_per_code = tuple(volts / CODES for volts in settings.range_volts)
        codes = np.empty((CHANNELS, settings.points), dtype=np.int16)
        for channel, signal in enumerate(signals):
            exact = (np.interp(grid, times, signal) - settings.offset_volts[channel]) / (
                volts_per_code[channel]
            )
            noisy = exact + NOISE_CODES * self._random.standard_normal(settings.points)
            codes[channel] = np.clip(np.rint(noisy), -CODES // 2, CODES // 2 - 1)
        self._record = Record(
            codes=codes,
            volts_per_code=volts_per_code,
            offset_volts=settings.offset_volts,
            interval_seconds=settings.interval_seconds,
            first_seconds=acquisition.first_seconds - acquisition.trigger_seconds,
        )
        self._acquisition = None

    # Reading the record.

    def _finished_record(self) -> Record:
        if self._record is None:
            raise ScpiError(-230)
        return self._record

    def _preamble(self, call: Call) -> Answer:
        record, channel = self._finished_record(), _channel(call.word())
        return (
            "(DIF(VERSion 1999.0)"
            f"DIMension=X(TYPE IMPLicit SCALe {format_real(record.interval_seconds)} "
            f"OFFSet {format_real(record.first_seconds, 15)} "
            f'SIZE {record.codes.shape[1]} UNITs "S")'
            f"DIMension=Y(TYPE EXPLicit SCALe {format_real(record.volts_per_code[channel])} "
            f"OFFSet {format_real(record.offset_volts[channel])} "
            f'SIZE {CODES} UNITs "V"))'
        )

    def _data(self, call: Call) -> Answer:
        record, channel = self._finished_record(), _channel(call.word())
        codes = record.codes[channel]
        if self._settings.binary:
            order = ">i2" if self._settings.big_endian else "<i2"
            return definite_block(codes.astype(order).tobytes())
        volts = codes * record.volts_per_code[channel] + record.offset_volts[channel]
        return ",".join(format_real(value, 7) for value in volts.tolist())

    # The panel.

    def _take(self, settings: ScopeSettings) -> None:
        self._settings = settings

    def _commands(self) -> list[Command]:
        return [
            *self._input_commands(),
            *self._sweep_commands(),
            *self._trigger_commands(),
            *self._record_commands(),
        ]

    def _input_commands(self) -> list[Command]:
        initial = ScopeSettings()

        def set_range(call: Call) -> None:
            volts = DIVISIONS * next_step(call.number() / DIVISIONS)
            self._take(
                replace(
                    self._settings, range_volts=_changed(self._settings.range_volts, call, volts)
                )
            )

        def set_offset(call: Call) -> None:
            self._take(
                replace(
                    self._settings,
                    offset_volts=_changed(self._settings.offset_volts, call, call.number()),
                )
            )

        return [
            Command(
                pattern="[:SENSe<1-2>]:VOLTage[:DC]:RANGe:PTPeak",
                parameters=(
                    number(
                        SMALLEST_RANGE_VOLTS, LARGEST_RANGE_VOLTS, initial.range_volts[0], unit="V"
                    ),
                ),
                execute=set_range,
                answer=lambda call: format_real(self._settings.range_volts[call.suffixes[0] - 1]),
            ),
            Command(
                pattern="[:SENSe<1-2>]:VOLTage[:DC]:RANGe:OFFSet",
                parameters=(number(-LARGEST_OFFSET_VOLTS, LARGEST_OFFSET_VOLTS, 0.0, unit="V"),),
                execute=set_offset,
                answer=lambda call: format_real(self._settings.offset_volts[call.suffixes[0] - 1]),
            ),
        ]

    def _sweep_commands(self) -> list[Command]:
        initial = ScopeSettings()
        return [
            Command(
                pattern="[:SENSe<1>]:SWEep:POINts",
                parameters=(number(FEWEST_POINTS, MOST_POINTS, initial.points, whole=True),),
                execute=lambda call: self._take(replace(self._settings, points=int(call.number()))),
                answer=lambda _: format_integer(self._settings.points),
            ),
            Command(
                pattern="[:SENSe<1>]:SWEep:TINTerval",
                parameters=(
                    number(
                        SMALLEST_INTERVAL_SECONDS,
                        LARGEST_INTERVAL_SECONDS,
                        initial.interval_seconds,
                        unit="S",
                    ),
                ),
                execute=lambda call: self._take(
                    replace(self._settings, interval_seconds=next_step(call.number()))
                ),
                answer=lambda _: format_real(self._settings.interval_seconds),
            ),
            Command(
                pattern="[:SENSe<1>]:SWEep:OREFerence:LOCation",
                parameters=(number(0.0, 1.0, initial.reference),),
                execute=lambda call: self._take(replace(self._settings, reference=call.number())),
                answer=lambda _: format_real(self._settings.reference),
            ),
        ]

    def _trigger_commands(self) -> list[Command]:
        def set_source(call: Call) -> None:
            self._take(
                replace(self._settings, source="INT1" if call.word() == "INT" else call.word())
            )

        return [
            Command(
                pattern=":TRIGger[:SEQuence]:SOURce",
                parameters=(Word(_SOURCE_WORDS),),
                execute=set_source,
                answer=lambda _: self._settings.source,
            ),
            Command(
                pattern=":TRIGger[:SEQuence]:LEVel",
                parameters=(number(-LARGEST_OFFSET_VOLTS, LARGEST_OFFSET_VOLTS, 0.0, unit="V"),),
                execute=lambda call: self._take(replace(self._settings, level_volts=call.number())),
                answer=lambda _: format_real(self._settings.level_volts),
            ),
            Command(
                pattern=":TRIGger[:SEQuence]:SLOPe",
                parameters=(Word(("POSitive", "NEGative")),),
                execute=lambda call: self._take(
                    replace(self._settings, rising=call.word() == "POS")
                ),
                answer=lambda _: "POS" if self._settings.rising else "NEG",
            ),
            Command(pattern=":INITiate[:IMMediate]", execute=lambda _: self._initiate()),
            Command(pattern=":ABORt", execute=lambda _: self._abort()),
        ]

    def _record_commands(self) -> list[Command]:
        def set_format(call: Call) -> None:
            binary = call.word() == "INT"
            length = int(call.number(1)) if len(call.values) > 1 else 0
            if length not in ((0, 16) if binary else (0,)):
                raise ScpiError(-224)
            self._take(replace(self._settings, binary=binary))

        channel = (Word(_CHANNEL_WORDS),)
        return [
            Command(
                pattern=":FORMat[:DATA]",
                parameters=(Word(("INTeger", "ASCii")), number(0, 64, 0, whole=True)),
                required=1,
                execute=set_format,
                answer=lambda _: "INT,16" if self._settings.binary else "ASC,0",
            ),
            Command(
                pattern=":FORMat:BORDer",
                parameters=(Word(("NORMal", "SWAPped")),),
                execute=lambda call: self._take(
                    replace(self._settings, big_endian=call.word() == "NORM")
                ),
                answer=lambda _: "NORM" if self._settings.big_endian else "SWAP",
            ),
            Command(pattern=":TRACe[:DATA]", query_parameters=channel, answer=self._data),
            Command(
                pattern=":TRACe[:DATA]:PREamble", query_parameters=channel, answer=self._preamble
            ),
        ]


def next_step(value: float) -> float:
    """Return the smallest 1-2-5 step that is not below a positive value."""
    exponent = math.floor(math.log10(value))
    for step in (1, 2, 5, 10):
        # Read from text: 2e-9 written so is the same number everywhere.
        candidate = float(f"{step}e{exponent}")
        if value <= candidate * (1 + 1e-9):
            return candidate
    return float(f"2e{exponent + 1}")


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


def _channel(word: str) -> int:
    return 1 if word == "CHAN2" else 0


def _changed(values: tuple[float, ...], call: Call, value: float) -> tuple[float, ...]:
    index = call.suffixes[0] - 1
    return (*values[:index], value, *values[index + 1 :])
