"""A client that sends without end fills no memory and harms nobody, over every kind of line."""

import json
import struct
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path

import pytest

from pulsetally.simulators.settings import TRANSPORTS
from tests.simulators.sockets import Client
from tests.simulators.transports import ByteLine, SerialLine, TcpLine, open_line

COMMAND = [sys.executable, "-m", "pulsetally.simulators.simulate", "--json", "--until-stdin-closes"]

MEGABYTE = 1_000_000
# Far less than what is sent; an interpreter's memory moves by some megabytes anyway.
ALLOWED = 16 * MEGABYTE

# What an endless message begins with, and how many megabytes follow: nothing, and what
# not even a newline ends.
BEGINNINGS = {b"": 40, b":TEXT '": 10, b":DATA #9999999999": 10}

# HiSLIP (IVI-6.1, from memory): prologue, type, control code, parameter, payload length.
_HEADER = struct.Struct(">2sBBIQ")
_INITIALIZE, _DATA, _ASYNC_INITIALIZE = 0, 6, 17


class HislipFlood:
    """Both channels of a HiSLIP session, with messages that never end."""

    def __init__(self, address: str) -> None:
        port = address.split(",")[1].removesuffix("::INSTR")
        tcp = f"TCPIP::127.0.0.1::{port}::SOCKET"
        self._synchronous = TcpLine(tcp)
        self._synchronous.send(_HEADER.pack(b"HS", _INITIALIZE, 0, 0x0100_0000, 7) + b"hislip0")
        answer = self._header_from(self._synchronous)
        self._asynchronous = TcpLine(tcp)
        self._asynchronous.send(_HEADER.pack(b"HS", _ASYNC_INITIALIZE, 0, answer & 0xFFFF, 0))
        self._header_from(self._asynchronous)

    def _header_from(self, line: TcpLine) -> int:
        data = b""
        while len(data) < _HEADER.size:
            data += line.arrived()
        return int(_HEADER.unpack(data)[3])

    def send(self, data: bytes) -> None:
        self._synchronous.send(_HEADER.pack(b"HS", _DATA, 0, 0xFFFF_FF00, len(data)) + data)

    def close(self) -> None:
        self._synchronous.close()
        self._asynchronous.close()


FLOODS: dict[str, Callable[[str], TcpLine | SerialLine | HislipFlood]] = {
    "tcp": TcpLine,
    "serial": SerialLine,
    "hislip": HislipFlood,
}


class Program:
    """The served bench in a process of its own."""

    def __init__(self, process: "subprocess.Popen[bytes]", addresses: dict[str, str]) -> None:
        self.addresses = addresses
        self._status = Path(f"/proc/{process.pid}/status")

    def most_memory_bytes(self) -> int:
        """Return the most memory that the process ever held."""
        (line,) = (one for one in self._status.read_text().splitlines() if "VmHWM" in one)
        return int(line.split()[1]) * 1024


@contextmanager
def program(transport: str) -> Iterator[Program]:
    flags = [] if transport == "tcp" else [f"--{transport}"]
    with subprocess.Popen(
        [*COMMAND, *flags],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
    ) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        yield Program(process, json.loads(process.stdout.readline()))
        process.stdin.close()
        assert process.wait(10) == 0


def test_every_transport_is_flooded() -> None:
    assert set(FLOODS) == set(TRANSPORTS)


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="memory is read from /proc")
@pytest.mark.parametrize("transport", TRANSPORTS)
def test_megabytes_without_a_line_end_fill_no_memory(transport: str) -> None:
    with program(transport) as bench:
        generator = bench.addresses["generator"]
        piece = b"x" * (MEGABYTE // 2)
        with (
            closing(open_line(bench.addresses["oscilloscope"])) as other,
            Client(bench.addresses["control"]) as control,
        ):
            before = bench.most_memory_bytes()
            for beginning, megabytes in BEGINNINGS.items():
                with closing(FLOODS[transport](generator)) as flood:
                    flood.send(beginning)
                    for _ in range(megabytes * MEGABYTE // len(piece)):
                        flood.send(piece)
                        other.tell(b"*IDN?")
                        assert b"OSCILLOSCOPE" in other.hear_line()
                assert control.ask("*OPC?") == "1"
            assert bench.most_memory_bytes() - before < ALLOWED
        with closing(open_line(generator)) as line:
            line.tell(b"*CLS")
            line.tell(b"*IDN?")
            assert b"GENERATOR" in line.hear_line()


@pytest.mark.parametrize("transport", TRANSPORTS)
@pytest.mark.parametrize("beginning", BEGINNINGS)
def test_half_a_message_and_goodbye_harm_nobody(
    benches: dict[str, Program], transport: str, beginning: bytes
) -> None:
    bench = benches[transport]
    with closing(FLOODS[transport](bench.addresses["generator"])) as flood:
        if isinstance(flood, ByteLine):
            # A serial line has no connections: the server must have seen the client come,
            flood.tell(b"*OPC?")
            assert flood.hear_line() == b"1"
        flood.send(b"PULS:COUN 7;" + beginning)
    with Client(bench.addresses["control"]) as control:
        for _ in range(5):
            # and go, before the next one comes.
            control.ask("*OPC?")
    with closing(open_line(bench.addresses["generator"])) as line:
        line.tell(b":PULS:COUN?;:SYST:ERR?")
        assert line.hear_line() == b'1;0,"No error"'


@pytest.fixture(scope="module")
def benches() -> Iterator[dict[str, Program]]:
    with program("tcp") as tcp, program("serial") as serial, program("hislip") as hislip:
        yield {"tcp": tcp, "serial": serial, "hislip": hislip}
