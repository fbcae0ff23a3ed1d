"""What scheduled faults do to one instrument, to its connections and to the cell."""

from collections.abc import Callable, Iterable
from functools import partial

from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.deliveries import (
    Cancellable,
    Close,
    Delivery,
    Later,
    Pause,
    Reset,
    Send,
)
from pulsetally.simulators.faults import GARBAGE, KINDS, Fault, FaultSchedule
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.table import Table

_OF_CELL = tuple(name for name, kind in KINDS.items() if kind.breaks_cell)
# These may keep a message from being followed.
_LOSING = ("no answer", "closed connection", "reset connection")
_OF_ANSWER = ("no answer", "late answer", "cut block")
_OF_LINE = ("closed connection", "reset connection", "garbage")


def break_cell(table: Table, fault: Fault) -> None:
    """Do a fault of the cell."""
    if fault.kind == "cell opens":
        table.open_cell()
    else:
        table.short_cell(fault.ohms)


def break_cell_on_time(
    faults: Iterable[Fault], schedule: FaultSchedule, *, table: Table, clock: VirtualClock
) -> None:
    """Have each fault that has an instant of virtual time happen then, if it still may."""

    def happen(fault: Fault) -> None:
        if schedule.take_timed(fault):
            break_cell(table, fault)

    for fault in faults:
        if fault.at_seconds is not None:
            clock.call_at(fault.at_seconds, partial(happen, fault))


class Mishaps:
    """The faults of one instrument, as they happen.

    name: the instrument's in the schedule, whose exchanges and faults these are.
    later: does something after so many real seconds; None where only virtual time passes.
    power_changed: each is called with whether the power is on, after it went or came.
    """

    def __init__(
        self,
        name: str,
        device: ScpiDevice,
        schedule: FaultSchedule,
        *,
        table: Table,
        clock: VirtualClock,
    ) -> None:
        self._name, self._device, self._schedule = name, device, schedule
        self._table, self._clock = table, clock
        self.later: Later | None = None
        self.power_changed: list[Callable[[bool], None]] = []
        self._returns: list[Cancellable] = []
        self._powered = True

    @property
    def powered(self) -> bool:
        """Whether the instrument has power; without it no message is to be followed."""
        return self._powered

    def ignores_trigger(self) -> bool:
        """Tell whether a trigger that has just come is ignored; asked once for each."""
        return self._schedule.take(self._name, ("trigger ignored",)) is not None

    def exchange(self, message: bytes, follow: Callable[[bytes], bytes]) -> list[Delivery]:
        """Let one program message happen, with whatever goes wrong; return the deliveries."""
        schedule, name = self._schedule, self._name
        schedule.begin_exchange(name)
        while (broken := schedule.take(name, _OF_CELL)) is not None:
            break_cell(self._table, broken)
        outage = schedule.take(name, ("power lost",))
        if outage is not None:
            self.lose_power(outage.seconds)
            return [Close()]
        fault = schedule.take(name, _LOSING, unfollowed=True)
        answer = b"" if fault is not None else follow(message)
        while (error := schedule.take(name, ("error entry",))) is not None:
            self._device.status.report(ScpiError(error.number, error.message))
        if fault is None:
            fault = schedule.take(name, _OF_LINE + _OF_ANSWER if answer else _OF_LINE)
        return _delivered(answer, fault)

    def lose_power(self, seconds: float) -> None:
        """Be off for so long, by the wall clock or by the virtual one; then be as after power-on.

        The output opens at once, and all connections end. Off already: do nothing.
        """
        if not self._powered:
            return
        self._powered = False
        self._device.lose_power()
        self._returns.append(self._clock.call_at(self._clock.now + seconds, self._return))
        if self.later is not None:
            self._returns.append(self.later(seconds, self._return))
        self._tell()

    def _return(self) -> None:
        for appointment in self._returns:
            appointment.cancel()
        self._returns.clear()
        self._powered = True
        self._tell()

    def _tell(self) -> None:
        for tell in self.power_changed:
            tell(self._powered)


def _delivered(answer: bytes, fault: Fault | None) -> list[Delivery]:
    if fault is None:
        return [Send(answer)] if answer else []
    match fault.kind:
        case "no answer":
            return []
        case "closed connection":
            return [Close()]
        case "reset connection":
            return [Reset()]
        case "late answer":
            return [Pause(fault.seconds), Send(answer)]
        case "cut block":
            # Never all of it: the last byte at least is missing.
            return [Send(answer[: int(fault.share * len(answer))], whole=False)]
        case "garbage":
            return [Send((fault.message or GARBAGE).encode("latin-1"))]
    raise AssertionError(f"{fault.kind} is no fault of a line")
