"""Put an instrument on a loopback port that speaks HiSLIP (IVI-6.1, from memory).

Each client has two connections to the one port and a session of its own; see
hislip_session.py for what is offered. What is refused, and how:

- a first message that is neither Initialize nor AsyncInitialize, a sub-address other than
  'hislip0', a session that nobody opened: FatalError 3; a message of a session without its
  asynchronous channel: FatalError 2; one client too many: FatalError 4; a header that does
  not begin with 'HS': FatalError 1. Both channels end, and nobody else is harmed.
- an unknown type, control code or vendor's message, a payload beyond LIMITS, a type on the
  wrong channel: Error; the message is left out and the session goes on.

When one channel ends, the other does, too.
"""

import asyncio
import socket
from collections.abc import Callable, Iterator
from typing import cast

from pulsetally.simulators.connection import Connection
from pulsetally.simulators.deliveries import Cancellable, Delivery, Outbox
from pulsetally.simulators.hislip_locks import LockTable
from pulsetally.simulators.hislip_messages import (
    BadPrologueError,
    Channel,
    FatalCode,
    Message,
    MessageCutter,
    MessageType,
    Oversized,
    fatal,
)
from pulsetally.simulators.hislip_session import LIMITS, Session, Wire
from pulsetally.simulators.mishaps import Mishaps
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.server import MOST_HELD_BYTES, DeviceServer, reset

SUB_ADDRESS = "hislip0"
MOST_CLIENTS = 32
PROTOCOL_VERSION = 0x0100
# The two letters of a maker that has registered some; we have not.
_VENDOR = 0
_LAST_SESSION = 0xFFFF
# How long, in real time, a channel that is to end waits for its client to end it.
_PARTING_SECONDS = 0.25


class _Link(asyncio.Protocol):
    """One connection: a channel of a client, once its first message has said of which."""

    def __init__(self, server: "HislipServer", present: set[asyncio.Transport]) -> None:
        self._server, self._present = server, present
        self.cutter = MessageCutter(LIMITS[Channel.ASYNCHRONOUS])
        self.client: _Client | None = None
        self.channel = Channel.SYNCHRONOUS
        self.is_full = False
        self._transport: asyncio.Transport | None = None
        self._parting: asyncio.TimerHandle | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self._transport = cast(asyncio.Transport, transport)
        self._present.add(self._transport)
        link = transport.get_extra_info("socket")
        link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        if not self._server.is_possible:
            # The power went between the system's handshake and this moment.
            self._transport.abort()

    def connection_lost(self, exc: Exception | None) -> None:
        if self._parting is not None:
            self._parting.cancel()
        if self._transport is not None:
            self._present.discard(self._transport)
        if self.client is not None:
            self.client.lost(self.channel)

    def data_received(self, data: bytes) -> None:
        if self._parting is not None:
            return
        self.cutter.feed(data)
        if self.client is None or self.channel is Channel.SYNCHRONOUS:
            self._look()
        else:
            # What the client sent before on the other channel is there, and is read in
            # the next turn of the loop: whoever asks for the status finds it followed.
            loop = asyncio.get_running_loop()
            loop.call_soon(loop.call_soon, self._look)

    def _look(self) -> None:
        if self._parting is not None:
            return
        try:
            self._go_on()
        except BadPrologueError as problem:
            self.fail(FatalCode.BAD_HEADER, str(problem))

    def _go_on(self) -> None:
        if self.client is None:
            message = self.cutter.take()
            if message is not None:
                self._server.open(self, message)
        while self.client is not None and self._parting is None:
            if not self.client.advance(self.channel):
                return

    def wake(self) -> None:
        """Look again at what had to wait, in a turn of its own."""
        asyncio.get_running_loop().call_soon(self._look)

    def pause_writing(self) -> None:
        self.is_full = True

    def resume_writing(self) -> None:
        self.is_full = False
        self.wake()

    @property
    def _is_open(self) -> bool:
        transport = self._transport
        return self._parting is None and transport is not None and not transport.is_closing()

    def send(self, data: bytes) -> None:
        """Send bytes, unless the connection is ending."""
        if self._transport is not None and self._is_open:
            self._transport.write(data)

    def listen(self, wanted: bool) -> None:
        """Take in what comes, or leave it to the system."""
        if self._transport is not None and self._is_open:
            if wanted:
                self._transport.resume_reading()
            else:
                self._transport.pause_reading()

    def fail(self, code: FatalCode, text: str) -> None:
        """Tell a fatal error; end this connection, and the session where there is one."""
        self.send(fatal(code, text).encoded())
        if self.client is not None:
            self.client.end()
        self.part()

    def part(self) -> None:
        """End the connection behind what was sent, and hear nothing more.

        The client is let to close: a close with unread bytes would take back what was sent.
        """
        if self._transport is not None and self._is_open:
            self.listen(True)
            loop = asyncio.get_running_loop()
            self._parting = loop.call_later(_PARTING_SECONDS, self._transport.abort)
            try:
                self._transport.write_eof()
            except OSError:
                # The client was quicker.
                self._transport.abort()

    def reset(self) -> None:
        """End the connection as a machine does that knows nothing of it."""
        if self._transport is not None:
            reset(self._transport)


