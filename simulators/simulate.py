"""Serve the simulated bench: a generator, an oscilloscope and a control port on loopback."""

import argparse
import asyncio
import json
import os
import signal
import sys
import threading
from collections.abc import Awaitable, Callable, Mapping, Sequence
from contextlib import AsyncExitStack, suppress
from dataclasses import asdict, dataclass, replace
from typing import Any, Protocol

from pulsetally.simulators.cell import DEFAULT_DOMAINS, CellDescription
from pulsetally.simulators.clock import BenchEndsError, VirtualClock, WallClock
from pulsetally.simulators.compiled import use_compiled
from pulsetally.simulators.control import BenchControl
from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.facts import facts_of
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.faults import FaultSchedule
from pulsetally.simulators.generator_model import GeneratorModel
from pulsetally.simulators.hislip import SUB_ADDRESS, HislipServer
from pulsetally.simulators.mishaps import Mishaps, break_cell_on_time
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.server import LOOPBACK, DeviceServer
from pulsetally.simulators.settings import TRANSPORTS as TRANSPORTS
from pulsetally.simulators.settings import SimulationSettings as SimulationSettings
from pulsetally.simulators.table import Table

VERSION = "1"


@dataclass(frozen=True, slots=True, kw_only=True)
class Addresses:
    """VISA resource names of the three instruments."""

    generator: str
    oscilloscope: str
    control: str


class Bench:
    """The instruments and the table between them, not yet on any port."""

    def __init__(self, settings: SimulationSettings) -> None:
        cell, wiring = settings.cell, settings.wiring
        self.table = Table(cell, wiring, seed=settings.seed)
        if settings.socket == "open":
            self.table.open_cell()
        elif settings.socket == "shorted":
            self.table.short_cell()
        clock = WallClock if settings.real_time else VirtualClock
        self.clock = clock(self.table)
        self.table.observe(self.clock)
        family = FAMILIES[settings.family]
        self.digitizer = Digitizer(
            clock=self.clock,
            converter=family.converter,
            power_on=family.scope_power_on,
            imperfections=settings.digitizer,
            seed=settings.seed,
        )
        self.table.observe(self.digitizer, needs_detail=lambda: self.digitizer.needs_detail)
        self.generator_model = GeneratorModel(
            table=self.table,
            clock=self.clock,
            source_ohms=wiring.source_ohms,
            source=settings.source,
            seed=settings.seed,
            sync=self.digitizer.trigger_externally,
        )
        adds = family.manner.identity
        self.oscilloscope = family.oscilloscope(
            _identity("OSCILLOSCOPE", adds, settings), self.digitizer
        )
        self.generator = family.generator(
            _identity("FUNCTION GENERATOR", adds, settings), self.generator_model
        )
        self.schedule = FaultSchedule(settings.faults, seed=settings.seed)
        self.generator_mishaps, self.oscilloscope_mishaps = (
            Mishaps(name, device, self.schedule, table=self.table, clock=self.clock)
            for name, device in (
                ("generator", self.generator),
                ("oscilloscope", self.oscilloscope),
            )
        )
        self.generator_model.ignores_trigger = self.generator_mishaps.ignores_trigger
        self.digitizer.ignores_trigger = self.oscilloscope_mishaps.ignores_trigger
        break_cell_on_time(settings.faults, self.schedule, table=self.table, clock=self.clock)
        self.control = BenchControl(
            _identity("BENCH CONTROL", "", settings),
            table=self.table,
            clock=self.clock,
            generator=self.generator_model,
            farads=cell.farads + wiring.probe_farads,
            schedule=self.schedule,
        )


def _identity(what: str, adds: str, settings: SimulationSettings) -> str:
    model = f"SIMULATED {what} {adds}".rstrip()
    return f"PULSETALLY,{model},{settings.seed},{VERSION}"


