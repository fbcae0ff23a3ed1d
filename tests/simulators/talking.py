"""Talk to a bench without sockets: bytes in, bytes out, and time that moves when told to."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.imperfections import DigitizerImperfections
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.simulate import Bench, SimulationSettings

# A cell that hardly switches is a linear capacitor, whose voltages have closed forms.
LINEAR = CellDescription(remanent_polarization=1e-9)
# Noise alone, so that means tell what the digitizer saw.
TRUE = DigitizerImperfections(offset_shares=(0.0, 0.0), bandwidth_hertz=math.inf)


class Line:
    """One connection to one instrument."""

    def __init__(self, device: ScpiDevice) -> None:
        self.device = device
        self._engine = ScpiEngine(device)

    def ask(self, text: str) -> bytes:
        return self._engine.receive(text.encode() + b"\n")

    def say(self, text: str) -> str:
        return self.ask(text).decode().removesuffix("\n")


class Talk:
    """A bench of one family, with a connection to each instrument."""

    def __init__(self, family: str) -> None:
        self.bench = Bench(SimulationSettings(cell=LINEAR, digitizer=TRUE, family=family, seed=7))
        self.generator = Line(self.bench.generator)
        self.oscilloscope = Line(self.bench.oscilloscope)

    def advance(self, seconds: float) -> None:
        self.bench.clock.advance(seconds)


@dataclass(frozen=True, kw_only=True)
class Setting:
    """A row of a family's description: pattern of the table, what is sent, what is read.

    answer: as text where it must be exactly this, as a number where it may be near.
    within: how near.
    """

    pattern: str
    send: str
    answer: str | float
    within: float = 0.0

    @property
    def query(self) -> str:
        return self.send.split(" ")[0] + "?"


def patterns_of(device: ScpiDevice) -> set[str]:
    """Return the patterns of an instrument's table but for the common commands."""
    return {command.pattern for command in device.commands if command.pattern[0] != "*"}


def block(answer: bytes, *, behind: bytes) -> bytes:
    """Return the payload of a definite block that is the whole of an answer."""
    assert answer[:1] == b"#"
    digits = int(answer[1:2])
    begin, length = 2 + digits, int(answer[2 : 2 + digits])
    assert answer[begin + length :] == behind
    return answer[begin : begin + length]


def falling_edge_seconds(times: NDArray[np.float64], volts: NDArray[np.float64]) -> float:
    """Return the instant of the only sample pair that falls through 2 V."""
    (index,) = np.flatnonzero((volts[:-1] > 2) & (volts[1:] <= 2))
    return float((times[index] + times[index + 1]) / 2)
