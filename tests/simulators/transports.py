"""Serve any instrument over any kind of line, and talk to it as a stranger would.

TCP and serial lines are spoken to with bare sockets and files, HiSLIP with PyVISA.
"""

import asyncio
import os
import select
import socket
import threading
from abc import ABC, abstractmethod
from collections.abc import Awaitable, Callable, Iterator
from contextlib import contextmanager
from typing import Protocol

import pyvisa
from pyvisa.resources import MessageBasedResource

from pulsetally.simulators.hislip import SUB_ADDRESS, HislipServer
from pulsetally.simulators.pseudo_terminal import TerminalServer
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.server import DeviceServer

PATIENCE_SECONDS = 10.0


class Line(Protocol):
    """A client's end of a line to one instrument."""

    def tell(self, message: bytes) -> None:
        """Send one message; the line adds what ends it."""

    def hear(self, length: int) -> bytes:
        """Return an answer of so many bytes without its newline; fail on any other."""

    def hear_line(self) -> bytes:
        """Return an answer that holds no newline but the one at its end, without it."""

    def close(self) -> None:
        """Go away."""


class ByteLine(ABC):
    """A line that carries bytes and no messages: a newline ends them."""

    def __init__(self) -> None:
        self._heard = b""

    @abstractmethod
    def send(self, data: bytes) -> None:
        """Send bytes."""

    @abstractmethod
    def arrived(self) -> bytes:
        """Wait for bytes and return them."""

    def tell(self, message: bytes) -> None:
        self.send(message + b"\n")

    def hear(self, length: int) -> bytes:
        while len(self._heard) <= length:
            self._heard += self.arrived()
        answer, end = self._heard[:length], self._heard[length : length + 1]
        self._heard = self._heard[length + 1 :]
        assert end == b"\n", (answer, end)
        return answer

    def hear_line(self) -> bytes:
        while b"\n" not in self._heard:
            self._heard += self.arrived()
        answer, _, self._heard = self._heard.partition(b"\n")
        return answer


class TcpLine(ByteLine):
    """A bare socket."""

    def __init__(self, address: str) -> None:
        super().__init__()
        _, host, port, _ = address.split("::")
        self.socket = socket.create_connection((host, int(port)), timeout=PATIENCE_SECONDS)
        self.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def send(self, data: bytes) -> None:
        self.socket.sendall(data)

    def arrived(self) -> bytes:
        data = self.socket.recv(65_536)
        assert data, "the server hung up"
        return data

    def close(self) -> None:
        self.socket.close()


class SerialLine(ByteLine):
    """The client's end of a pseudo-terminal, as a bare file."""

    def __init__(self, address: str) -> None:
        super().__init__()
        path = address.removeprefix("ASRL").removesuffix("::INSTR")
        self._end = os.open(path, os.O_RDWR | os.O_NOCTTY)

    def send(self, data: bytes) -> None:
        left = memoryview(data)
        while left:
            assert select.select([], [self._end], [], PATIENCE_SECONDS)[1]
            left = left[os.write(self._end, left) :]

    def arrived(self) -> bytes:
        assert select.select([self._end], [], [], PATIENCE_SECONDS)[0], self._heard
        return os.read(self._end, 65_536)

    def close(self) -> None:
        os.close(self._end)


class HislipLine:
    """A HiSLIP session of PyVISA and pyvisa-py; no newline ends what it sends."""

    def __init__(self, address: str) -> None:
        # One resource manager serves the whole process, so that it is not closed here.
        resource = pyvisa.ResourceManager("@py").open_resource(
            address, timeout=PATIENCE_SECONDS * 1000
        )
        assert isinstance(resource, MessageBasedResource)
        self._resource = resource

    def tell(self, message: bytes) -> None:
        self._resource.write_raw(message)

    def hear(self, length: int) -> bytes:
        answer = self.hear_line()
        assert len(answer) == length, answer
        return answer

    def hear_line(self) -> bytes:
        answer = self._resource.read_raw()
        assert answer[-1:] == b"\n", answer
        return answer[:-1]

    def close(self) -> None:
        self._resource.close()


def open_line(address: str) -> Line:
    """Open the line that a VISA resource name stands for."""
    if SUB_ADDRESS in address:
        return HislipLine(address)
    if address.startswith("ASRL"):
        return SerialLine(address)
    return TcpLine(address)


class Server(Protocol):
    """Whatever serves an instrument."""

    async def stop(self) -> None: ...


async def _serve_tcp(device: ScpiDevice) -> tuple[Server, str]:
    server = DeviceServer(device, after_message=lambda: None)
    return server, f"TCPIP::127.0.0.1::{await server.start()}::SOCKET"


async def _serve_serial(device: ScpiDevice) -> tuple[Server, str]:
    server = TerminalServer(device, after_message=lambda: None)
    return server, f"ASRL{await server.start()}::INSTR"


async def _serve_hislip(device: ScpiDevice) -> tuple[Server, str]:
    server = HislipServer(device, after_message=lambda: None)
    return server, f"TCPIP::127.0.0.1::{SUB_ADDRESS},{await server.start()}::INSTR"


SERVERS: dict[str, Callable[[ScpiDevice], Awaitable[tuple[Server, str]]]] = {
    "tcp": _serve_tcp,
    "serial": _serve_serial,
    "hislip": _serve_hislip,
}
# Lines that mark the end of each message themselves.
MARKED = ("hislip",)


@contextmanager
def serving(device: ScpiDevice, transport: str) -> Iterator[str]:
    """Serve a device in a thread of its own; give its address."""
    loop = asyncio.new_event_loop()
    thread = threading.Thread(target=loop.run_forever)
    thread.start()

    def run(todo: Awaitable[tuple[Server, str]] | Awaitable[None]) -> tuple[Server, str] | None:
        async def whole() -> tuple[Server, str] | None:
            return await todo

        return asyncio.run_coroutine_threadsafe(whole(), loop).result(PATIENCE_SECONDS)

    try:
        started = run(SERVERS[transport](device))
        assert started is not None
        server, address = started
        try:
            yield address
        finally:
            run(server.stop())
    finally:
        loop.call_soon_threadsafe(loop.stop)
        thread.join(PATIENCE_SECONDS)
        loop.close()
