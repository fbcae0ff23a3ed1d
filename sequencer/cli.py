"""The commands. No logic lives here: each reads its options, calls one part, shows the result.

Heavy libraries are imported inside the commands that need them, so that help is quick.
"""

import os
from collections.abc import Iterator
from contextlib import closing, contextmanager
from datetime import datetime
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from pulsetally.sequencer.bench_commands import JsonOption, bench_app
from pulsetally.sequencer.telling import (
    DONE,
    FAILED,
    OUTPUTS_UNKNOWN,
    WRONG_INPUT,
    complain,
    console,
    print_json,
    silence_output,
    told,
)

if TYPE_CHECKING:
    from pulsetally.sequencer.bench import Bench
    from pulsetally.sequencer.errors import Mistake
    from pulsetally.sequencer.plan import Plan
    from pulsetally.sequencer.recipe import Recipe

app = typer.Typer(
    add_completion=True,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    epilog="Begin with: pulsetally rehearse full_count",
)

app.add_typer(bench_app, name="bench")

RecipeArgument = Annotated[
    str, typer.Argument(help="A recipe's path, or the name of one that ships.")
]
SetOption = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="NAME=VALUE", help="Override a parameter or a pulse setting."),
]
LogbookOption = Annotated[
    Path | None,
    typer.Option(
        "--logbook",
        metavar="PATH",
        help="The logbook; else PULSETALLY_LOGBOOK, else logbook.db here.",
    ),
]
SeedOption = Annotated[
    int | None, typer.Option(min=0, help="Seed of everything random; else the table's, else 1.")
]
TableOption = Annotated[
    str | None,
    typer.Option(
        "--table", metavar="FILE|NAME", help="A table file, or the name of one that ships."
    ),
]
DomainsOption = Annotated[
    int | None,
    typer.Option(min=0, help="Domains of the cell: fewer scatter more; 0 for no scatter."),
]


class SchemaName(StrEnum):
    """What a JSON schema can be had of."""

    RECIPE = "recipe"
    BENCH = "bench"


def _version(asked: bool) -> None:
    if asked:
        from importlib.metadata import version

        typer.echo(f"pulsetally {version('pulsetally')}")
        raise typer.Exit


