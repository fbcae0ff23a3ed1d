"""The control port of the simulated bench: virtual time, what really happened, and faults.

For rehearsals and tests only. No real table has one, so nothing that measures may use it.

    :CLOCk:TIME?                    virtual time, s
    :CLOCk:ADVance <seconds>        let time pass; -221 on a bench that keeps real time, and
                                    beyond 2e9 s in all
    :TRUTh:POLarization?            of the cell, C/m2; UP? the part of it that is up, 0 to 1
    :TRUTh:NODE?, TERMinal?         volts across the cell, and at the generator's terminal
    :TRUTh:OUTPut?                  whether the generator's output is commanded on, 1 or 0
    :TRUTh:DELivered?               whole pulses that reached the terminal
    :TRUTh:PRESets?                 those of them that go below 0 V, which drive the cell down
    :TRUTh:MAXimum?                 largest EMF, without sign, ever put on the closed output, V
    :TRUTh:HIGHest?                 largest voltage, without sign, ever across the cell, V; of
                                    a long train's equal periods those that were integrated
    :TRUTh:CAPacitance?             of cell and probe, F
    :TRUTh:CELL?                    GOOD, OPEN or SHORt (OPEN where it is both)
    :FAULt:ADD <kind>,<instrument>,<exchange from now>[,<value>]
    :FAULt:CLEar                    let nothing more happen; what happened stays counted
    :FAULt:COUNt?                   faults that happened; COUNt:KIND? <kind> of one kind
    :FAULt:PENDing?                 faults that wait for their exchange
    :FAULt:EXCHanges? <instrument>  program messages that it has got so far

Instruments are GENerator and OSCilloscope. An exchange from now of 1 is the next program
message that the instrument gets. Kinds, and what their value is (see faults.py):

    NOANswer, CLOSe, RESet          1 (or nothing): the message is followed, then no answer
                                    comes, or the connection is closed or reset; 0: it is not
    LATE                            real seconds by which the answer is late
    CUT                             share of the answer's bytes that come, 0 to below 1
    GARBage                         string of characters to be sent instead of an answer
    ERRor                           number of the error that is put into the queue
    TRIGger                         none: the next trigger does nothing
    POWer                           seconds without power
    OPEN                            none: the cell loses contact
    SHORt                           ohms: the cell becomes a short
"""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.faults import KINDS, Fault, FaultSchedule
from pulsetally.simulators.generator_model import LATEST_SECONDS, GeneratorModel
from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_headers import short_form
from pulsetally.simulators.scpi_message import Element, NumberElement, StringElement
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import Value, Word, number
from pulsetally.simulators.table import Table

LONGEST_ADVANCE_SECONDS = 1e9
# Enough for 1 ns after eleven days of virtual time.
TIME_DIGITS = 16
MOST_EXCHANGES = 10**12


class BenchControl(ScpiDevice):
    """Moves the virtual clock and tells the truth about the cell and the wiring.

    farads: what the node's capacitance is, cell and probe together.
    schedule: of the faults.
    """

    def __init__(
        self,
        identity: str,
        *,
        table: Table,
        clock: VirtualClock,
        generator: GeneratorModel,
        farads: float,
        schedule: FaultSchedule,
    ) -> None:
        super().__init__(identity)
        self._clock = clock
        highest = _HighestNode()
        table.observe(highest)

        def advance(call: Call) -> None:
            if not clock.may_be_advanced:
                raise ScpiError(-221, "the clock follows real time; wait instead")
            seconds = call.number()
            if clock.now + seconds > LATEST_SECONDS:
                raise ScpiError(
                    -221,
                    f"it is {clock.now:.3g} s; virtual time goes to {LATEST_SECONDS:g} s",
                )
            clock.advance(seconds)

        self.declare(
            [
                Command(
                    pattern=":CLOCk:TIME", answer=lambda _: format_real(clock.now, TIME_DIGITS)
                ),
                Command(
                    pattern=":CLOCk:ADVance",
                    parameters=(number(0.0, LONGEST_ADVANCE_SECONDS, 0.0, unit="S"),),
                    execute=advance,
                ),
                _truth("POLarization", lambda: format_real(table.polarization)),
                _truth("UP", lambda: format_real(table.up_fraction)),
                _truth("NODE", lambda: format_real(table.node_volts)),
                _truth("TERMinal", lambda: format_real(table.terminal_volts)),
                _truth("OUTPut", lambda: "1" if generator.relay_on else "0"),
                _truth("DELivered", lambda: format_integer(table.delivered)),
                _truth("PRESets", lambda: format_integer(table.presets)),
                _truth("MAXimum", lambda: format_real(generator.largest_emf_volts)),
                _truth("HIGHest", lambda: format_real(highest.volts)),
                _truth("CAPacitance", lambda: format_real(farads)),
                _truth("CELL", lambda: _state_of_cell(table)),
            ]
        )
        self.declare(_fault_commands(schedule))

    def begin_message(self) -> None:
        """Come up to the present."""
        self._clock.catch_up()


