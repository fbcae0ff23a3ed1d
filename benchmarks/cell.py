"""How long simulated cells take: one against a general-purpose integrator, on sockets, in lots.

    python benchmarks/cell.py [--json] [--most-cells 10000] [--repeats 5] [--pulses 200]

Everything is done compiled by numba, where that is installed, and in numpy (the keys that end
in _numpy), in turns, several times; what is given is the median.

speedup_vs_lsoda: one default cell goes through a preset (-5 V for 2 ms) and twelve pulses (4 V
for 100 us); the time of scipy's LSODA (relative tolerance 1e-6, restarted at each kink of the
drive) over the table's, both single.
pulses_per_second: the simulated bench in a process of its own and a bare socket client, set up
once; then for each pulse arm, poll, fire, poll, and fetch two channels of 2000 points.
lot_*_s: 100, 1,000 and 10,000 drawn cells through the same pulses, on all cores, wall time of
one run. peak_mb: peak resident memory of the whole run. load_s: what it takes to load what is
compiled, or to compile it when it is not yet kept. pays_from_pulses: how many pulses over the
socket win that back.
"""

import argparse
import json
import os
import resource
import socket
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from functools import partial

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.compiled import use_compiled, use_numpy
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.lot import draw_cells, run_lot
from pulsetally.simulators.table import Table

LOTS = (100, 1_000, 10_000)
CELL, WIRING = CellDescription(), Wiring()
POINTS = 2000
# Bits of the operation condition register in SCPI-99: waiting for a trigger; measuring too.
ARMED, BUSY = 32, 48


def pulse(volts: float, seconds: float) -> PulseTrain:
    return PulseTrain(level_volts=volts, width_seconds=seconds, period_seconds=seconds + 1e-3)


PULSES = [pulse(-5.0, 2e-3)] + 12 * [pulse(4.0, 100e-6)]


def by_table() -> list[float]:
    """Return the end voltages of one default cell."""
    table = Table(CELL, WIRING)
    table.connect(True)
    ends = []
    for train in PULSES:
        table.play(replace(train, start_seconds=table.now))
        table.advance(train.width_seconds)
        ends.append(table.node_volts)
        table.advance(train.period_seconds - train.width_seconds)
    return ends


def by_lsoda() -> list[float]:
    """Return the same from the equations in plain form."""
    activations = CELL.activations()
    farads = Circuit(CELL, WIRING).farads
    state = np.zeros(1 + CELL.regions)
    ends = []
    for train in PULSES:
        single, at_seconds = replace(train, start_seconds=0.0), 0.0
        while at_seconds < train.period_seconds:
            stretch = single.stretch_at(at_seconds)
            seconds = min(stretch.end_seconds, train.period_seconds) - at_seconds
            begin = stretch.begin_volts
            slope = (stretch.end_volts - begin) / seconds

            def derivative(
                passed: float,
                now: NDArray[np.float64],
                begin: float = begin,
                slope: float = slope,
            ) -> NDArray[np.float64]:
                volts, up = float(now[0]), now[1:]
                rates = np.exp(-activations / max(abs(volts), 1e-9)) / CELL.attempt_seconds
                change = (1 - up) * rates if volts > 0 else -up * rates
                amperes = (begin + slope * passed - volts) / WIRING.branch_ohms
                amperes -= volts / WIRING.probe_ohms
                amperes -= CELL.switchable_coulombs * float(change.mean())
                return np.concatenate(([amperes / farads], change))

            found = solve_ivp(derivative, (0, seconds), state, method="LSODA", rtol=1e-6, atol=1e-8)
            state = found.y[:, -1]
            if stretch.end_volts == train.level_volts:
                top_volts = float(state[0])
            at_seconds += seconds
        ends.append(top_volts)
    return ends


class Instrument:
    """One end of a bare socket."""

    def __init__(self, address: str) -> None:
        _, host, port, _ = address.split("::")
        self._socket = socket.create_connection((host, int(port)), timeout=60)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._file = self._socket.makefile("rb")

    def tell(self, message: str) -> None:
        self._socket.sendall(message.encode() + b"\n")

    def ask(self, message: str) -> bytes:
        self.tell(message)
        return self._file.readline()

    def fetch(self, message: str) -> bytes:
        """Ask for a block of definite length."""
        self.tell(message)
        digits = int(self._file.read(2)[1:])
        block = self._file.read(int(self._file.read(digits)))
        self._file.readline()
        return block

    def close(self) -> None:
        self._file.close()
        self._socket.close()


@contextmanager
def bench(jit: str) -> Iterator[tuple[Instrument, Instrument]]:
    """Start a simulated bench; give its generator and its oscilloscope, set up."""
    with subprocess.Popen(
        [sys.executable, "-m", "pulsetally.simulators.simulate", "--json", "--until-stdin-closes"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, "PULSETALLY_JIT": jit},
    ) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        addresses = json.loads(process.stdout.readline())
        generator = Instrument(addresses["generator"])
        oscilloscope = Instrument(addresses["oscilloscope"])
        generator.tell("*RST;*CLS")
        generator.tell(":TRIG:SOUR BUS;:OUTP:LOAD INF;:SOUR:FUNC:SHAP PULS")
        generator.tell(":SOUR:VOLT:HIGH 4;LOW 0;:SOUR:PULS:PER 1.1E-3;WIDT 1E-4;COUN 1")
        generator.tell(":OUTP:STAT ON")
        oscilloscope.tell("*RST;*CLS")
        oscilloscope.tell(":FORM:DATA INT,16;:FORM:BORD NORM")
        for channel in "12":
            oscilloscope.tell(f":SENS{channel}:VOLT:DC:RANG:PTP 10;OFFS 2")
        oscilloscope.tell(f":SENS:SWE:POIN {POINTS};TINT 1E-7;OREF:LOC 0.1")
        oscilloscope.tell(":TRIG:SEQ:SOUR INT1;LEV 2;SLOP POS")
        for instrument in (generator, oscilloscope):
            error = instrument.ask(":SYST:ERR?")
            if not error.startswith((b"0", b"+0")):
                raise SystemExit(f"the set-up was refused: {error!r}")
        yield generator, oscilloscope
        generator.close()
        oscilloscope.close()
        process.stdin.close()