@app.callback()
def begin(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """Calibrate ferroelectric counting cells: preset, step, read, and keep every waveform."""


@app.command(epilog="Example: pulsetally check my_recipe.yaml --bench my_bench.yaml")
def check(
    file: Annotated[
        str | None,
        typer.Argument(help="A recipe, a bench file or a table file, by path or shipped name."),
    ] = None,
    bench: Annotated[Path | None, typer.Option(help="The bench it would run on.")] = None,
    text: Annotated[
        bool, typer.Option("--text", help="Print the file's own text instead, to copy it.")
    ] = False,
    overrides: SetOption = None,
    logbook: LogbookOption = None,
    as_json: JsonOption = False,
    schema: Annotated[
        SchemaName | None,
        typer.Option(help="Print the JSON schema of recipes or bench files instead."),
    ] = None,
) -> None:
    """Read a recipe, bench or table file, and say what it will do or what is wrong with it."""
    if schema is not None:
        from pulsetally.sequencer.schemas import schema_text

        typer.echo(schema_text(schema.value), nl=False)
        return
    if file is None:
        complain("check what? To fix it, name a recipe or a bench file, or give --schema.")
        raise typer.Exit(WRONG_INPUT)
    if _is_table(file):
        _check_table(file, as_text=text)
        return
    from pulsetally.sequencer.bench import is_bench_file, load_bench
    from pulsetally.sequencer.forecast import free_bytes
    from pulsetally.sequencer.plan_summary import plan_object, show_plan
    from pulsetally.sequencer.summary import say

    with told():
        # A pipe can be read once only, and is taken for a recipe.
        if Path(file).is_file() and is_bench_file(Path(file)):
            found = load_bench(Path(file))
            if text:
                typer.echo(found.text, nl=False)
                return
            limit, notes = found.panel_limit(), found.notes()
            if as_json:
                print_json({"bench": found.model.bench, "panel_limit": limit, "notes": notes})
            else:
                for note in notes:
                    say(console(), f"Note: {note}.")
                say(console(), f"{found.model.bench}: well written; at most {limit:.4g} V"
                    " at the panel keep its limits")  # fmt: skip
            return
        plan, table = _planned(file, bench, overrides)
        if text:
            typer.echo(plan.recipe.text, nl=False)
            return
        now, free = datetime.now().astimezone(), free_bytes(_logbook_path(logbook))
        if as_json:
            print_json(plan_object(plan, table, now=now, free_bytes=free))
        else:
            show_plan(console(), plan, table, now=now, free_bytes=free)


def _is_table(file: str) -> bool:
    """Say whether this names a table file, and no recipe."""
    from pulsetally.sequencer.recipe import shipped_recipes
    from pulsetally.sequencer.yaml_places import load_yaml, read_text

    if Path(file).is_file():
        data = load_yaml(read_text(Path(file), "file", "name a file")[0], file).data
        return isinstance(data, dict) and "table" in data and "recipe" not in data
    if file in shipped_recipes():
        return False
    from pulsetally.simulators.table_file import shipped_tables

    return file in shipped_tables()


def _check_table(file: str, *, as_text: bool) -> None:
    from pulsetally.sequencer.summary import say
    from pulsetally.simulators.table_file import find_table, table_text
    from pulsetally.simulators.table_file_yaml import TableFileError

    try:
        found = find_table(file)
    except TableFileError as error:
        complain(str(error))
        raise typer.Exit(WRONG_INPUT) from error
    if as_text:
        typer.echo(table_text(found.settings, title=found.title, purpose=found.purpose), nl=False)
        return
    say(console(), f"{found.title}: well written. {found.purpose}".rstrip())
    say(console(), f"Rehearse on it with: pulsetally rehearse full_count --table {file}")


@app.command(epilog="Example: pulsetally rehearse full_count --set rounds=5")
def rehearse(
    recipe: RecipeArgument,
    overrides: SetOption = None,
    logbook: LogbookOption = None,
    table: TableOption = None,
    seed: SeedOption = None,
    domains: DomainsOption = None,
) -> None:
    """Run a recipe on the simulated bench."""
    from pulsetally.sequencer.rehearsal import faults_told, simulated_bench
    from pulsetally.sequencer.summary import say

    given = (("--table", table), ("--seed", seed), ("--domains", domains))
    # With the equals sign, a name that begins with a dash is no option.
    options = [f"{name}={value}" for name, value in given if value is not None]
    with told():
        if table is None:
            plan, shipped = _planned(recipe, None, overrides)
            options.append(f"--pulses={plan.most_pulses}")
            with simulated_bench(shipped, options) as bench:
                status = _carry_out(plan, bench, logbook, mode="rehearsal")
        else:
            with _recipe_checked(recipe, overrides), simulated_bench(None, options) as bench:
                plan, bench = _planned(recipe, bench, overrides)
                status = _carry_out(plan, bench, logbook, mode="rehearsal")
                if words := faults_told(bench):
                    say(console(), words)
    raise typer.Exit(status)


@app.command(epilog="Example: pulsetally run full_count --bench my_bench.yaml")
def run(
    recipe: RecipeArgument,
    bench: Annotated[Path, typer.Option(help="The bench file.")],
    overrides: SetOption = None,
    logbook: LogbookOption = None,
) -> None:
    """Run a recipe on the instruments of a bench file."""
    with told():
        plan, table = _planned(recipe, bench, overrides)
        status = _carry_out(plan, table, logbook, mode="run")
    raise typer.Exit(status)


@app.command(epilog="Example: pulsetally runs")
def runs(logbook: LogbookOption = None, as_json: JsonOption = False) -> None:
    """List the runs of a logbook."""
    from dataclasses import asdict

    from pulsetally.sequencer.logbook import Logbook
    from pulsetally.sequencer.results import list_runs
    from pulsetally.sequencer.summary import say, show_runs

    with told():
        path = _logbook_path(logbook)
        found = list_runs(Logbook(path, create=False))
        if as_json:
            print_json([asdict(each) for each in found])
        else:
            show_runs(console(), found)
            say(console(), f"logbook: {path}")


@app.command(epilog="Example: pulsetally show latest --json")
def show(
    which: Annotated[str, typer.Argument(metavar="[RUN|latest]", help="Which run.")] = "latest",
    logbook: LogbookOption = None,
    as_json: JsonOption = False,
) -> None:
    """Show what a run found."""
    from pulsetally.sequencer.logbook import Logbook
    from pulsetally.sequencer.results import find_run, run_result
    from pulsetally.sequencer.summary import show_result

    with told():
        book = Logbook(_logbook_path(logbook), create=False)
        result = run_result(book, find_run(book, which))
        if as_json:
            print_json(result.as_object())
        else:
            show_result(console(), result)


@app.command(epilog="Example: pulsetally simulate --write-bench bench.yaml")
def simulate(
    as_json: JsonOption = False,
    table: TableOption = None,
    seed: SeedOption = None,
    domains: DomainsOption = None,
    generator_port: Annotated[int, typer.Option(min=0, max=65535, help="0: any free one.")] = 0,
    oscilloscope_port: Annotated[int, typer.Option(min=0, max=65535, help="0: any free one.")] = 0,
    control_port: Annotated[int, typer.Option(min=0, max=65535, help="0: any free one.")] = 0,
    dialect: Annotated[
        str | None,
        typer.Option(help="scpi99, perdiv or stateword; else the table's, else scpi99."),
    ] = None,
    serial: Annotated[
        bool, typer.Option("--serial", help="On pseudo-terminals instead of TCP ports.")
    ] = False,
    hislip: Annotated[
        bool, typer.Option("--hislip", help="HiSLIP on the TCP ports instead of plain text.")
    ] = False,
    real_time: Annotated[
        bool, typer.Option("--real-time", help="Have the bench's time follow the wall's.")
    ] = False,
    write_bench: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Write a bench file with the addresses.")
    ] = None,
) -> None:
    """Start the simulated instruments and keep them until Ctrl-C."""
    if serial and hislip:
        complain("--serial and --hislip can't be had together. To fix it, leave one out.")
        raise typer.Exit(WRONG_INPUT)
    from pulsetally.sequencer.bench import parse_bench
    from pulsetally.sequencer.errors import InputError
    from pulsetally.sequencer.rehearsal import addressed_bench_text
    from pulsetally.simulators.compiled import use_compiled
    from pulsetally.simulators.facts import facts_of
    from pulsetally.simulators.simulate import Addresses, chosen_settings, serve, tell

    def announce(addresses: Addresses) -> None:
        if write_bench is not None:
            clock = None if settings.real_time else addresses.control
            text = addressed_bench_text(
                addresses.generator,
                addresses.oscilloscope,
                clock,
                settings.family,
                table=facts,
            )
            try:
                # A table may have a wiring that no bench file can say.
                parse_bench(text, file=str(write_bench))
                write_bench.write_text(text, encoding="utf-8")
            except InputError as error:
                complain(str(error))
                raise typer.Exit(WRONG_INPUT) from error
            except OSError as error:
                complain(f"{write_bench}: the bench file can't be written: {error.strerror}")
                raise typer.Exit(WRONG_INPUT) from error
        tell(addresses, facts, as_json=as_json)

    try:
        title, settings = chosen_settings(
            table,
            family=dialect,
            seed=seed,
            domains=domains,
            real_time=real_time,
            transport="serial" if serial else "hislip" if hislip else "tcp",
            generator_port=generator_port,
            oscilloscope_port=oscilloscope_port,
            control_port=control_port,
        )
    except ValueError as error:
        complain(str(error) if table else f"the simulated bench can't be made: {error}.")
        raise typer.Exit(WRONG_INPUT) from error
    facts = facts_of(settings, title)
    # Before anybody can connect: no client would wait for a compiler.
    use_compiled()
    try:
        serve(settings, announce)
    except OSError as error:
        complain(f"the simulated bench can't listen: {error.strerror}. To fix it, use port 0.")
        raise typer.Exit(FAILED) from error


