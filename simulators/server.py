"""Put instruments on loopback TCP ports, each with as many connections as come.

One thread and one event loop: messages are followed one at a time, whoever sent them.
A connection has its own half-finished message and its own answers; when its client goes
away, both go with it.
"""

import asyncio
import socket
from collections.abc import Callable
from typing import cast

from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine

LOOPBACK = "127.0.0.1"


class _Connection(asyncio.Protocol):
    def __init__(
        self,
        engine: ScpiEngine,
        present: set[asyncio.Transport],
        after_message: Callable[[], None],
    ) -> None:
        self._engine, self._present, self._after_message = engine, present, after_message
        self._transport: asyncio.Transport | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        self._transport = cast(asyncio.Transport, transport)
        self._present.add(self._transport)
        link = transport.get_extra_info("socket")
        link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def connection_lost(self, exc: Exception | None) -> None:
        if self._transport is not None:
            self._present.discard(self._transport)

    def data_received(self, data: bytes) -> None:
        for answer in self._engine.answers(data):
            if answer and self._transport is not None and not self._transport.is_closing():
                self._transport.write(answer)
            # The client has its answer and can work on it while time passes here.
            self._after_message()

    # A client that sends and never reads must not fill the memory.
    def pause_writing(self) -> None:
        if self._transport is not None:
            self._transport.pause_reading()

    def resume_writing(self) -> None:
        if self._transport is not None and not self._transport.is_closing():
            self._transport.resume_reading()


class DeviceServer:
    """One instrument that listens on one loopback port.

    after_message: called each time a complete program message has been followed.
    """

    def __init__(self, device: ScpiDevice, *, after_message: Callable[[], None]) -> None:
        self._device, self._after_message = device, after_message
        self._server: asyncio.Server | None = None
        self._present: set[asyncio.Transport] = set()

    async def start(self, port: int = 0) -> int:
        """Listen on a port, 0 for any free one; return the port. OSError when it is taken."""
        loop = asyncio.get_running_loop()
        self._server = await loop.create_server(self._connect, LOOPBACK, port)
        return int(self._server.sockets[0].getsockname()[1])

    def _connect(self) -> asyncio.Protocol:
        return _Connection(ScpiEngine(self._device), self._present, self._after_message)

    async def stop(self) -> None:
        """Stop listening and cut every connection."""
        if self._server is not None:
            self._server.close()
        for transport in list(self._present):
            transport.abort()
        # Transports close in the next turn of the loop.
        await asyncio.sleep(0)