class _Client:
    """A session and its two connections: the wire of the session."""

    def __init__(self, server: "HislipServer", number: int, link: _Link) -> None:
        self._server, self._number = server, number
        self._links: dict[Channel, _Link] = {Channel.SYNCHRONOUS: link}
        self._work: Iterator[None] | None = None
        self._held: Message | Oversized | None = None
        self._is_halted = False
        self.session = server.new_session(self)
        self._outbox = Outbox(
            send=self._send_answer,
            close=self.end,
            reset=self._reset,
            later=self.later,
            emptied=self._emptied,
        )

    def join(self, link: _Link) -> None:
        """Take a connection as the asynchronous channel."""
        self._links[Channel.ASYNCHRONOUS] = link
        self.session.both_channels = True

    def advance(self, channel: Channel) -> bool:
        """Follow the next message of a channel, or the next part of one; False when idle."""
        link = self._links[channel]
        # A client that sends and never reads must not fill the memory.
        self._is_halted = self._outbox.held_bytes > MOST_HELD_BYTES
        if link.is_full or (self._is_halted and channel is Channel.SYNCHRONOUS):
            link.listen(False)
            return False
        if channel is Channel.ASYNCHRONOUS:
            link.listen(True)
            message = link.cutter.take()
            if message is not None:
                self.session.asynchronous(message)
            return message is not None
        return self._advance_synchronous(link)

    def _advance_synchronous(self, link: _Link) -> bool:
        if self._work is None:
            message = link.cutter.take() if self._held is None else self._held
            must_wait = message is not None and self.session.must_wait(message)
            self._held = message if must_wait else None
            link.listen(not must_wait)
            if message is None or must_wait:
                return False
            self._work = self.session.synchronous(message)
        for _ in self._work:
            return True
        self._work = None
        return True

    def wake(self) -> None:
        """Look again at what had to wait."""
        self._links[Channel.SYNCHRONOUS].wake()

    def _emptied(self) -> None:
        if self._is_halted:
            self.wake()

    def _send_answer(self, content: bytes) -> None:
        self.session.answer_sent()
        self._links[Channel.SYNCHRONOUS].send(content)

    def _reset(self) -> None:
        for link in self._links.values():
            link.reset()

    def lost(self, channel: Channel) -> None:
        """Note that a connection has ended; end the other."""
        if channel is Channel.SYNCHRONOUS:
            self._outbox.drop()
            self._server.forget(self._number)
            self.session.leave()
            self.end()
        else:
            # What was sent before the channels were closed may not have been looked at yet.
            self.later(_PARTING_SECONDS, self.end)

    # The wire of the session.

    def tell(self, channel: Channel, message: Message) -> None:
        """Send a message at once."""
        if channel in self._links:
            self._links[channel].send(message.encoded())

    def deliver(self, deliveries: list[Delivery]) -> None:
        """Make deliveries on the synchronous channel, each in its turn."""
        self._outbox.put(deliveries)

    def drop(self) -> None:
        """Forget deliveries that were not made yet."""
        self._outbox.drop()

    def clear(self) -> None:
        """Forget deliveries that were not made yet, and messages under way."""
        self._outbox.drop()
        self._work = self._held = None
        self.wake()

    def end(self) -> None:
        """Close both channels behind what was sent."""
        for link in self._links.values():
            link.part()

    def later(self, seconds: float, do: Callable[[], None]) -> Cancellable:
        """Do something after so many real seconds."""
        return asyncio.get_running_loop().call_later(seconds, do)

    def locks_changed(self) -> None:
        """Have every session look at the locks again."""
        self._server.locks_changed()

    def pass_time(self) -> None:
        """Let the time of one exchange pass."""
        self._server.pass_time()