@contextmanager
def _recipe_checked(recipe: str, overrides: list[str] | None) -> Iterator[None]:
    """Have a table file's mistakes told together with those of the recipe."""
    from pulsetally.sequencer.errors import InputError
    from pulsetally.sequencer.recipe import find_recipe
    from pulsetally.sequencer.rehearsal import TableRefused

    settings, mistakes = _overrides(overrides or [])
    try:
        find_recipe(recipe, settings)
    except InputError as error:
        mistakes += error.mistakes
    try:
        yield
    except TableRefused as error:
        raise TableRefused("\n".join([*map(str, mistakes), str(error)])) from error


def _planned(
    recipe: str, bench: "Path | Bench | None", overrides: list[str] | None
) -> "tuple[Plan, Bench]":
    """Read recipe and bench, and plan; every mistake of both files is told at once."""
    from pulsetally.sequencer.bench import load_bench
    from pulsetally.sequencer.errors import InputError
    from pulsetally.sequencer.plan import make_plan
    from pulsetally.sequencer.recipe import find_recipe
    from pulsetally.sequencer.rehearsal import shipped_bench

    settings, mistakes = _overrides(overrides or [])
    found: Recipe | None = None
    table: Bench | None = None
    try:
        found = find_recipe(recipe, settings)
    except InputError as error:
        mistakes += error.mistakes
    try:
        table = load_bench(bench) if isinstance(bench, Path) else bench or shipped_bench()
    except InputError as error:
        mistakes += error.mistakes
    if mistakes or found is None or table is None:
        raise InputError(mistakes)
    return make_plan(found, table), table


