"""Serve a bench with faults, and look at it with a client that knows nothing but bytes."""

import os
import select
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.faults import Fault
from pulsetally.simulators.simulate import Addresses, SimulationSettings
from tests.simulators.sockets import Client, served

LINEAR = CellDescription(remanent_polarization=1e-9)
NOTHING = b'0,"No error"\n'


class Bare:
    """A client's end of a line, and the bytes that came."""

    def __init__(self, address: str) -> None:
        self.socket: socket.socket | None = None
        if address.startswith("TCPIP"):
            _, host, port, _ = address.split("::")
            self.socket = socket.create_connection((host, int(port)), timeout=10)
            self._end = self.socket.fileno()
        else:
            path = address.removeprefix("ASRL").removesuffix("::INSTR")
            self._end = os.open(path, os.O_RDWR | os.O_NOCTTY)

    def close(self) -> None:
        if self.socket is not None:
            self.socket.close()
        else:
            os.close(self._end)

    def send(self, text: str) -> None:
        assert os.write(self._end, text.encode() + b"\n") == len(text) + 1

    def hear(self) -> bytes:
        """Wait for bytes and return them; b"" when the connection was closed."""
        assert select.select([self._end], [], [], 10)[0], "nothing came"
        return os.read(self._end, 65_536)

    def hear_until(self, end: bytes) -> bytes:
        found = b""
        while not found.endswith(end):
            more = self.hear()
            assert more, found
            found += more
        return found

    def hear_exactly(self, count: int) -> bytes:
        found = b""
        while len(found) < count:
            more = self.hear()
            assert more, found
            found += more
        assert len(found) == count
        return found

    def ask(self, text: str) -> bytes:
        self.send(text)
        return self.hear_until(b"\n")

    def is_cut(self) -> bool:
        """Whether the connection ends, with whatever came before that."""
        try:
            while self.hear():
                pass
        except ConnectionResetError:
            pass
        return True

    def is_silent(self) -> bool:
        return not select.select([self._end], [], [], 0)[0]


@dataclass(kw_only=True)
class Scene:
    """A served bench, its control port, and a line to the generator."""

    addresses: Addresses
    control: Client
    serial: bool = False
    identity: bytes = b""
    open_lines: list[Bare] = field(default_factory=list)

    def open(self, instrument: str = "generator") -> Bare:
        line = Bare(getattr(self.addresses, instrument))
        self.open_lines.append(line)
        return line

    def anew(self) -> Bare:
        """Give up every line and open one to the generator, as soon as there is one."""
        for line in self.open_lines:
            line.close()
        self.open_lines.clear()
        self.settle()
        for _ in range(10_000):
            try:
                return self.open()
            except ConnectionRefusedError:
                self.settle()
        raise AssertionError("the generator does not listen again")

    def settle(self) -> None:
        """Return when the server has looked at everything that was there before the call."""
        for _ in range(5):
            assert self.control.ask("*OPC?") == "1"

    def advance(self, seconds: float) -> None:
        assert self.control.ask(f":CLOC:ADV {seconds};*OPC?") == "1"

    def count(self, of: str = "") -> int:
        return int(self.control.ask(f":FAUL:COUN:KIND? {of}" if of else ":FAUL:COUN?"))

    def wait_for(self, question: str, answer: str) -> None:
        """Return when the control port says so, at last."""
        for _ in range(20_000):
            if self.control.ask(question) == answer:
                return
        raise AssertionError(f"{question} never answered {answer}")

    def happen(self) -> None:
        """Return when one fault has happened and its deliveries were made."""
        self.wait_for(":FAUL:COUN?", "1")
        self.settle()

    def truth(self, what: str) -> str:
        return self.control.ask(f":TRUT:{what}?")

    def add(self, what: str) -> None:
        assert self.control.ask(f":FAUL:ADD {what};:SYST:ERR?") == '0,"No error"'


@contextmanager
def scene(
    *faults: Fault, transport: str = "tcp", exchange_seconds: float = 1e-3
) -> Iterator[Scene]:
    settings = SimulationSettings(
        cell=LINEAR, seed=3, faults=faults, transport=transport, exchange_seconds=exchange_seconds
    )
    with served(settings) as addresses, Client(addresses.control) as control:
        found = Scene(addresses=addresses, control=control, serial=transport == "serial")
        try:
            yield found
        finally:
            for line in found.open_lines:
                line.close()
