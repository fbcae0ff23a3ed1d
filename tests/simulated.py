"""Run a simulated bench for a test, reached over real sockets, with its ground truth at hand."""

import asyncio
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from pulsetally.drivers.dialect import GeneratorDialect
from pulsetally.sequencer.bench import Bench, parse_bench
from pulsetally.sequencer.rehearsal import addressed_bench_text, shipped_bench
from pulsetally.simulators.facts import facts_of
from pulsetally.simulators.simulate import Addresses, SimulationSettings, serve_until


def scpi99() -> GeneratorDialect:
    """Return how a function generator is spoken to in the first dialect."""
    return shipped_bench().generator_dialect


class PlainClient:
    """A SCPI client that is not ours: a bare socket."""

    def __init__(self, address: str) -> None:
        _, host, port, _ = address.split("::")
        self._socket = socket.create_connection((host, int(port)), timeout=10)
        self._file = self._socket.makefile("rb")

    def write(self, command: str) -> None:
        self._socket.sendall(command.encode() + b"\n")

    def ask(self, command: str) -> str:
        self.write(command)
        return self._file.readline().decode().rstrip("\n")

    def close(self) -> None:
        self._file.close()
        self._socket.close()


@dataclass(frozen=True, kw_only=True)
class Simulated:
    """addresses: of the three ports. bench: the shipped bench file with these addresses."""

    addresses: Addresses
    bench: Bench

    @contextmanager
    def client(self, address: str) -> Iterator[PlainClient]:
        client = PlainClient(address)
        try:
            yield client
        finally:
            client.close()

    def truth(self, what: str) -> float:
        """Ask the control port, which knows what no instrument does."""
        with self.client(self.addresses.control) as client:
            return float(client.ask(f":TRUTh:{what}?"))


@contextmanager
def simulated(
    settings: SimulationSettings | None = None, *, title: str = ""
) -> Iterator[Simulated]:
    """Serve a bench in a thread for as long as the block runs.

    title: where there is one, the bench file has this title, and wiring and cell as settings
    say; otherwise it is the shipped one.
    """
    made = settings or SimulationSettings()
    listening = threading.Event()
    found: list[Addresses] = []
    loop = asyncio.new_event_loop()
    stop = asyncio.Event()

    def announce(addresses: Addresses) -> None:
        found.append(addresses)
        listening.set()

    def serve() -> None:
        asyncio.set_event_loop(loop)
        loop.run_until_complete(serve_until(made, announce, stop))
        loop.close()

    thread = threading.Thread(target=serve)
    thread.start()
    try:
        assert listening.wait(20)
        (addresses,) = found
        text = addressed_bench_text(
            addresses.generator,
            addresses.oscilloscope,
            addresses.control,
            made.family,
            table=facts_of(made, title) if title else None,
        )
        bench = parse_bench(text, file="bench.yaml")
        yield Simulated(addresses=addresses, bench=bench)
    finally:
        loop.call_soon_threadsafe(stop.set)
        thread.join()