def fire(generator: Instrument, oscilloscope: Instrument) -> None:
    """Take one shot of one pulse."""
    oscilloscope.tell(":INIT:IMM")
    while not int(oscilloscope.ask(":STAT:OPER:COND?")) & ARMED:
        pass
    generator.tell(":INIT:IMM;*TRG")
    while int(oscilloscope.ask(":STAT:OPER:COND?")) & BUSY:
        pass
    for channel in (1, 2):
        if len(oscilloscope.fetch(f":TRAC:DATA? CHAN{channel}")) != 2 * POINTS:
            raise SystemExit("a record is not whole")


def preset(generator: Instrument, oscilloscope: Instrument) -> None:
    """Drive the cell down again, so that the pulses find something to switch."""
    generator.tell(":SOUR:VOLT:LOW -5;HIGH 0;:SOUR:PULS:POL INV;PER 4E-3;WIDT 2E-3")
    generator.tell(":INIT:IMM;*TRG")
    generator.ask("*OPC?")
    generator.tell(":SOUR:PULS:POL NORM;WIDT 1E-4;PER 1.1E-3;:SOUR:VOLT:HIGH 4;LOW 0")
    error = generator.ask(":SYST:ERR?")
    if not error.startswith((b"0", b"+0")):
        raise SystemExit(f"the preset was refused: {error!r}")


def timed(run: Callable[[], object]) -> float:
    began = time.perf_counter()
    run()
    return time.perf_counter() - began


def measure_one_cell(repeats: int, compiled: bool) -> dict[str, float]:
    """Time the table, both ways, beside LSODA."""
    times: dict[str, list[float]] = {"": [], "_numpy": [], "lsoda": []}
    ends = {}
    for _ in range(repeats):
        for name in times:
            if name == "" and compiled:
                use_compiled()
            else:
                use_numpy()
            run = by_lsoda if name == "lsoda" else by_table
            began = time.perf_counter()
            ends[name] = run()
            times[name].append(time.perf_counter() - began)
    off_volts = float(np.abs(np.subtract(ends[""], ends["lsoda"])).max())
    if off_volts > 1e-4:
        raise SystemExit(f"the two integrations differ by {off_volts} V: nothing to compare")
    middle = {name: statistics.median(each) for name, each in times.items()}
    return {f"speedup_vs_lsoda{name}": middle["lsoda"] / middle[name] for name in ("", "_numpy")}


def measure_sockets(repeats: int, pulses: int) -> dict[str, float]:
    """Time shots over sockets, both ways, with both benches running."""
    rates: dict[str, list[float]] = {"": [], "_numpy": []}
    with bench("1") as fast, bench("0") as slow:
        for _ in range(repeats):
            for name, (generator, oscilloscope) in (("", fast), ("_numpy", slow)):
                seconds = 0.0
                for index in range(pulses):
                    if index % 12 == 0:
                        preset(generator, oscilloscope)
                    seconds += timed(partial(fire, generator, oscilloscope))
                rates[name].append(pulses / seconds)
    return {f"pulses_per_second{name}": statistics.median(each) for name, each in rates.items()}


def measure_lots(most_cells: int) -> dict[str, float]:
    """Time lots, both ways."""
    numbers = {}
    for count in LOTS:
        if count > most_cells:
            continue
        cells = draw_cells(CELL, count, relative_spread=0.05, seed=1)
        for name, compiled in (("", None), ("_numpy", False)):
            numbers[f"lot_{count}_s{name}"] = timed(
                partial(run_lot, cells, WIRING, PULSES, compiled=compiled)
            )
    return numbers


def measure(repeats: int, most_cells: int, pulses: int) -> dict[str, float]:
    """Run everything; return the numbers."""
    began = time.perf_counter()
    compiled = use_compiled()
    numbers = {"load_s": time.perf_counter() - began} if compiled else {}
    numbers |= measure_one_cell(repeats, compiled)
    numbers |= measure_sockets(repeats, pulses)
    if compiled:
        saved = 1 / numbers["pulses_per_second_numpy"] - 1 / numbers["pulses_per_second"]
        numbers["pays_from_pulses"] = numbers["load_s"] / saved
    numbers |= measure_lots(most_cells)
    numbers["peak_mb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return numbers


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="print one flat object")
    parser.add_argument("--repeats", type=int, default=5, help="of the cell and of the sockets")
    parser.add_argument("--pulses", type=int, default=200, help="over the sockets, each time")
    parser.add_argument("--most-cells", type=int, default=LOTS[-1], help="largest lot to run")
    given = parser.parse_args()
    numbers = measure(given.repeats, given.most_cells, given.pulses)
    if given.json:
        print(json.dumps({name: round(value, 3) for name, value in numbers.items()}))
        return
    for name, value in numbers.items():
        print(f"{name:<24} {value:10.3f}")


if __name__ == "__main__":
    main()
