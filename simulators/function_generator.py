"""A pulse generator with one output that speaks SCPI, as imperfect as a real one.

Its levels have 14 bits, its times 1 ns; the panel shows levels into the load it was told
about, while the terminal shows what the wiring makes of them. A changed level moves the
resting output at once, also in the middle of a round.

SCPI-99 has no node OUTPut:LOAD; it is here because bench generators have it.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from pulsetally.simulators.clock import Appointment, VirtualClock
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice, on_off
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import Limits, Number, Word, number
from pulsetally.simulators.table import Table

# The EMF is a 14-bit two's complement code over -10 V to +10 V.
LEVEL_BITS = 14
EMF_SPAN_VOLTS = 10.0
VOLTS_PER_CODE = 2 * EMF_SPAN_VOLTS / (1 << LEVEL_BITS)
_LARGEST_CODE = (1 << (LEVEL_BITS - 1)) - 1

TIME_STEPS_PER_SECOND = 1e9
SMALLEST_EDGE_SECONDS = 5e-9
LARGEST_EDGE_SECONDS = 1.0
SMALLEST_WIDTH_SECONDS = 20e-9
LARGEST_WIDTH_SECONDS = 1000.0
SMALLEST_PERIOD_SECONDS = 40e-9
LARGEST_PERIOD_SECONDS = 2000.0
MOST_PULSES = 10**9
SMALLEST_LOAD_OHMS = 1.0
LARGEST_LOAD_OHMS = 1e6

RELAY_SECONDS = 0.010
# A linear ramp goes from 10 % to 90 % in this part of its whole duration.
RAMP_SHARE = 0.8

SETTLING = 2
SWEEPING = 8
WAITING_FOR_TRIGGER = 32

_SHAPES = ("PULSe",)


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseSettings:
    """What the generator is set to.

    high_code, low_code: EMF levels in steps of VOLTS_PER_CODE.
    load_ohms: the load that levels on the panel are meant for; inf for an open circuit.
    width_seconds at 50 %, edges from 10 % to 90 %.
    """

    high_code: int = 819
    low_code: int = 0
    load_ohms: float = math.inf
    inverted: bool = False
    width_seconds: float = 100e-6
    period_seconds: float = 1e-3
    leading_seconds: float = 10e-9
    trailing_seconds: float = 10e-9
    count: int = 1

    @property
    def base_volts(self) -> float:
        """EMF at rest."""
        return VOLTS_PER_CODE * (self.high_code if self.inverted else self.low_code)

    @property
    def level_volts(self) -> float:
        """EMF on the flat top of a pulse."""
        return VOLTS_PER_CODE * (self.low_code if self.inverted else self.high_code)

    def conflict(self) -> str:
        """Return what about the settings can't go together; '' when all can."""
        half_ramps = (self.leading_seconds + self.trailing_seconds) / RAMP_SHARE / 2
        slack = 0.1 / TIME_STEPS_PER_SECOND
        if self.high_code <= self.low_code:
            return "HIGH is not above LOW"
        if self.width_seconds < half_ramps - slack:
            return "the edges are longer than the width"
        if self.width_seconds + half_ramps > self.period_seconds + slack:
            return "width and edges are longer than the period"
        return ""


