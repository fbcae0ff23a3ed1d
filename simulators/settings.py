"""Say what the simulated bench is made of."""

from dataclasses import dataclass, field

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.faults import Fault
from pulsetally.simulators.imperfections import DigitizerImperfections, SourceImperfections

# What is in the socket in place of the cell: by the name of the socket's state.
SOCKETS = ("cell", "open", "shorted")
TRANSPORTS = ("tcp", "serial", "hislip")


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulationSettings:
    """What the simulated bench is made of.

    family: the language of generator and oscilloscope, a key of FAMILIES.
    source, digitizer: what generator and oscilloscope can do, and how wrong they are.
    socket: what is in the cell's socket from the beginning, one of SOCKETS; a short in place
    of the cell, or nothing, whatever cell says.
    transport: how generator and oscilloscope are reached, one of TRANSPORTS; pseudo-
    terminals exist only where the system has them. The control port stays on plain TCP.
    faults: what goes wrong and when.
    seed: of everything random, at least 0. *_port: 0 for any free one.
    exchange_seconds: virtual time that each program message takes.
    real_time: virtual time follows the clock on the wall instead.
    until_stdin_closes: end when standard input does, besides SIGTERM and SIGINT.
    """

    cell: CellDescription = field(default_factory=CellDescription)
    wiring: Wiring = field(default_factory=Wiring)
    source: SourceImperfections = field(default_factory=SourceImperfections)
    digitizer: DigitizerImperfections = field(default_factory=DigitizerImperfections)
    family: str = "scpi99"
    socket: str = "cell"
    transport: str = "tcp"
    faults: tuple[Fault, ...] = ()
    seed: int = 1
    generator_port: int = 0
    oscilloscope_port: int = 0
    control_port: int = 0
    exchange_seconds: float = 1e-3
    real_time: bool = False
    until_stdin_closes: bool = False

    def __post_init__(self) -> None:
        if self.family not in FAMILIES:
            raise ValueError(f"family must be one of {', '.join(FAMILIES)}, not {self.family}")
        family_bits = FAMILIES[self.family].converter.bits
        if self.digitizer.bits is not None and self.digitizer.bits > family_bits:
            raise ValueError(
                f"the digitizer has {self.digitizer.bits} bits; {self.family} sends at most "
                f"{family_bits}"
            )
        for name in ("generator_port", "oscilloscope_port", "control_port"):
            if not 0 <= getattr(self, name) <= 65535:
                raise ValueError(f"{name} must be from 0 to 65535, not {getattr(self, name)}")
        if self.socket not in SOCKETS:
            raise ValueError(f"socket must be one of {', '.join(SOCKETS)}, not {self.socket}")
        if self.transport not in TRANSPORTS:
            raise ValueError(
                f"transport must be one of {', '.join(TRANSPORTS)}, not {self.transport}"
            )
        if self.transport == "serial" and (self.generator_port or self.oscilloscope_port):
            raise ValueError("generator_port and oscilloscope_port are of no use with serial")
        if self.seed < 0:
            raise ValueError(f"seed must be 0 or more, not {self.seed}")
        if not 0 <= self.exchange_seconds <= 3600:
            raise ValueError(
                f"exchange_seconds must be from 0 to 3600 s, not {self.exchange_seconds}"
            )