def _carry_out(plan: "Plan", bench: "Bench", logbook: Path | None, *, mode: str) -> int:
    from pulsetally.sequencer import engine
    from pulsetally.sequencer.errors import LogbookError
    from pulsetally.sequencer.events import RunState
    from pulsetally.sequencer.live import follow
    from pulsetally.sequencer.logbook import Logbook
    from pulsetally.sequencer.models import units_of
    from pulsetally.sequencer.person import AlwaysReady, whoever_is_there
    from pulsetally.sequencer.progress import Progress
    from pulsetally.sequencer.results import run_result
    from pulsetally.sequencer.safety import StopSwitch, signals
    from pulsetally.sequencer.summary import say, show_result

    screen, path = console(), _logbook_path(logbook)
    book, stop = Logbook(path), StopSwitch()
    # How long a rehearsal takes depends on this machine, not on the plan.
    seconds = plan.seconds if mode == "run" else None
    progress = Progress(
        rounds=len(plan.rounds),
        seconds=seconds,
        swept=plan.swept,
        units=units_of(plan.recipe.model.parameters),
    )
    for warning in plan.warnings:
        say(screen, f"Note: {warning}.")
    if mode == "rehearsal" and plan.asking_seconds:
        say(screen, "Note: a rehearsal answers by itself what the recipe asks.")
    broken = ""
    with signals(stop):
        recorder = book.begin_run(plan, bench, mode=mode)
        # Closed here and now, whatever happens: closing is what switches the output off.
        person = AlwaysReady() if mode == "rehearsal" else whoever_is_there()
        with closing(engine.run(plan, bench, recorder, stop, person)) as events:
            try:
                follow(events, progress, screen)
            except OSError as error:
                broken = f"the view could not be written ({error.strerror})"
    # What the run says of its end counts, not what could be written into the logbook.
    ended = recorder.ended
    if broken:
        silence_output()
        complain(f"the run was stopped, since {broken}; what it measured is kept in {path}")
    else:
        try:
            show_result(screen, run_result(book, recorder.run), rounds=False)
        except LogbookError as error:
            complain(str(error))
        option = "" if logbook is None else f" --logbook {path}"
        say(screen, f"Everything is kept in {path} as run {recorder.run};"
            f" see it with: pulsetally show {recorder.run}{option}")  # fmt: skip
    if ended is None or ended.state is not RunState.FINISHED:
        complain(f"the run {ended.state}: {ended.reason}" if ended else "the run has no end")
    if ended is None or ended.outputs_off is False:
        complain(ended.unconfirmed if ended else "OUTPUTS NOT CONFIRMED OFF: look at them.")
        return OUTPUTS_UNKNOWN
    if ended.outputs_off and not broken:
        say(screen, "Outputs are off, and read back as off.")
    return DONE if ended.state is RunState.FINISHED else FAILED


def _overrides(written: list[str]) -> "tuple[dict[str, str], list[Mistake]]":
    from pulsetally.sequencer.errors import Mistake

    settings, mistakes = {}, []
    for each in written:
        name, _, value = (part.strip() for part in each.partition("="))
        if name and value:
            settings[name] = value
            continue
        mistakes.append(
            Mistake(
                file=f"--set {each}",
                line=0,
                column=0,
                path="",
                problem="this is not NAME=VALUE",
                remedy="write it as in --set up.width=80us",
            )
        )
    return settings, mistakes


def _logbook_path(given: Path | None) -> Path:
    return given or Path(os.environ.get("PULSETALLY_LOGBOOK") or "logbook.db")


def main() -> None:
    """Run the command line."""
    app()
