"""Let virtual time pass on the table, and do what is due on the way."""

import heapq
import time
from collections.abc import Callable
from itertools import count

from pulsetally.simulators.table import Array, Table

# While it sleeps, a clock in real time looks this often (s) whether it is to end.
LONGEST_SLEEP_SECONDS = 0.1


class BenchEndsError(SystemExit):
    """The bench is to end while its time passes.

    It goes through all that follows a message, and through the event loop, which stops for
    a SystemExit and reports any other exception as a fault.
    """


class Appointment:
    """Something to be done at an instant, unless it is called off before."""

    def __init__(self, at_seconds: float, action: Callable[[], None]) -> None:
        self.at_seconds, self.action, self.cancelled = at_seconds, action, False

    def cancel(self) -> None:
        """Call it off."""
        self.cancelled = True


class VirtualClock:
    """The one clock of the simulated bench; it moves only when it is told to.

    Every instrument lets time pass through here, never through the table itself, so that
    a relay closes and a burst ends at its own instant whoever moves the clock.
    may_be_advanced: whether somebody may move it at will.
    is_to_end: asked again and again while time passes; once it says yes, whoever lets time
    pass gets BenchEndsError. It may answer for another thread or for a signal.
    """

    may_be_advanced = True

    def __init__(self, table: Table) -> None:
        self._table = table
        self._agenda: list[tuple[float, int, Appointment]] = []
        self._order = count()
        self.is_to_end: Callable[[], bool] = lambda: False

    @property
    def now(self) -> float:
        """Virtual time, s."""
        return self._table.now

    def catch_up(self) -> None:
        """Come up to the present; a virtual clock is always there."""

    def call_at(self, at_seconds: float, action: Callable[[], None]) -> Appointment:
        """Have something done when the clock reaches an instant (at once if it passed)."""
        appointment = Appointment(at_seconds, action)
        heapq.heappush(self._agenda, (at_seconds, next(self._order), appointment))
        return appointment

    def advance(self, seconds: float) -> None:
        """Let this many seconds pass, at least 0."""
        self.advance_to(self.now + seconds)

    def advance_to(self, at_seconds: float) -> None:
        """Let time pass until an instant; what is due until then is done in order."""
        while self._agenda and self._agenda[0][0] <= at_seconds:
            due_seconds, _, appointment = heapq.heappop(self._agenda)
            if appointment.cancelled:
                continue
            self._pass_until(due_seconds)
            appointment.action()
        self._pass_until(at_seconds)

    def saw(self, times: Array, terminal_volts: Array, node_volts: Array) -> None:
        """Look whether to end; as an observer of the table, whose stretches can take minutes."""
        del times, terminal_volts, node_volts
        self._end_if_asked()

    def _end_if_asked(self) -> None:
        if self.is_to_end():
            raise BenchEndsError

    def _pass_until(self, at_seconds: float) -> None:
        # Twice where the first sum was rounded: a burst's end must really be reached.
        while (seconds := at_seconds - self.now) > 0:
            self._table.advance(seconds)


class WallClock(VirtualClock):
    """The bench's clock in real time: it follows the clock on the wall.

    To advance it is to wait. While it waits, nothing else of the bench's process is done;
    what came due in the meantime is done at its own instant all the same.
    wall: seconds of a clock that never goes back. sleep: waits for so many seconds.
    """

    may_be_advanced = False

    def __init__(
        self,
        table: Table,
        *,
        wall: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        super().__init__(table)
        self._wall, self._sleep = wall, sleep
        self._zero_seconds = wall() - table.now

    def catch_up(self) -> None:
        """Let pass what has passed on the wall."""
        super().advance_to(self._wall() - self._zero_seconds)

    def advance_to(self, at_seconds: float) -> None:
        """Wait until an instant."""
        while (seconds := at_seconds - (self._wall() - self._zero_seconds)) > 0:
            self._end_if_asked()
            # In slices: a signal alone does not end a sleep.
            self._sleep(min(seconds, LONGEST_SLEEP_SECONDS))
        # To the instant itself, and then on: a sleep may last longer.
        super().advance_to(at_seconds)
        self.catch_up()
