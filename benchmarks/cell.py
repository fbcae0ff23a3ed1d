"""How long simulated cells take: one against a general-purpose integrator, and whole lots.

    python benchmarks/cell.py [--json] [--most-cells 10000] [--repeats 3]

One default cell, and lots of 100, 1,000 and 10,000 drawn ones, go through a preset (-5 V for
2 ms) and twelve pulses (4 V for 100 us). speedup_vs_lsoda is the time of scipy's LSODA
(relative tolerance 1e-6, restarted at each kink of the drive) over the table's, both single.
lot_*_s is the wall time of a lot on all cores, peak_mb the peak resident memory of the whole
run. --most-cells leaves out larger lots (their keys are then missing): on two cores that
others use too the largest takes most of a minute.
"""

import argparse
import json
import resource
import statistics
import time
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.lot import draw_cells, run_lot
from pulsetally.simulators.table import Table

LOTS = (100, 1_000, 10_000)
CELL, WIRING = CellDescription(), Wiring()


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


def measure(repeats: int, most_cells: int) -> dict[str, float]:
    """Run everything; return the numbers."""
    times: dict[str, list[float]] = {"table": [], "lsoda": []}
    ends = {}
    for _ in range(repeats):
        for name, run in (("table", by_table), ("lsoda", by_lsoda)):
            began = time.perf_counter()
            ends[name] = run()
            times[name].append(time.perf_counter() - began)
    off_volts = float(np.abs(np.subtract(ends["table"], ends["lsoda"])).max())
    if off_volts > 1e-3:
        raise SystemExit(f"the two integrations differ by {off_volts} V: nothing to compare")
    numbers = {
        "speedup_vs_lsoda": statistics.median(times["lsoda"]) / statistics.median(times["table"])
    }
    for count in LOTS:
        if count > most_cells:
            continue
        cells = draw_cells(CELL, count, relative_spread=0.05, seed=1)
        began = time.perf_counter()
        run_lot(cells, WIRING, PULSES)
        numbers[f"lot_{count}_s"] = time.perf_counter() - began
    numbers["peak_mb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return numbers


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="print one flat object")
    parser.add_argument("--repeats", type=int, default=3, help="of the single cell")
    parser.add_argument("--most-cells", type=int, default=LOTS[-1], help="largest lot to run")
    given = parser.parse_args()
    numbers = measure(given.repeats, given.most_cells)
    if given.json:
        print(json.dumps({name: round(value, 3) for name, value in numbers.items()}))
        return
    for name, value in numbers.items():
        print(f"{name:<18} {value:10.3f}")


if __name__ == "__main__":
    main()