class _HighestNode:
    """Remember the largest voltage across the cell, volts, without its sign."""

    def __init__(self) -> None:
        self.volts = 0.0

    def saw(
        self,
        times: NDArray[np.float64],
        terminal_volts: NDArray[np.float64],
        node_volts: NDArray[np.float64],
    ) -> None:
        """Take one stretch of the table's course."""
        self.volts = max(self.volts, float(node_volts.max()), -float(node_volts.min()))


def _state_of_cell(table: Table) -> str:
    if not table.connected_cell:
        return "OPEN"
    return "SHOR" if table.broken else "GOOD"


class _NumberOrText:
    """A plain number or a string."""

    def accept(self, element: Element) -> Value:
        if isinstance(element, StringElement):
            return element.text
        if isinstance(element, NumberElement) and not element.suffix:
            return element.value
        raise ScpiError(-104, "a number without a unit, or a string")


def _fault_commands(schedule: FaultSchedule) -> list[Command]:
    kinds = {short_form(kind.word): name for name, kind in KINDS.items()}
    kind_word = Word(tuple(kind.word for kind in KINDS.values()))
    instruments = {"GEN": "generator", "OSC": "oscilloscope"}
    instrument_word = Word(("GENerator", "OSCilloscope"))

    def add(call: Call) -> None:
        kind = kinds[call.word(0)]
        values = _value_of(kind, call.values[3]) if len(call.values) > 3 else {}
        try:
            fault = Fault(
                kind=kind,
                instrument=instruments[call.word(1)],
                exchange=int(call.number(2)),
                **values,
            )
        except ValueError as error:
            raise ScpiError(-224, str(error)) from error
        schedule.add_from_now(fault)

    def count(call: Call) -> str:
        kind = kinds[call.word()]
        return format_integer(sum(fault.kind == kind for fault, _ in schedule.happened))

    return [
        Command(
            pattern=":FAULt:ADD",
            parameters=(
                kind_word,
                instrument_word,
                number(1, MOST_EXCHANGES, 1, whole=True),
                _NumberOrText(),
            ),
            required=3,
            execute=add,
        ),
        Command(pattern=":FAULt:CLEar", execute=lambda _: schedule.clear()),
        Command(pattern=":FAULt:COUNt", answer=lambda _: format_integer(len(schedule.happened))),
        Command(pattern=":FAULt:COUNt:KIND", query_parameters=(kind_word,), answer=count),
        Command(pattern=":FAULt:PENDing", answer=lambda _: format_integer(schedule.pending)),
        Command(
            pattern=":FAULt:EXCHanges",
            query_parameters=(instrument_word,),
            answer=lambda call: format_integer(schedule.exchanges(instruments[call.word()])),
        ),
    ]


def _value_of(kind: str, value: Value) -> dict[str, Any]:
    """Return the value that a kind takes first, under its name; -224 where it has no use for it."""
    takes = KINDS[kind].takes
    if not takes:
        raise ScpiError(-108, f"{kind} takes no value")
    name = takes[0]
    if isinstance(value, str) != (name == "message"):
        raise ScpiError(-104, f"{name} is a {'string' if name == 'message' else 'number'}")
    if name in ("followed", "number"):
        if not float(value).is_integer():
            raise ScpiError(-224, f"{name} is a whole number")
        value = bool(value) if name == "followed" else int(value)
    return {name: value}


def _truth(name: str, answer: Callable[[], str]) -> Command:
    def tell(_: Call) -> str:
        return answer()

    return Command(pattern=f":TRUTh:{name}", answer=tell)
