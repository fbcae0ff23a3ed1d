"""Put instruments on loopback TCP ports, each with as many connections as come.

One thread and one event loop: messages are followed one at a time, whoever sent them.
A connection has its own half-finished message and its own answers; when its client goes
away, both go with it. An instrument that has lost its power has no connections, and refuses
new ones.
"""

import asyncio
import socket
import struct
from collections import deque
from collections.abc import Callable, Iterator
from typing import cast

from pulsetally.simulators.connection import Connection
from pulsetally.simulators.deliveries import Delivery, Outbox
from pulsetally.simulators.mishaps import Mishaps
from pulsetally.simulators.scpi_device import ScpiDevice

LOOPBACK = "127.0.0.1"
# A client that sends and never reads, or not before a late answer, must not fill the memory.
MOST_HELD_BYTES = 1 << 20
# Linger on for no time: what is closed so is reset.
_RESETTING = struct.pack("ii", 1, 0)


def reset(transport: asyncio.Transport) -> None:
    """End a TCP connection as a machine does that knows nothing of it."""
    if not transport.is_closing():
        link = transport.get_extra_info("socket")
        link.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, _RESETTING)
    transport.abort()


class _Client(asyncio.Protocol):
    def __init__(
        self,
        connection: Connection,
        present: set[asyncio.Transport],
        after_message: Callable[[], None],
    ) -> None:
        self._connection, self._present, self._after_message = connection, present, after_message
        self._transport: asyncio.Transport | None = None
        # What has come, each to be followed a message at a time.
        self._work: deque[Iterator[list[Delivery]]] = deque()
        self._is_working = False
        self._is_full = False

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self._transport = cast(asyncio.Transport, transport)
        if not self._connection.is_possible:
            # The power went between the system's handshake and this moment.
            self._transport.abort()
        self._present.add(self._transport)
        link = transport.get_extra_info("socket")
        link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._outbox = Outbox(
            send=self._send,
            close=self._transport.close,
            reset=self._reset,
            later=asyncio.get_running_loop().call_later,
            emptied=self._go_on,
        )

    def connection_lost(self, exc: Exception | None) -> None:
        if self._transport is not None:
            self._present.discard(self._transport)
        # What was sent before is followed all the same; the answers go nowhere.
        self._outbox.drop()
        self._is_full = False
        self._go_on()
        self._outbox.drop()

    def data_received(self, data: bytes) -> None:
        self._work.append(self._connection.receive(data))
        self._go_on()

    def _go_on(self) -> None:
        """Follow what has come, unless too much waits to be read; then read no more either."""
        if self._is_working:
            return
        self._is_working = True
        while self._work and not self._is_held:
            deliveries = next(self._work[0], None)
            if deliveries is None:
                self._work.popleft()
                continue
            self._outbox.put(deliveries)
            # The client has its answer and can work on it while time passes here.
            self._after_message()
        self._is_working = False
        if self._transport is None or self._transport.is_closing():
            return
        if self._is_held:
            self._transport.pause_reading()
        else:
            self._transport.resume_reading()

    @property
    def _is_held(self) -> bool:
        return self._is_full or self._outbox.held_bytes > MOST_HELD_BYTES

    def _send(self, content: bytes) -> None:
        if content and self._transport is not None and not self._transport.is_closing():
            self._transport.write(content)

    def _reset(self) -> None:
        if self._transport is not None:
            reset(self._transport)

    def pause_writing(self) -> None:
        self._is_full = True

    def resume_writing(self) -> None:
        self._is_full = False
        self._go_on()


class DeviceServer:
    """One instrument that listens on one loopback port.

    after_message: called each time a complete program message has been followed.
    mishaps: the faults that happen to the instrument, if any.
    """

    def __init__(
        self,
        device: ScpiDevice,
        *,
        after_message: Callable[[], None],
        mishaps: Mishaps | None = None,
    ) -> None:
        self._device, self._after_message, self._mishaps = device, after_message, mishaps
        self._server: asyncio.Server | None = None
        self._kept_port: socket.socket | None = None
        self._starting: asyncio.Task[None] | None = None
        self._present: set[asyncio.Transport] = set()

    async def start(self, port: int = 0) -> int:
        """Listen on a port, 0 for any free one; return the port. OSError when it is taken."""
        loop = asyncio.get_running_loop()
        self._server = await loop.create_server(self._connect, LOOPBACK, port)
        if self._mishaps is not None:
            self._mishaps.power_changed.append(self._power_changed)
        return self._port

    @property
    def _port(self) -> int:
        assert self._server is not None
        return int(self._server.sockets[0].getsockname()[1])

    def _connect(self) -> asyncio.Protocol:
        connection = Connection(self._device, self._mishaps)
        return _Client(connection, self._present, self._after_message)

    async def stop(self) -> None:
        """Stop listening and cut every connection."""
        if self._mishaps is not None and self._power_changed in self._mishaps.power_changed:
            self._mishaps.power_changed.remove(self._power_changed)
        if self._starting is not None:
            await self._starting
        if self._kept_port is not None:
            self._kept_port.close()
        if self._server is not None:
            self._server.close()
        self._cut()
        # Transports close in the next turn of the loop.
        await asyncio.sleep(0)

    def _cut(self) -> None:
        for transport in list(self._present):
            transport.abort()

    # An instrument without power is not there, but its port is nobody else's either: a
    # socket that is bound and does not listen keeps it, and lets the system refuse clients.

    def _power_changed(self, powered: bool) -> None:
        if powered:
            self._starting = asyncio.get_running_loop().create_task(self._listen_again())
            return
        port = self._port
        assert self._server is not None
        self._server.close()
        self._server = None
        self._cut()
        self._kept_port = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        self._kept_port.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        self._kept_port.bind((LOOPBACK, port))

    async def _listen_again(self) -> None:
        kept, self._kept_port = self._kept_port, None
        assert kept is not None
        loop = asyncio.get_running_loop()
        self._server = await loop.create_server(self._connect, sock=kept)
