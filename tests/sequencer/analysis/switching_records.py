"""Records of a simulated table for loops and pulses, and what an oscilloscope does to them."""

from dataclasses import dataclass, field
from functools import cache

import numpy as np

from pulsetally.sequencer.analysis.pulses import Samples
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import Table

SERIES_OHMS, PROBE_OHMS, PROBE_FARADS = 220e3, 10e6, 12e-12
# The pulse begins at 0 s in every record; a ramp's corner stays out of the rest.
BEFORE = -10e-6

Record = tuple[Samples, Samples, Samples]


@dataclass(slots=True)
class Trace:
    """Keep what the table shows."""

    stretches: list[Record] = field(default_factory=list)

    def saw(self, times: Samples, terminal_volts: Samples, node_volts: Samples) -> None:
        self.stretches.append((times.copy(), terminal_volts.copy(), node_volts.copy()))

    def record(self, begin: float, first: float, last: float, points: int) -> Record:
        """Sample evenly from first to last, seconds from begin."""
        times, source, node = (np.concatenate(each) for each in zip(*self.stretches, strict=True))
        wanted = np.linspace(first, last, points)
        seconds = times - begin
        return wanted, np.interp(wanted, seconds, source), np.interp(wanted, seconds, node)


@cache
def four_pulses(
    cell: CellDescription, wiring: Wiring | None = None, *, points: int = 6000
) -> list[Record]:
    """Preset by -5 V for 2 ms; record two such pulses up and two down, with 5 ms after each."""
    table = Table(cell, wiring or Wiring())
    table.connect(True)
    records = []
    for level in (-5.0, 5.0, 5.0, -5.0, -5.0):
        trace = Trace()
        table.observe(trace)
        begin = table.now + 1e-3
        train = PulseTrain(
            level_volts=level, width_seconds=2e-3, period_seconds=7e-3, start_seconds=begin
        )
        table.play(train)
        table.advance(8e-3)
        records.append(trace.record(begin, -0.9e-3, 6.9e-3, points))
    return records[1:]


@cache
def triangle(
    cell: CellDescription, *, volts: float = 5.0, seconds: float = 20e-3, points: int = 8000
) -> tuple[Record, list[float]]:
    """Record one triangle, with 2 ms before and 1 ms after.

    Return it with the node's voltages at which the table's own polarization crosses 0.
    """
    table = Table(cell, Wiring())
    table.connect(True)
    table.rest_at(-volts)
    table.advance(20e-3)
    trace = Trace()
    table.observe(trace)
    begin = table.now + 2e-3
    train = PulseTrain(
        base_volts=-volts,
        level_volts=volts,
        width_seconds=seconds / 2,
        leading_seconds=0.8 * seconds / 2,
        trailing_seconds=0.8 * seconds / 2,
        period_seconds=seconds + 2e-3,
        start_seconds=begin,
    )
    table.play(train)
    crossings = []
    before = table.polarization, table.node_volts
    while table.now < begin + seconds + 1e-3:
        table.advance(20e-6)
        after = table.polarization, table.node_volts
        if before[0] * after[0] < 0:
            share = before[0] / (before[0] - after[0])
            crossings.append(before[1] + share * (after[1] - before[1]))
        before = after
    return trace.record(begin, -1.9e-3, seconds + 0.9e-3, points), crossings


def seen_by(
    record: Record,
    random: np.random.Generator,
    *,
    noise: float = 0.0,
    step: float = 0.0,
    offsets: tuple[float, float] = (0.0, 0.0),
) -> Record:
    """Add each channel's offset and noise, volts, and round to the digitizer's step."""
    times, *channels = record
    seen = []
    for volts, offset in zip(channels, offsets, strict=True):
        exact = volts + offset + noise * random.standard_normal(volts.size)
        seen.append(step * np.round(exact / step) if step else exact)
    return times, seen[0], seen[1]
