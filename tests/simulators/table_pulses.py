"""Pulses of the default recipe on a simulated table."""

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import Table


def connected(cell: CellDescription, wiring: Wiring | None = None, *, seed: int = 1) -> Table:
    table = Table(cell, wiring or Wiring(), seed=seed)
    table.connect(True)
    return table


def pulse(table: Table, volts: float, seconds: float, *, rest_seconds: float = 1e-3) -> float:
    """Play one pulse and rest after it; return the end voltage, V."""
    train = PulseTrain(
        level_volts=volts,
        width_seconds=seconds,
        period_seconds=seconds + rest_seconds,
        start_seconds=table.now,
    )
    table.play(train)
    table.advance(seconds)
    end_volts = table.node_volts
    table.advance(rest_seconds)
    return end_volts


def preset(table: Table, *, volts: float = -5.0) -> None:
    pulse(table, volts, 2e-3)


def up(table: Table) -> float:
    return pulse(table, 4.0, 100e-6)