class FunctionGenerator(ScpiDevice):
    """The generator of the simulated bench.

    source_ohms: output resistance, which the panel's levels assume.
    sync: called with the instant (s) at which a burst begins; the sync output.
    """

    def __init__(
        self,
        identity: str,
        *,
        table: Table,
        clock: VirtualClock,
        source_ohms: float = 50.0,
        sync: Callable[[float], None] = lambda _: None,
    ) -> None:
        super().__init__(identity)
        self._table, self._clock = table, clock
        self._source_ohms, self._sync = source_ohms, sync
        self._settings = self._wanted = PulseSettings()
        self._conflict = False
        self._trigger_source = "BUS"
        self._initiated = False
        self._relay_on = False
        self._closing: Appointment | None = None
        self._closed = False
        self._burst: tuple[PulseTrain, Appointment] | None = None
        self._largest_emf_volts = 0.0
        self.declare(self._commands())
        self._rest()

    # Ground truth for rehearsals.

    @property
    def relay_on(self) -> bool:
        """Whether the output is commanded on."""
        return self._relay_on

    @property
    def largest_emf_volts(self) -> float:
        """Largest EMF, without its sign, that was ever put on the closed output."""
        return self._largest_emf_volts

    # Hooks of the engine.

    def reset(self) -> None:
        """Open the output first, then go back to the settings after power-on."""
        self._switch_output(False)
        self._initiated = False
        self._trigger_source = "BUS"
        self._settings = self._wanted = PulseSettings()
        self._end_burst()
        self._rest()

    def begin_message(self) -> None:
        """Forget a conflict of an earlier message."""
        self._conflict = False

    def end_coupled(self) -> None:
        """Check the settings together; take them over, or put the old ones back (-221)."""
        wanted = self._wanted
        if wanted == self._settings:
            return
        if problem := wanted.conflict():
            self._wanted, self._conflict = self._settings, True
            raise ScpiError(-221, problem)
        before, self._settings = self._settings, wanted
        if (before.base_volts, before.level_volts) != (wanted.base_volts, wanted.level_volts):
            # New levels reach the output at once and cut a burst short; times wait for
            # the next burst.
            self._end_burst()
            self._rest()

    def is_busy(self) -> bool:
        """Whether a burst runs or is waited for."""
        return self._burst is not None or self._initiated

    def wait(self) -> None:
        """Let time pass until the burst has ended; -214 when it waits for a trigger."""
        if self._initiated:
            raise ScpiError(-214)
        if self._burst is not None:
            self._clock.advance_to(self._burst[0].end_seconds)

    def trigger(self) -> None:
        """Fire (*TRG); -211 unless initiated with the bus as source."""
        self._refuse_after_conflict()
        if not self._initiated or self._trigger_source != "BUS":
            raise ScpiError(-211)
        self._fire()

    def operation_condition(self) -> int:
        """Return the bits for settling, sweeping (a burst runs) and waiting for trigger."""
        return (
            SETTLING * (self._closing is not None)
            | SWEEPING * (self._burst is not None)
            | WAITING_FOR_TRIGGER * self._initiated
        )

    # The output.

    def _refuse_after_conflict(self) -> None:
        if self._conflict:
            raise ScpiError(-221, "the settings of this message were put back")

    def _rest(self) -> None:
        self._table.rest_at(self._settings.base_volts)
        self._note_emf(self._settings.base_volts)

    def _note_emf(self, *volts: float) -> None:
        if self._closed:
            self._largest_emf_volts = max(self._largest_emf_volts, *map(abs, volts))

    def _initiate(self) -> None:
        self._refuse_after_conflict()
        if self._initiated or self._burst is not None:
            raise ScpiError(-213)
        self._initiated = True
        if self._trigger_source == "IMM":
            self._fire()

    def _fire(self) -> None:
        settings = self._settings
        train = PulseTrain(
            base_volts=settings.base_volts,
            level_volts=settings.level_volts,
            width_seconds=settings.width_seconds,
            leading_seconds=settings.leading_seconds,
            trailing_seconds=settings.trailing_seconds,
            period_seconds=settings.period_seconds,
            count=settings.count,
            start_seconds=self._clock.now,
        )
        self._initiated = False
        self._table.play(train)
        self._note_emf(train.base_volts, train.level_volts)
        self._burst = (train, self._clock.call_at(train.end_seconds, self._burst_ended))
        self._sync(train.start_seconds)

    def _burst_ended(self) -> None:
        self._burst = None
        self.refresh()

    def _end_burst(self) -> None:
        if self._burst is None:
            return
        self._burst[1].cancel()
        self._burst = None
        self._table.stop_drive()

    def _abort(self) -> None:
        self._initiated = False
        self._end_burst()

    def _switch_output(self, on: bool) -> None:
        if on:
            self._refuse_after_conflict()
        if on == self._relay_on:
            return
        self._relay_on = on
        if on:
            self._closing = self._clock.call_at(self._clock.now + RELAY_SECONDS, self._close)
            return
        if self._closing is not None:
            self._closing.cancel()
            self._closing = None
        # Opening takes no time: an interlock would not wait either.
        self._closed = False
        self._table.connect(False)

    def _close(self) -> None:
        self._closing = None
        self._closed = True
        self._table.connect(True)
        self._note_emf(self._settings.base_volts)
        if self._burst is not None:
            self._note_emf(self._burst[0].level_volts)
        self.refresh()

    # The panel.

    def _want(self, settings: PulseSettings) -> None:
        self._wanted = settings

    def _panel_factor(self) -> float:
        load_ohms = self._wanted.load_ohms
        if math.isinf(load_ohms):
            return 1.0
        return load_ohms / (load_ohms + self._source_ohms)

    def _level_limits(self, default_code: int) -> Limits:
        volts = EMF_SPAN_VOLTS * self._panel_factor()
        return Limits(-volts, volts, VOLTS_PER_CODE * default_code * self._panel_factor())

    def _code(self, panel_volts: float) -> int:
        code = round(panel_volts / self._panel_factor() / VOLTS_PER_CODE)
        # +10 V has no code of its own: the converter stops one step below.
        return min(code, _LARGEST_CODE)

    def _panel_volts(self, code: int) -> str:
        return format_real(code * VOLTS_PER_CODE * self._panel_factor())

    def _commands(self) -> list[Command]:
        return [*self._source_commands(), *self._output_commands(), *self._trigger_commands()]

    def _source_commands(self) -> list[Command]:
        initial = PulseSettings()

        def level(limits: Callable[[], Limits]) -> tuple[Number]:
            return (Number(limits=limits, unit="V"),)

        edge = number(
            SMALLEST_EDGE_SECONDS, LARGEST_EDGE_SECONDS, initial.leading_seconds, unit="S"
        )
        source = "[:SOURce<1>]"
        return [
            Command(
                pattern=f"{source}:FUNCtion[:SHAPe]",
                parameters=(Word(_SHAPES),),
                execute=lambda _: None,
                answer=lambda _: "PULS",
                coupled=True,
            ),
            Command(
                pattern=f"{source}:VOLTage[:LEVel][:IMMediate]:HIGH",
                parameters=level(lambda: self._level_limits(initial.high_code)),
                execute=lambda call: self._want(
                    replace(self._wanted, high_code=self._code(call.number()))
                ),
                answer=lambda _: self._panel_volts(self._wanted.high_code),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:VOLTage[:LEVel][:IMMediate]:LOW",
                parameters=level(lambda: self._level_limits(initial.low_code)),
                execute=lambda call: self._want(
                    replace(self._wanted, low_code=self._code(call.number()))
                ),
                answer=lambda _: self._panel_volts(self._wanted.low_code),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:POLarity",
                parameters=(Word(("NORMal", "INVerted")),),
                execute=lambda call: self._want(
                    replace(self._wanted, inverted=call.word() == "INV")
                ),
                answer=lambda _: "INV" if self._wanted.inverted else "NORM",
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:WIDTh",
                parameters=(
                    number(
                        SMALLEST_WIDTH_SECONDS,
                        LARGEST_WIDTH_SECONDS,
                        initial.width_seconds,
                        unit="S",
                    ),
                ),
                execute=lambda call: self._want(
                    replace(self._wanted, width_seconds=_stepped(call.number()))
                ),
                answer=lambda _: format_real(self._wanted.width_seconds),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:PERiod",
                parameters=(
                    number(
                        SMALLEST_PERIOD_SECONDS,
                        LARGEST_PERIOD_SECONDS,
                        initial.period_seconds,
                        unit="S",
                    ),
                ),
                execute=lambda call: self._want(
                    replace(self._wanted, period_seconds=_stepped(call.number()))
                ),
                answer=lambda _: format_real(self._wanted.period_seconds),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:COUNt",
                parameters=(number(1, MOST_PULSES, 1, whole=True),),
                execute=lambda call: self._want(replace(self._wanted, count=int(call.number()))),
                answer=lambda _: format_integer(self._wanted.count),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:TRANsition[:LEADing]",
                parameters=(edge,),
                execute=lambda call: self._want(
                    replace(self._wanted, leading_seconds=call.number())
                ),
                answer=lambda _: format_real(self._wanted.leading_seconds),
                coupled=True,
            ),
            Command(
                pattern=f"{source}:PULSe:TRANsition:TRAiling",
                parameters=(edge,),
                execute=lambda call: self._want(
                    replace(self._wanted, trailing_seconds=call.number())
                ),
                answer=lambda _: format_real(self._wanted.trailing_seconds),
                coupled=True,
            ),
        ]

    def _output_commands(self) -> list[Command]:
        load_limits = Limits(SMALLEST_LOAD_OHMS, LARGEST_LOAD_OHMS, math.inf)

        return [
            on_off(
                lambda call: self._switch_output(call.switch()),
                lambda: self._relay_on,
                ":OUTPut<1>[:STATe]",
            ),
            Command(
                pattern=":OUTPut<1>:LOAD",
                parameters=(
                    Number(limits=lambda: load_limits, unit="OHM", words={"INFinity": math.inf}),
                ),
                execute=lambda call: self._want(replace(self._wanted, load_ohms=call.number())),
                answer=lambda _: format_real(self._wanted.load_ohms),
                coupled=True,
            ),
            Command(
                pattern=":OUTPut<1>:IMPedance", answer=lambda _: format_real(self._source_ohms)
            ),
        ]

    def _trigger_commands(self) -> list[Command]:
        def source(call: Call) -> None:
            self._trigger_source = call.word()

        def continuous(call: Call) -> None:
            if call.switch():
                raise ScpiError(-224, "continuous bursts are not made")

        return [
            Command(
                pattern=":TRIGger[:SEQuence]:SOURce",
                parameters=(Word(("BUS", "IMMediate", "EXTernal")),),
                execute=source,
                answer=lambda _: self._trigger_source,
            ),
            Command(pattern=":INITiate[:IMMediate]", execute=lambda _: self._initiate()),
            on_off(continuous, lambda: False, ":INITiate:CONTinuous"),
            Command(pattern=":ABORt", execute=lambda _: self._abort()),
        ]


def _stepped(seconds: float) -> float:
    return round(seconds * TIME_STEPS_PER_SECOND) / TIME_STEPS_PER_SECOND