async def serve_until(
    settings: SimulationSettings,
    announce: Callable[[Addresses], None],
    stop: asyncio.Event,
    *,
    is_to_end: Callable[[], bool] = lambda: False,
) -> None:
    """Serve the bench in the running event loop until stop is set.

    is_to_end: for a message that takes long, during which the loop sees no stop: where it
    says yes, the message is left in its middle, and BenchEndsError leaves the loop.
    """
    bench = Bench(settings)
    bench.clock.is_to_end = is_to_end
    for mishaps in (bench.generator_mishaps, bench.oscilloscope_mishaps):
        mishaps.later = asyncio.get_running_loop().call_later

    def pass_time() -> None:
        if settings.real_time:
            bench.clock.catch_up()
        else:
            bench.clock.advance(settings.exchange_seconds)

    listener = _LISTENERS[settings.transport]
    async with AsyncExitStack() as listening:

        async def listen(
            start: _Listener, device: ScpiDevice, port: int, mishaps: Mishaps | None = None
        ) -> str:
            server, address = await start(device, port, pass_time, mishaps)
            listening.push_async_callback(server.stop)
            return address

        announce(
            Addresses(
                generator=await listen(
                    listener, bench.generator, settings.generator_port, bench.generator_mishaps
                ),
                oscilloscope=await listen(
                    listener,
                    bench.oscilloscope,
                    settings.oscilloscope_port,
                    bench.oscilloscope_mishaps,
                ),
                control=await listen(_port, bench.control, settings.control_port),
            )
        )
        await stop.wait()


class _Server(Protocol):
    async def stop(self) -> None: ...


_Listener = Callable[
    [ScpiDevice, int, Callable[[], None], Mishaps | None], Awaitable[tuple[_Server, str]]
]


async def _port(
    device: ScpiDevice, port: int, after_message: Callable[[], None], mishaps: Mishaps | None
) -> tuple[_Server, str]:
    server = DeviceServer(device, after_message=after_message, mishaps=mishaps)
    return server, f"TCPIP::{LOOPBACK}::{await server.start(port)}::SOCKET"


async def _terminal(
    device: ScpiDevice, _: int, after_message: Callable[[], None], mishaps: Mishaps | None
) -> tuple[_Server, str]:
    try:
        from pulsetally.simulators.pseudo_terminal import TerminalServer
    except ImportError as error:
        raise OSError(f"this system has no pseudo-terminals: {error}") from error
    server = TerminalServer(device, after_message=after_message, mishaps=mishaps)
    return server, f"ASRL{await server.start()}::INSTR"


async def _hislip(
    device: ScpiDevice, port: int, after_message: Callable[[], None], mishaps: Mishaps | None
) -> tuple[_Server, str]:
    server = HislipServer(device, after_message=after_message, mishaps=mishaps)
    return server, f"TCPIP::{LOOPBACK}::{SUB_ADDRESS},{await server.start(port)}::INSTR"


_LISTENERS: dict[str, _Listener] = {"tcp": _port, "serial": _terminal, "hislip": _hislip}


def serve(settings: SimulationSettings, announce: Callable[[Addresses], None]) -> None:
    """Serve the bench until SIGTERM, SIGINT or, when asked, the end of standard input.

    A message that is being followed meanwhile, however long it would take, is left.
    announce: called once, when all three listen. To be called in the main thread.
    Raises OSError when a port is taken.
    """
    with suppress(BenchEndsError):
        asyncio.run(_serve(settings, announce))


async def _serve(settings: SimulationSettings, announce: Callable[[Addresses], None]) -> None:
    loop, stop, ended = asyncio.get_running_loop(), asyncio.Event(), False

    def end(*_: object) -> None:
        nonlocal ended
        ended = True
        # A loop that is closing no longer needs to hear of the end.
        with suppress(RuntimeError):
            loop.call_soon_threadsafe(stop.set)

    def read_to_the_end() -> None:
        # os.read holds no lock of the interpreter's, so that a signal can end the
        # process while this thread still waits.
        while os.read(0, 65_536):
            pass
        end()

    # Not the loop's own handlers, which not every platform has.
    before = {number: signal.signal(number, end) for number in (signal.SIGTERM, signal.SIGINT)}
    if settings.until_stdin_closes:
        threading.Thread(target=read_to_the_end, daemon=True).start()
    try:
        await serve_until(settings, announce, stop, is_to_end=lambda: ended)
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def tell(addresses: Addresses, facts: Mapping[str, object], *, as_json: bool) -> None:
    """Print the addresses, as one line of JSON or as three sentences, and flush them.

    facts: what a person would know about such a table; the JSON has them as "table".
    """
    if as_json:
        print(json.dumps(asdict(addresses) | {"table": facts}, allow_nan=False), flush=True)
        return
    print(f"The function generator listens at {addresses.generator}.")
    print(f"The oscilloscope listens at {addresses.oscilloscope}.")
    print(f"The control port, for rehearsals only, is {addresses.control}.", flush=True)


