"""Start the simulated bench for a rehearsal and hand out its addresses.

The simulated bench is another process, reached by address like a real table. It lives in a
session of its own, so that Ctrl-C in the terminal reaches the run and not the instruments, and
it ends when its standard input closes, so that it never outlives a program that was killed.
"""

import contextlib
import json
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from importlib.resources import files
from typing import IO, Any

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.numbers import NumberError, parse_whole
from pulsetally.sequencer.bench import Bench, BenchModel, parse_bench
from pulsetally.sequencer.quantities import (
    AREA,
    CAPACITANCE,
    CURRENT,
    LENGTH,
    RESISTANCE,
    VOLTAGE,
    format_quantity,
)

_STOP_SECONDS = 10.0
# The simulated bench's exit status for a table file with mistakes.
_WRONG_INPUT = 2
_NO_PROBE_OHMS = 1e15


class RehearsalError(PulsetallyError):
    """The simulated bench did not start."""


class TableRefused(RehearsalError):
    """The simulated bench can't be made as its table file says; the message has every mistake."""


def shipped_bench() -> Bench:
    """Return the bench that a rehearsal uses, before its instruments have addresses."""
    name = "simulated_bench.yaml"
    text = (files("pulsetally.recipes") / name).read_text(encoding="utf-8")
    return parse_bench(text, file=name)


def addressed_bench_text(
    generator: str,
    oscilloscope: str,
    clock: str | None,
    dialect: str = "scpi99",
    *,
    table: Mapping[str, Any] | None = None,
) -> str:
    """Write a bench file for running instruments: their addresses, and how they are wired.

    clock: the address of a simulated bench's own time; None where it is the wall's.
    table: what the simulated bench announces of itself; None for the shipped bench's
    wiring and cell. Limits and channels are always those of the shipped bench.
    """
    shipped = shipped_bench().model
    facts = _facts(shipped) if table is None else table
    limits = shipped.limits
    lines = [
        f"bench: {_quoted(facts['title'] or shipped.bench)}",
        "generator:",
        f"  address: {generator}",
        f"  dialect: {dialect}",
        f"  channel: {shipped.generator.channel:g}",
        "  load: high-z",
        "oscilloscope:",
        f"  address: {oscilloscope}",
        f"  dialect: {dialect}",
        f"  source channel: {shipped.oscilloscope.source_channel:g}",
        f"  node channel: {shipped.oscilloscope.node_channel:g}",
    ]
    if clock is not None:
        lines.append(f"clock: {clock}  # only a simulated bench has one")
    lines += [
        *_wiring_lines(facts["wiring"]),
        "limits:",
        f"  source: {format_quantity(limits.source, VOLTAGE)}",
        f"  node: {format_quantity(limits.node, VOLTAGE)}",
        "cell:",
        f"  area: {format_quantity(facts['cell']['area'], AREA)}",
        f"  thickness: {format_quantity(facts['cell']['thickness'], LENGTH)}",
        f"  relative permittivity: {facts['cell']['relative_permittivity']!r}",
    ]
    return "\n".join(lines) + "\n"


def _wiring_lines(wiring: Mapping[str, Any]) -> list[str]:
    diode, clamp = wiring["diode_saturation_amperes"], wiring["clamp_volts"]
    diode_text = clamp_text = "none"
    if diode is not None:
        current = format_quantity(diode, CURRENT)
        diode_text = f"{{saturation current: {current}, emission: {wiring['diode_emission']!r}}}"
    if clamp is not None:
        clamp_text = f"{{breakdown: {format_quantity(clamp, VOLTAGE)}}}"
    # A bench file has a probe: no probe at all is one that draws nothing.
    ohms = _NO_PROBE_OHMS if wiring["probe_ohms"] is None else wiring["probe_ohms"]
    return [
        "wiring:",
        f"  source resistance: {format_quantity(wiring['source_ohms'], RESISTANCE)}",
        f"  series resistance: {format_quantity(wiring['series_ohms'], RESISTANCE)}",
        f"  series diode: {diode_text}",
        f"  clamp: {clamp_text}",
        "  probe:",
        f"    resistance: {format_quantity(ohms, RESISTANCE)}",
        f"    capacitance: {format_quantity(wiring['probe_farads'], CAPACITANCE)}",
    ]


def _facts(shipped: BenchModel) -> dict[str, Any]:
    """Return what a bench file says, in the words in which a simulated bench announces it."""
    wiring, cell = shipped.wiring, shipped.cell
    diode, clamp = wiring.series_diode, wiring.clamp
    return {
        "title": shipped.bench,
        "wiring": {
            "source_ohms": wiring.source_resistance,
            "series_ohms": wiring.series_resistance,
            "diode_saturation_amperes": diode and diode.saturation_current,
            "diode_emission": diode and diode.emission,
            "clamp_volts": clamp and clamp.breakdown,
            "probe_ohms": wiring.probe.resistance,
            "probe_farads": wiring.probe.capacitance,
        },
        "cell": {
            "area": cell.area,
            "thickness": cell.thickness,
            "relative_permittivity": cell.relative_permittivity,
        },
    }


def _quoted(text: str) -> str:
    """Write a text as YAML, whatever is in it."""
    # Not as JSON, which splits what lies beyond 16 bits into two halves that YAML keeps.
    plain = (
        each if " " <= each <= "~" and each not in '"\\' else f"\\U{ord(each):08x}" for each in text
    )
    return f'"{"".join(plain)}"'


@contextmanager
def simulated_bench(bench: Bench | None, options: Sequence[str] = ()) -> Iterator[Bench]:
    """Start simulated instruments; give the bench with their addresses.

    bench: how they are wired; None for what they announce of themselves.
    Raises TableRefused for a table file with mistakes, RehearsalError for all other failures.
    """
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
                if _status(process) == _WRONG_INPUT:
                    raise TableRefused(_said(complaints))
                raise RehearsalError(_why_not(complaints))
            yield _announced(bench, json.loads(line))
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


def _status(process: subprocess.Popen[str]) -> int | None:
    """Return the exit status of a process that has closed its output; None if it won't end."""
    try:
        return process.wait(timeout=_STOP_SECONDS)
    except subprocess.TimeoutExpired:
        return None


def _announced(bench: Bench | None, announced: Mapping[str, Any]) -> Bench:
    generator, oscilloscope = announced["generator"], announced["oscilloscope"]
    table = announced["table"]
    clock = None if table["real_time"] else announced["control"]
    if bench is not None:
        return bench.with_addresses(generator=generator, oscilloscope=oscilloscope, clock=clock)
    text = addressed_bench_text(generator, oscilloscope, clock, table["family"], table=table)
    return parse_bench(text, file=f"the bench of {table['title']!r}")


def _said(complaints: IO[str]) -> str:
    complaints.seek(0)
    return complaints.read().strip()


def _why_not(complaints: IO[str]) -> str:
    said = _said(complaints).splitlines()
    why = said[-1] if said else "it said nothing"
    return f"the simulated bench did not start ({why}). To fix it, try 'pulsetally simulate'."


def faults_told(bench: Bench) -> str:
    """Say which of a simulated bench's faults happened; empty where it has none, or is gone."""
    if bench.model.clock is None:
        return ""
    try:
        with contextlib.closing(VisaLink(bench.model.clock)) as link:
            happened = parse_whole(link.ask(":FAULt:COUNt?"))
            pending = parse_whole(link.ask(":FAULt:PENDing?"))
    except (PulsetallyError, NumberError):
        return ""
    if not happened and not pending:
        return ""
    return f"Faults of the simulated bench: {happened} happened, {pending} did not come (yet)."
