"""Start the simulated bench for a rehearsal and hand out its addresses.

The simulated bench is another process, reached by address like a real table. It lives in a
session of its own, so that Ctrl-C in the terminal reaches the run and not the instruments, and
it ends when its standard input closes, so that it never outlives a program that was killed.
"""

import json
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from importlib.resources import files
from typing import IO

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.sequencer.bench import Bench, parse_bench

_STOP_SECONDS = 10.0


class RehearsalError(PulsetallyError):
    """The simulated bench did not start."""


def shipped_bench() -> Bench:
    """Return the bench that a rehearsal uses, before its instruments have addresses."""
    name = "simulated_bench.yaml"
    text = (files("pulsetally.recipes") / name).read_text(encoding="utf-8")
    return parse_bench(text, file=name)


def addressed_bench_text(
    generator: str, oscilloscope: str, clock: str, dialect: str = "scpi99"
) -> str:
    """Write the shipped bench file anew, with addresses and dialect of running instruments."""
    bench = shipped_bench()
    text = bench.text.replace("dialect: scpi99", f"dialect: {dialect}")
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
    # A file and not a pipe: nobody reads it until the end, and a full pipe would stop the bench.
    with (
        tempfile.TemporaryFile("w+", encoding="utf-8", errors="replace") as complaints,
        subprocess.Popen(
            command,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=complaints,
            text=True,
            start_new_session=True,
        ) as process,
    ):
        keep_alive, announced = _pipes(process)
        try:
            line = announced.readline()
            if not line:
                raise RehearsalError(_why_not(complaints))
            addresses = json.loads(line)
            yield bench.with_addresses(
                generator=addresses["generator"],
                oscilloscope=addresses["oscilloscope"],
                clock=addresses["control"],
            )
        finally:
            keep_alive.close()
            try:
                process.wait(timeout=_STOP_SECONDS)
            except subprocess.TimeoutExpired:
                process.kill()


def _pipes(process: subprocess.Popen[str]) -> tuple[IO[str], IO[str]]:
    if process.stdin is None or process.stdout is None:
        raise RehearsalError("the simulated bench has no pipes. To fix it, report this.")
    return process.stdin, process.stdout


def _why_not(complaints: IO[str]) -> str:
    complaints.seek(0)
    said = complaints.read().strip().splitlines()
    why = said[-1] if said else "it said nothing"
    return f"the simulated bench did not start ({why}). To fix it, try 'pulsetally simulate'."
