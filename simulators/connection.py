"""One connection to an instrument, whatever carries it: bytes in, deliveries out.

The seam between transports and instruments. A transport feeds a Connection what arrives and
does what the deliveries say; it never speaks to the SCPI engine itself, so that a fault
happens alike on every kind of line.
"""

from collections.abc import Iterator

from pulsetally.simulators.deliveries import Close, Delivery, Reset, Send
from pulsetally.simulators.mishaps import Mishaps
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine


class Connection:
    """One client's connection: its half-finished message, and what it is to get.

    mishaps: what happens to the instrument; None for one to which nothing does.
    """

    def __init__(self, device: ScpiDevice, mishaps: Mishaps | None = None) -> None:
        self._engine = ScpiEngine(device)
        self._mishaps = mishaps
        self._ended = False

    @property
    def is_possible(self) -> bool:
        """Whether the instrument has power."""
        return self._mishaps is None or self._mishaps.powered

    @property
    def amid_message(self) -> bool:
        """Whether a program message has begun and not ended."""
        return self._engine.amid_message

    def receive(self, data: bytes, *, end: bool = False) -> Iterator[list[Delivery]]:
        """Take newly arrived bytes, however cut; follow each message when its turn comes.

        Yields the deliveries of one message at a time, none for one without an answer, so
        that the caller can make them and let time pass before the next message is looked
        at. Behind a Close or a Reset nothing is followed any more. end: the transport
        marked the last byte as the end of a message.
        """
        if self._ended:
            return
        for message in self._engine.messages(data, end=end):
            if self._mishaps is None:
                answer = self._engine.follow(message)
                yield [Send(answer)] if answer else []
                continue
            if not self.is_possible:
                return
            deliveries = self._mishaps.exchange(message, self._engine.follow)
            self._ended = any(isinstance(delivery, Close | Reset) for delivery in deliveries)
            yield deliveries
            if self._ended:
                return
