"""Start the simulated bench for a rehearsal and hand out its addresses.

The simulated bench is another process, reached by address like a real table. It lives in a
session of its own, so that Ctrl-C in the terminal reaches the run and not the instruments, and
it ends when its standard input closes, so that it never outlives a program that was killed.
"""

import json
import subprocess
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from importlib.resources import as_file, files
from pathlib import Path

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.sequencer.bench import Bench, parse_bench

_START_SECONDS = 30.0


class RehearsalError(PulsetallyError):
    """The simulated bench did not start."""


def shipped_names() -> list[str]:
    """Return the names of the recipes that ship with the program."""
    names = (each.name for each in files("pulsetally.recipes").iterdir())
    return sorted(
        name.removesuffix(".yaml")
        for name in names
        if name.endswith(".yaml") and not name.endswith("_bench.yaml")
    )


@contextmanager
def recipe_path(written: str) -> Iterator[Path]:
    """Find a recipe by the name of a shipped one, or by its path."""
    if written in shipped_names():
        with as_file(files("pulsetally.recipes") / f"{written}.yaml") as path:
            yield path
    else:
        yield Path(written)


def shipped_bench() -> Bench:
    """Return the bench that a rehearsal uses, before its instruments have addresses."""
    name = "simulated_bench.yaml"
    text = (files("pulsetally.recipes") / name).read_text(encoding="utf-8")
    return parse_bench(text, file=name)


def addressed_bench_text(generator: str, oscilloscope: str, clock: str) -> str:
    """Write the shipped bench file anew, with the addresses of running instruments."""
    bench = shipped_bench()
    text = bench.text
    for was, now in (
        (bench.model.generator.address, generator),
        (bench.model.oscilloscope.address, oscilloscope),
    ):
        text = text.replace(was, now)
    return text.replace("wiring:", f"clock: {clock}  # only a simulated bench has one\nwiring:")


@contextmanager
def simulated_bench(bench: Bench, options: Sequence[str] = ()) -> Iterator[Bench]:
    """Start simulated instruments; give the bench with their addresses. Raises RehearsalError."""
    command = [
        sys.executable,
        "-m",
        "pulsetally.simulators.simulate",
        "--json",
        "--until-stdin-closes",
        *options,
    ]
    with subprocess.Popen(
        command,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    ) as process:
        try:
            line = outputs.readline()
            if not line:
                process.stdin.close()
                said = process.stderr.read().strip().splitlines()
                raise RehearsalError(
                    f"the simulated bench did not start ({said[-1] if said else 'no word'})."
                    " To fix it, try 'pulsetally simulate' by itself."
                )
            addresses = json.loads(line)
            yield bench.with_addresses(
                generator=addresses["generator"],
                oscilloscope=addresses["oscilloscope"],
                clock=addresses["control"],
            )
        finally:
            process.stdin.close()
            try:
                process.wait(timeout=_START_SECONDS)
            except subprocess.TimeoutExpired:
                process.kill()
