"""What a connection has to do for its client, and how to do it in order."""

from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Protocol


@dataclass(frozen=True, slots=True)
class Send:
    """Send these bytes. whole: the answer ends with them, where a line can say so."""

    content: bytes
    whole: bool = True


@dataclass(frozen=True, slots=True)
class Pause:
    """Hold back what comes next for so long, in seconds of real time."""

    seconds: float


@dataclass(frozen=True, slots=True)
class Close:
    """End the connection as a program does that has finished; nothing comes after it."""


@dataclass(frozen=True, slots=True)
class Reset:
    """End the connection as a machine does that knows nothing of it (RST on TCP)."""


Delivery = Send | Pause | Close | Reset


class Cancellable(Protocol):
    """What a clock gives back for something it was asked to do later."""

    def cancel(self) -> None:
        """Call it off."""


Later = Callable[[float, Callable[[], None]], Cancellable]


class Outbox:
    """Make deliveries one after the other; a pause holds back whatever is behind it.

    send, close, reset: do it now. later: does something after so many real seconds.
    held_bytes: waiting behind a pause. emptied: called when nothing waits any more.
    """

    def __init__(
        self,
        *,
        send: Callable[[bytes], None],
        close: Callable[[], None],
        reset: Callable[[], None],
        later: Later,
        emptied: Callable[[], None] = lambda: None,
    ) -> None:
        self._send, self._close, self._reset = send, close, reset
        self._later, self._emptied = later, emptied
        self._waiting: deque[Delivery] = deque()
        self._pause: Cancellable | None = None
        self.held_bytes = 0

    def put(self, deliveries: Iterable[Delivery]) -> None:
        """Make these deliveries when their turn comes, at once where nothing waits."""
        for delivery in deliveries:
            self._waiting.append(delivery)
            if isinstance(delivery, Send):
                self.held_bytes += len(delivery.content)
        if self._pause is None:
            self._go_on()

    def drop(self) -> None:
        """Forget what still waits."""
        if self._pause is not None:
            self._pause.cancel()
            self._pause = None
        self._waiting.clear()
        self.held_bytes = 0

    def _go_on(self) -> None:
        self._pause = None
        while self._waiting:
            match self._waiting.popleft():
                case Send(content=content):
                    self.held_bytes -= len(content)
                    self._send(content)
                case Pause(seconds):
                    self._pause = self._later(seconds, self._go_on)
                    return
                case Close():
                    self.drop()
                    self._close()
                case Reset():
                    self.drop()
                    self._reset()
        self._emptied()