class HislipServer(DeviceServer):
    """One instrument that listens with HiSLIP on one loopback port.

    after_message: called each time a complete program message has been followed, and each
    time the status has been asked for.
    mishaps: the faults that happen to the instrument, if any.
    """

    def __init__(
        self,
        device: ScpiDevice,
        *,
        after_message: Callable[[], None],
        mishaps: Mishaps | None = None,
    ) -> None:
        super().__init__(device, after_message=after_message, mishaps=mishaps)
        self._locks = LockTable()
        self._clients: dict[int, _Client] = {}
        self._last_number = 0
        self.pass_time = after_message

    def _connect(self) -> asyncio.Protocol:
        return _Link(self, self._present)

    @property
    def is_possible(self) -> bool:
        """Whether the instrument has power."""
        return self._mishaps is None or self._mishaps.powered

    def new_session(self, wire: Wire) -> Session:
        """Return a session whose messages the wire carries."""
        return Session(
            self._device,
            connect=lambda: Connection(self._device, self._mishaps),
            locks=self._locks,
            wire=wire,
        )

    def open(self, link: _Link, message: Message | Oversized) -> None:
        """Begin or complete a session with the first message of a connection."""
        if isinstance(message, Oversized):
            link.fail(FatalCode.BAD_INITIALIZATION, "the first message is too long")
        elif message.type == MessageType.INITIALIZE:
            self._initialize(link, message)
        elif message.type == MessageType.ASYNC_INITIALIZE:
            self._initialize_asynchronous(link, message.parameter)
        else:
            link.fail(FatalCode.BAD_INITIALIZATION, "begin with Initialize or AsyncInitialize")

    def _initialize(self, link: _Link, message: Message) -> None:
        # Sub-addresses are told apart without regard to case; none means the only one.
        name = message.payload.decode("ascii", "replace")
        if name.lower() not in ("", SUB_ADDRESS):
            text = f"there is no sub-address {name!r} here, only {SUB_ADDRESS!r}"
            link.fail(FatalCode.BAD_INITIALIZATION, text)
            return
        if len(self._clients) >= MOST_CLIENTS:
            link.fail(FatalCode.TOO_MANY_CLIENTS, f"{MOST_CLIENTS} clients are here already")
            return
        self._last_number = self._last_number % _LAST_SESSION + 1
        while self._last_number in self._clients:
            self._last_number = self._last_number % _LAST_SESSION + 1
        number = self._last_number
        link.client = self._clients[number] = _Client(self, number, link)
        link.cutter.limit = LIMITS[Channel.SYNCHRONOUS]
        version = min(PROTOCOL_VERSION, message.parameter >> 16)
        # Control code 0: synchronized mode is preferred.
        answer = Message(type=MessageType.INITIALIZE_RESPONSE, parameter=version << 16 | number)
        link.send(answer.encoded())

    def _initialize_asynchronous(self, link: _Link, number: int) -> None:
        client = self._clients.get(number)
        if client is None or client.session.both_channels:
            text = f"no session {number} waits for its asynchronous channel"
            link.fail(FatalCode.BAD_INITIALIZATION, text)
            return
        link.channel, link.client = Channel.ASYNCHRONOUS, client
        client.join(link)
        answer = Message(type=MessageType.ASYNC_INITIALIZE_RESPONSE, parameter=_VENDOR)
        link.send(answer.encoded())

    def forget(self, number: int) -> None:
        """Take a session off the list: its client has gone."""
        self._clients.pop(number, None)

    def locks_changed(self) -> None:
        """Have every session look at the locks again."""
        for client in list(self._clients.values()):
            client.session.retry_lock()
            client.wake()
