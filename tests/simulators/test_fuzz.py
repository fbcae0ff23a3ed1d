"""Spoiled messages, each family's own, never break an instrument and never go unnoticed.

Some of them fire a thousand million pulses, and some of these wait for the last.
"""

import select
import socket
from collections.abc import Iterator
from contextlib import closing
from random import Random

import pytest

from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.settings import TRANSPORTS
from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.counting import ERROR_QUERIES
from tests.simulators.mutations import DEADLY, LEAVES_OPEN, ROUGH, Spoiled, spoiled
from tests.simulators.sockets import Client, served
from tests.simulators.transports import MARKED, open_line

# What ends whatever a message left open; the fourth is more than a message may have.
_CLOSERS = (b'"\n', b"'\n", b" " * 1000 + b"\n", b" " * 70_000 + b"\n", b"\n")
_MOST_POINTS = 5000


def messages_for(device: ScpiDevice, random: Random) -> Iterator[Spoiled]:
    while True:
        yield spoiled(device, random)


def close_what_is_open(engine: ScpiEngine) -> None:
    """End the message as a client could that knows nothing of what it sent."""
    for closer in _CLOSERS:
        if not engine.amid_message:
            return
        engine.receive(closer)
    assert not engine.amid_message


class Fuzzed:
    """One instrument of a bench and the messages for it."""

    def __init__(self, bench: Bench, device: ScpiDevice, random: Random) -> None:
        self._bench, self._device = bench, device
        self._engine = ScpiEngine(device)
        self._messages, self._random = messages_for(device, random), random
        self._identity = device.identity.encode() + b"\n"

    def hit(self) -> Spoiled:
        """Send one message; check that the instrument noticed what it had to, and lives.

        Half of them end as over a byte stream, the others as over a line that marks ends.
        """
        found = next(self._messages)
        self._engine.receive(b"*CLS\n")
        if self._random.random() < 0.5:
            self._engine.receive(found.message + b"\n")
            close_what_is_open(self._engine)
        else:
            for _ in self._engine.answers(found.message, end=True):
                pass
            assert not self._engine.amid_message, found
        if found.deadly:
            assert len(self._device.status.errors) > 0, found
        assert self._engine.receive(b"*IDN?\n") == self._identity, found
        # Long records are slow, and tell nothing about messages.
        if self._bench.digitizer.settings.points > _MOST_POINTS:
            self._bench.oscilloscope.reset()
        return found


def fuzz(family: str, messages: int, seed: int) -> list[Spoiled]:
    """Send so many messages to a bench, in turn to each of its three instruments."""
    random = Random(seed)
    bench = Bench(SimulationSettings(family=family))
    targets = [
        Fuzzed(bench, device, random)
        for device in (bench.generator, bench.oscilloscope, bench.control)
    ]
    return [targets[index % len(targets)].hit() for index in range(messages)]


@pytest.mark.parametrize("family", FAMILIES)
def test_spoiled_messages_are_noticed_and_survived(family: str) -> None:
    found = fuzz(family, 3000, seed=1)
    names = {name for one in found for name in one.how.split(", ")}
    assert names == {spoiler.__name__ for spoiler in (*(one for one, _ in DEADLY), *ROUGH)}


@pytest.mark.whole
@pytest.mark.parametrize("family", FAMILIES)
def test_a_hundred_thousand_spoiled_messages_are_noticed_and_survived(family: str) -> None:
    """Takes about 25 s for the three families together on one idle core."""
    fuzz(family, 33_334, seed=2)


def pour(line: socket.socket, data: bytes) -> bytes:
    """Send everything and no more, reading meanwhile; return what came until the end."""
    left, heard, is_open = memoryview(data), b"", True
    while is_open:
        readable, writable, _ = select.select([line], [line] if left else [], [], 20)
        assert readable or writable, "the server hangs"
        if writable:
            left = left[line.send(left[:4096]) :]
            if not left:
                line.shutdown(socket.SHUT_WR)
        if readable:
            piece = line.recv(1 << 20)
            heard += piece
            is_open = bool(piece)
    return heard


@pytest.fixture(params=FAMILIES)
def served_family(request: pytest.FixtureRequest) -> Iterator[tuple[str, Bench, str, str]]:
    """Give a family, a twin of the served bench for its tables, and two addresses."""
    settings = SimulationSettings(family=request.param, exchange_seconds=0.0)
    with served(settings) as addresses:
        yield request.param, Bench(settings), addresses.generator, addresses.oscilloscope


Served = tuple[str, Bench, str, str]
BATCHES, BATCH = 12, 50


def test_the_server_survives_spoiled_messages(served_family: Served) -> None:
    _, twin, *addresses = served_family
    random = Random(3)
    for device, address in zip((twin.generator, twin.oscilloscope), addresses, strict=True):
        source = messages_for(device, random)
        identity = device.identity
        with Client(address) as other:
            for _ in range(BATCHES):
                messages = [next(source).message for _ in range(BATCH)]
                with Client(address) as client:
                    # The last message may be half of one: the client says goodbye.
                    pour(client.socket, b"\n".join(messages))
                assert other.ask("*IDN?") == identity
            other.write("*RST;*CLS")
            assert other.ask("*OPC?") == "1"


def test_the_server_tells_of_every_message_that_is_bad_for_certain(served_family: Served) -> None:
    family, twin, *addresses = served_family
    query, nothing = ERROR_QUERIES[family]
    random = Random(4)
    for device, address in zip((twin.generator, twin.oscilloscope), addresses, strict=True):
        source = messages_for(device, random)
        bad = (one for one in source if one.deadly and one.how not in LEAVES_OPEN)
        with Client(address) as client, Client(address) as other:
            client.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            for _ in range(150):
                found = next(bad)
                client.socket.sendall(b"*CLS\n" + found.message + b"\n")
                assert client.ask(query) != nothing, found
            assert other.ask("*IDN?") == device.identity


@pytest.mark.parametrize("transport", sorted(set(TRANSPORTS) - {"tcp"}))
def test_the_other_lines_survive_spoiled_messages(transport: str) -> None:
    settings = SimulationSettings(family="perdiv", transport=transport, exchange_seconds=0.0)
    twin, random = Bench(settings), Random(5)
    with served(settings) as addresses:
        for device, address in (
            (twin.generator, addresses.generator),
            (twin.oscilloscope, addresses.oscilloscope),
        ):
            source = messages_for(device, random)
            with closing(open_line(address)) as line:
                for index in range(200):
                    line.tell(b"*RST")
                    line.tell(next(source).message)
                    if transport not in MARKED:
                        for closer in _CLOSERS:
                            line.tell(closer[:-1])
                    # Answers to the message itself may come first.
                    line.tell(b"*CLS;*ESE %d;*ESE?;*IDN?" % index)
                    while line.hear_line().decode() != f"{index};{device.identity}":
                        pass
