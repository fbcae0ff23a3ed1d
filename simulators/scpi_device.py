"""Describe an instrument to the SCPI engine: its commands, its status, its hooks."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_headers import HeaderTable
from pulsetally.simulators.scpi_numbers import format_integer
from pulsetally.simulators.scpi_parameters import Parameter, Value, number
from pulsetally.simulators.scpi_status import OPERATION_COMPLETE, EventGroup, Status

SCPI_VERSION = "1999.0"

Answer = str | bytes


@dataclass(frozen=True, slots=True, kw_only=True)
class Call:
    """One command or query as it was sent.

    suffixes: the numeric suffixes of the pattern's nodes, in the pattern's order.
    values: what the parameters accepted.
    output_waiting: an answer of the same message is waiting to be read (MAV).
    """

    suffixes: tuple[int, ...] = ()
    values: tuple[Value, ...] = ()
    output_waiting: bool = False

    def number(self, index: int = 0) -> float:
        """Return a value that is a number."""
        value = self.values[index]
        if isinstance(value, str | bytes):
            raise TypeError(f"parameter {index} is no number: {value!r}")
        return float(value)

    def word(self, index: int = 0) -> str:
        """Return a value that is a word or a string."""
        value = self.values[index]
        if not isinstance(value, str):
            raise TypeError(f"parameter {index} is no word: {value!r}")
        return value

    def switch(self, index: int = 0) -> bool:
        """Return a value that is on or off."""
        return bool(self.values[index])


@dataclass(frozen=True, slots=True, kw_only=True)
class Command:
    """One row of an instrument's command table.

    pattern: header pattern, see scpi_headers; without a question mark.
    parameters: what stands behind the header of the command form.
    query_parameters: what stands behind the header of the query form. With exactly one
    number among `parameters`, the query form also takes MIN, MAX or DEF.
    required: how many parameters must be there; all when None.
    execute: does the command; None where only the query exists.
    answer: answers the query; None where only the command exists.
    coupled: a setting that is checked against others when the group of coupled commands
    ends (IEEE 488.2 section 6.4.5), that is before any other command or query.
    indefinite: the answer has no end of its own, so that no query may follow it (-440).
    unterminated: no newline is sent behind the answer when it is the message's last.
    """

    pattern: str
    parameters: tuple[Parameter, ...] = ()
    query_parameters: tuple[Parameter, ...] = ()
    required: int | None = None
    execute: Callable[[Call], None] | None = None
    answer: Callable[[Call], Answer] | None = None
    coupled: bool = False
    indefinite: bool = False
    unterminated: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Manner:
    """How a family of instruments speaks, whatever the instrument is for.

    name: of the family; identity: what it adds to the model in *IDN?.
    system: returns the rows for the error queue and whatever else every instrument of
    the family has besides the common commands.
    echoes: answers repeat the header of the query, common commands' excepted.
    """

    name: str
    identity: str
    system: Callable[["ScpiDevice"], list[Command]]
    echoes: bool = False


class ScpiDevice:
    """What the engine needs to know of an instrument, shared by all its connections."""

    def __init__(self, identity: str, manner: Manner | None = None) -> None:
        self.identity = identity
        self.manner = SCPI99 if manner is None else manner
        self.status = Status()
        self._completion_wanted = False
        self.table: HeaderTable[Command] = HeaderTable()
        self.commands: list[Command] = []
        self.declare(common_commands(self))
        self.declare(self.manner.system(self))

    def declare(self, commands: Iterable[Command]) -> None:
        """Add rows to the command table."""
        for command in commands:
            self.table.declare(command.pattern, command)
            self.commands.append(command)

    # What an instrument overrides.

    def reset(self) -> None:
        """Do what *RST does to the settings."""

    def trigger(self) -> None:
        """Do what *TRG does; -211 when nothing waits for it."""
        raise ScpiError(-211)

    def end_coupled(self) -> None:
        """Check and apply coupled settings; put them back and raise -221 on a conflict."""

    def begin_message(self) -> None:
        """Note that a program message begins."""

    def is_busy(self) -> bool:
        """Whether an overlapped operation is under way."""
        return False

    def wait(self) -> None:
        """Let time pass until no overlapped operation is under way."""

    def operation_condition(self) -> int:
        """Return the present STATus:OPERation:CONDition."""
        return 0

    # What the engine and the common commands do with it.

    def refresh(self) -> None:
        """Bring the registers up to date with what happened meanwhile."""
        self.status.operation.update(self.operation_condition())
        if self._completion_wanted and not self.is_busy():
            self._completion_wanted = False
            self.status.set_event_status(OPERATION_COMPLETE)

    def lose_power(self) -> None:
        """Go back to the state after power-on, with -500 in an otherwise empty queue."""
        self._completion_wanted = False
        self.reset()
        self.status.power_on()
        self.refresh()

    def want_completion(self, wanted: bool) -> None:
        """Set the OPC bit when all is done (*OPC), or no longer (*CLS, *RST)."""
        self._completion_wanted = wanted
        self.refresh()


def common_commands(device: ScpiDevice) -> list[Command]:
    """Return the IEEE 488.2 commands, which every family has."""
    status = device.status
    byte = number(0, 255, 0, whole=True)

    def set_event_enable(call: Call) -> None:
        status.event_enable = int(call.number())

    def set_service_enable(call: Call) -> None:
        # Bit 6 is the summary itself and cannot be enabled.
        status.service_enable = int(call.number()) & ~64

    def clear(_: Call) -> None:
        device.want_completion(False)
        status.clear()

    def reset(_: Call) -> None:
        device.want_completion(False)
        device.reset()

    def wait(_: Call) -> None:
        device.wait()

    def complete(_: Call) -> str:
        device.wait()
        return "1"

    return [
        Command(pattern="*IDN", answer=lambda _: device.identity, indefinite=True),
        Command(pattern="*RST", execute=reset),
        Command(pattern="*CLS", execute=clear),
        Command(
            pattern="*ESE",
            parameters=(byte,),
            execute=set_event_enable,
            answer=lambda _: format_integer(status.event_enable),
        ),
        Command(pattern="*ESR", answer=lambda _: format_integer(status.take_event_status())),
        Command(pattern="*OPC", execute=lambda _: device.want_completion(True), answer=complete),
        Command(
            pattern="*SRE",
            parameters=(byte,),
            execute=set_service_enable,
            answer=lambda _: format_integer(status.service_enable),
        ),
        Command(
            pattern="*STB",
            answer=lambda call: format_integer(status.byte(message_available=call.output_waiting)),
        ),
        Command(pattern="*TST", answer=lambda _: "0"),
        Command(pattern="*TRG", execute=lambda _: device.trigger()),
        Command(pattern="*WAI", execute=wait),
    ]


def scpi99_system(device: ScpiDevice) -> list[Command]:
    """Return the STATus and SYSTem commands of SCPI-99."""
    status = device.status
    return [
        Command(pattern=":STATus:PRESet", execute=lambda _: status.preset()),
        *_event_group_commands(":STATus:OPERation", status.operation),
        *_event_group_commands(":STATus:QUEStionable", status.questionable),
        Command(pattern=":SYSTem:ERRor[:NEXT]", answer=lambda _: status.errors.pop().entry()),
        Command(pattern=":SYSTem:ERRor:COUNt", answer=lambda _: format_integer(len(status.errors))),
        Command(pattern=":SYSTem:VERSion", answer=lambda _: SCPI_VERSION),
    ]


def _event_group_commands(root: str, group: EventGroup) -> list[Command]:
    register = number(0, 65535, 0, whole=True)

    def set_enable(call: Call) -> None:
        # Bit 15 is never used, so that a register is positive in 16-bit arithmetic.
        group.enable = int(call.number()) & 0x7FFF

    def set_rising(call: Call) -> None:
        group.rising = int(call.number()) & 0x7FFF

    def set_falling(call: Call) -> None:
        group.falling = int(call.number()) & 0x7FFF

    return [
        Command(pattern=f"{root}[:EVENt]", answer=lambda _: format_integer(group.take_event())),
        Command(pattern=f"{root}:CONDition", answer=lambda _: format_integer(group.condition)),
        Command(
            pattern=f"{root}:ENABle",
            parameters=(register,),
            execute=set_enable,
            answer=lambda _: format_integer(group.enable),
        ),
        Command(
            pattern=f"{root}:PTRansition",
            parameters=(register,),
            execute=set_rising,
            answer=lambda _: format_integer(group.rising),
        ),
        Command(
            pattern=f"{root}:NTRansition",
            parameters=(register,),
            execute=set_falling,
            answer=lambda _: format_integer(group.falling),
        ),
    ]


SCPI99 = Manner(name="scpi99", identity="", system=scpi99_system)