def chosen_settings(
    table: str | None,
    *,
    family: str | None,
    seed: int | None,
    domains: int | None,
    real_time: bool = False,
    **more: Any,
) -> tuple[str, SimulationSettings]:
    """Return a title and what the simulated bench is made of, from what a person chose.

    table: a table file or the name of a shipped one; None for the usual table, whose title
    is "". family, seed, domains: go before what the table says, unless None; 0 domains for a
    cell that never scatters. real_time: in place of virtual time. more: further settings.
    Raises TableFileError with every mistake of the file, ValueError for settings that don't
    go together.
    """
    title, settings = "", SimulationSettings(cell=CellDescription(domains=DEFAULT_DOMAINS))
    if table is not None:
        # Only here: without a table file its libraries are of no use.
        from pulsetally.simulators.table_file import find_table

        found = find_table(table)
        title, settings = found.title, found.settings
    if real_time:
        more["real_time"] = True
    if domains is not None:
        more["cell"] = replace(settings.cell, domains=domains or None)
    for name, value in (("family", family), ("seed", seed)):
        if value is not None:
            more[name] = value
    return title, replace(settings, **more)


def main(arguments: Sequence[str] | None = None) -> int:
    """Serve the bench from the command line; return the exit status."""
    parser = argparse.ArgumentParser(
        prog="python -m pulsetally.simulators.simulate",
        description="Serve a simulated function generator and oscilloscope on this machine.",
    )
    parser.add_argument("--json", action="store_true", help="print the addresses as JSON")
    parser.add_argument(
        "--family",
        choices=tuple(FAMILIES),
        help="what generator and oscilloscope speak (scpi99)",
    )
    transport = parser.add_mutually_exclusive_group()
    transport.add_argument(
        "--serial",
        dest="transport",
        action="store_const",
        const="serial",
        default="tcp",
        help="listen on pseudo-terminals instead of TCP ports",
    )
    transport.add_argument(
        "--hislip",
        dest="transport",
        action="store_const",
        const="hislip",
        help="speak HiSLIP on the TCP ports instead of plain text",
    )
    parser.add_argument(
        "--table", metavar="FILE|NAME", help="a table file, or the name of one that ships"
    )
    parser.add_argument("--seed", type=int, help="seed of everything random, at least 0 (1)")
    parser.add_argument(
        "--domains",
        type=int,
        help="number of domains, whose fewness makes full counts scatter; 0: no scatter",
    )
    for name in ("generator", "oscilloscope", "control"):
        parser.add_argument(f"--{name}-port", type=int, default=0, help="0: any free port")
    parser.add_argument(
        "--real-time", action="store_true", help="have the bench's time follow the wall's"
    )
    parser.add_argument(
        "--until-stdin-closes", action="store_true", help="end when standard input does"
    )
    parser.add_argument(
        "--pulses", type=int, help="how many are to come, if known: few are not worth compiling"
    )
    given = parser.parse_args(arguments)

    try:
        title, settings = chosen_settings(
            given.table,
            family=given.family,
            domains=given.domains,
            transport=given.transport,
            seed=given.seed,
            generator_port=given.generator_port,
            oscilloscope_port=given.oscilloscope_port,
            control_port=given.control_port,
            real_time=given.real_time,
            until_stdin_closes=given.until_stdin_closes,
        )
    except ValueError as error:
        if given.table is None:
            parser.error(str(error))
        # The mistakes of a file, with their places: usage would only hide them.
        print(error, file=sys.stderr)
        return 2
    facts = facts_of(settings, title)
    # Before anybody can connect: no client would wait for a compiler.
    use_compiled(pulses=given.pulses)
    try:
        serve(settings, lambda addresses: tell(addresses, facts, as_json=given.json))
    except OSError as error:
        print(f"The simulated bench can't listen: {error}.", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
