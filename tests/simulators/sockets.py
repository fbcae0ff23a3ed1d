"""Serve a simulated bench in a thread, and talk to it with nothing but a bare socket."""

import asyncio
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager

from pulsetally.simulators.simulate import Addresses, SimulationSettings, serve_until


class Client:
    """A bare socket and its lines."""

    def __init__(self, address: str) -> None:
        _, host, port, _ = address.split("::")
        self.socket = socket.create_connection((host, int(port)), timeout=10)
        self._file = self.socket.makefile("rb")

    def __enter__(self) -> "Client":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        self._file.close()
        self.socket.close()

    def write(self, text: str) -> None:
        self.socket.sendall(text.encode() + b"\n")

    def ask(self, text: str) -> str:
        self.write(text)
        return self._file.readline().decode().removesuffix("\n")

    def ask_block(self, text: str, *, before: bytes = b"", behind: bytes = b"\n") -> bytes:
        """Return a block's payload; before and behind are what must stand around it."""
        self.write(text)
        assert self._file.read(len(before) + 1) == before + b"#"
        length = int(self._file.read(int(self._file.read(1))))
        payload = self._file.read(length)
        assert self._file.read(len(behind)) == behind
        return payload


@contextmanager
def served(settings: SimulationSettings) -> Iterator[Addresses]:
    """Serve a bench in a thread of its own."""
    loop = asyncio.new_event_loop()
    stop = asyncio.Event()
    ready = threading.Event()
    announced: list[Addresses] = []

    def announce(addresses: Addresses) -> None:
        announced.append(addresses)
        ready.set()

    thread = threading.Thread(
        target=lambda: loop.run_until_complete(serve_until(settings, announce, stop))
    )
    thread.start()
    try:
        assert ready.wait(10)
        yield announced[0]
    finally:
        loop.call_soon_threadsafe(stop.set)
        thread.join(10)
        loop.close()
