"""The commands that look at a bench: list, probe, quiet. No logic lives here."""

from pathlib import Path
from typing import Annotated

import typer

from pulsetally.sequencer.telling import FAILED, complain, console, print_json, told

JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON, for programs.")]

bench_app = typer.Typer(no_args_is_help=True, help="Look at a bench: list, probe, quiet.")


@bench_app.command("list", epilog="Example: pulsetally bench list my_bench.yaml")
def bench_list(
    benches: Annotated[
        list[Path] | None, typer.Argument(metavar="[BENCH]...", help="Bench files to look at too.")
    ] = None,
    serial: Annotated[bool, typer.Option("--serial", help="Ask serial ports as well.")] = False,
    search: Annotated[
        bool, typer.Option(help="Search this machine's ports and, by broadcast, the network.")
    ] = True,
    as_json: JsonOption = False,
) -> None:
    """List the addresses that can be found, with who answers; two seconds at most."""
    from dataclasses import asdict

    from pulsetally.sequencer.bench import load_bench
    from pulsetally.sequencer.discovery import identify_all, visible_addresses
    from pulsetally.sequencer.summary import show_found

    with told():
        models = [load_bench(each).model for each in benches or []]
        addresses = visible_addresses() if search else []
        for model in models:
            addresses += [model.generator.address, model.oscilloscope.address]
        found = identify_all(addresses, serial_too=serial)
        if as_json:
            print_json([asdict(each) for each in found])
        else:
            show_found(console(), found)


@bench_app.command("probe", epilog="Example: pulsetally bench probe my_bench.yaml")
def bench_probe(
    bench: Annotated[Path, typer.Argument(help="The bench file.")], as_json: JsonOption = False
) -> None:
    """Try each command that a run would use, with the outputs off; fires nothing."""
    from dataclasses import asdict

    from pulsetally.sequencer.bench import load_bench
    from pulsetally.sequencer.instruments import open_links
    from pulsetally.sequencer.probe import probe
    from pulsetally.sequencer.summary import show_checks

    with told():
        table = load_bench(bench)
        with open_links(table) as (generator, oscilloscope):
            checks = list(probe(table, generator, oscilloscope))
        if as_json:
            print_json([asdict(each) for each in checks])
        else:
            show_checks(console(), checks)
        if any(each.holds is False for each in checks):
            raise typer.Exit(FAILED)


@bench_app.command("quiet", epilog="Example: pulsetally bench quiet my_bench.yaml")
def bench_quiet(bench: Annotated[Path, typer.Argument(help="The bench file.")]) -> None:
    """Switch the outputs off and read that back, whatever state things are in."""
    from pulsetally.drivers.lock import holder_of
    from pulsetally.sequencer.bench import load_bench
    from pulsetally.sequencer.instruments import quiet_bench
    from pulsetally.sequencer.summary import say

    with told():
        table = load_bench(bench)
        quiet_bench(table)
        say(
            console(),
            f"{table.model.generator.address}: the output is off, and reads back as off.",
        )
        if (holder := holder_of(table.model.generator.address)) is not None:
            complain(
                f"{holder} is using this generator and may switch its output on again. To fix it,"
                " end that process before you touch the cell, then ask for quiet once more."
            )
            raise typer.Exit(FAILED)
