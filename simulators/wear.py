"""What time, use and temperature do to a cell: the laws and their settings.

All are options of a CellDescription, each off unless given. Each law is a closed form; what
a cell has gone through is kept in pulsetally.simulators.ageing.
"""

import math
from dataclasses import dataclass
from typing import Literal

from pulsetally.simulators.ranges import Ranges, check_ranges

BOLTZMANN_EV_PER_KELVIN = 8.617333262e-5

# By the names of the classes below.
RANGES: dict[str, Ranges] = {
    "Incubation": {"seconds": (1e-15, 1e12), "threshold_volts": (1e-9, 1e4)},
    "ImprintGrowth": {
        "volts_per_decade": (1e-12, 1e3),
        "onset_seconds": (1e-15, 1e15),
        "activation_ev": (0.0, 10.0),
    },
    "Fatigue": {
        "scale_cycles": (1e-6, 1e30),
        "exponent": (0.05, 20.0),
        "recovery_volts": (1e-9, math.inf),
    },
    "Retention": {
        "loss_per_decade": (1e-12, 10.0),
        "onset_seconds": (1e-15, 1e15),
        "exponent": (0.05, 20.0),
        "rest_volts": (1e-9, 1e4),
        "activation_ev": (0.0, 10.0),
    },
    "Thermal": {
        "kelvin": (1e-3, 1e4),
        "reference_kelvin": (1.0, 1e4),
        "activation_per_kelvin": (-10.0, 10.0),
    },
    "Breakdown": {
        "scale_cycles": (1e-6, 1e30),
        "shape": (0.05, 100.0),
        "short_ohms": (1e-3, 1e12),
    },
}
# Far beyond any process that somebody waits for.
_MOST_EXPONENT = 200.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Incubation:
    """Nothing switches before the voltage has stayed up (or down) for a while, in each pulse.

    A. Grigoriev et al., Phys. Rev. B 80, 014110 (2009): 50 ns pulses never add up in a
    film that microsecond pulses switch step by step.
    seconds: how long the cell's voltage, less the imprint voltage, must stay beyond
    threshold_volts with one sign before anything switches to that side. It starts again
    once the voltage has come back below 0.9 of threshold_volts.
    """

    seconds: float
    threshold_volts: float = 0.2

    def __post_init__(self) -> None:
        _check_above_zero(self, "seconds", "threshold_volts")
        check_ranges(self, RANGES["Incubation"])


@dataclass(frozen=True, slots=True, kw_only=True)
class ImprintGrowth:
    """The imprint voltage moves so that the held state becomes harder to leave.

    A state held from the beginning shifts it by volts_per_decade * log10(1 + t/onset_seconds):
    below imprint_volts for up, above it for down.
    activation_ev: of its acceleration by temperature, eV; acts with a Thermal only.
    """

    volts_per_decade: float
    onset_seconds: float = 1.0
    activation_ev: float = 0.0

    def __post_init__(self) -> None:
        _check_above_zero(self, "volts_per_decade", "onset_seconds")
        _check_not_negative(self, "activation_ev")
        check_ranges(self, RANGES["ImprintGrowth"])

    def shift_volts(self, held_seconds: float) -> float:
        """Return how far a state held this long has moved the imprint voltage, V."""
        return self.volts_per_decade * math.log10(1 + held_seconds / self.onset_seconds)


@dataclass(frozen=True, slots=True, kw_only=True)
class Fatigue:
    """Remanent polarization falls as exp(-(N/scale_cycles)^exponent) with N switching cycles.

    What is lost is pinned: it neither switches nor counts as polarization.
    recovered_share: part of the loss, 0 to 1, that each drive of the cell to
    -recovery_volts or below brings back (a strong preset; Moazzami, Hu and Shepherd,
    IEDM 1990, p. 417: poling again at a higher field restores polarization).
    """

    scale_cycles: float = 1e10
    exponent: float = 0.3
    recovered_share: float = 0.0
    recovery_volts: float = math.inf

    def __post_init__(self) -> None:
        _check_above_zero(self, "scale_cycles", "exponent")
        if not 0 <= self.recovered_share <= 1:
            raise ValueError(f"recovered_share is {self.recovered_share}; it must be from 0 to 1")
        if not self.recovery_volts > 0:
            raise ValueError(f"recovery_volts is {self.recovery_volts}; it must be above 0")
        check_ranges(self, RANGES["Fatigue"])

    def kept(self, cycles: float) -> float:
        """Return the part of the remanent polarization left after this many cycles."""
        return math.exp(-_power(cycles / self.scale_cycles, self.exponent))

    def cycles_at(self, kept: float) -> float:
        """Return the cycles after which this part, above 0 to 1, is left."""
        return float(self.scale_cycles * (-math.log(kept)) ** (1 / self.exponent))

    def recovered(self, cycles: float) -> float:
        """Return the number of cycles that tells the wear after one strong preset."""
        # Not by way of what is kept: of a small loss, that leaves nothing.
        loss = (self.recovered_share - 1) * math.expm1(
            -_power(cycles / self.scale_cycles, self.exponent)
        )
        if loss >= 1:
            return cycles
        return float(self.scale_cycles * (-math.log1p(-loss)) ** (1 / self.exponent))


@dataclass(frozen=True, slots=True, kw_only=True)
class Retention:
    """The up (or down) state is lost with time at rest.

    law: "log time", P = P_0 (1 - loss_per_decade log10(t/onset_seconds)) from onset_seconds
    on, or "stretched", P = P_0 exp(-(t/onset_seconds)^exponent); never below 0. That is
    the polarization of a cell wholly in the state; of a partly switched one, every region
    loses the same part of what it has in the state.
    At rest is a cell within rest_volts of 0 V. A voltage beyond ends the rest, and t starts
    again; what is lost stays lost until it is switched back.
    side: 1 where up is lost, -1 for down.
    activation_ev: of its acceleration by temperature, eV; acts with a Thermal only.
    """

    law: Literal["log time", "stretched"] = "log time"
    loss_per_decade: float = 0.02
    onset_seconds: float = 1.0
    exponent: float = 0.3
    side: Literal[1, -1] = 1
    rest_volts: float = 0.5
    activation_ev: float = 0.0

    def __post_init__(self) -> None:
        if self.law not in ("log time", "stretched"):
            raise ValueError(f"law is {self.law}; it must be 'log time' or 'stretched'")
        if self.side not in (1, -1):
            raise ValueError(f"side is {self.side}; it must be 1 or -1")
        _check_above_zero(self, "loss_per_decade", "onset_seconds", "exponent", "rest_volts")
        _check_not_negative(self, "activation_ev")
        check_ranges(self, RANGES["Retention"])

    def kept(self, rest_seconds: float) -> float:
        """Return the polarization of a cell wholly in the state, relative to the start."""
        lapse = rest_seconds / self.onset_seconds
        if self.law == "stretched":
            return math.exp(-_power(lapse, self.exponent))
        return max(0.0, 1 - self.loss_per_decade * math.log10(lapse)) if lapse > 1 else 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Thermal:
    """What the cell's temperature changes; the wiring stays at room temperature.

    kelvin: at the start. reference_kelvin: where all other settings hold.
    activation_per_kelvin: activation voltages are multiplied by
    1 + activation_per_kelvin (T - reference), but never by less than 0.1.
    """

    kelvin: float = 298.15
    reference_kelvin: float = 298.15
    activation_per_kelvin: float = -2e-3

    def __post_init__(self) -> None:
        _check_above_zero(self, "kelvin", "reference_kelvin")
        if not math.isfinite(self.activation_per_kelvin):
            raise ValueError(
                f"activation_per_kelvin is {self.activation_per_kelvin}; it must be finite"
            )
        check_ranges(self, RANGES["Thermal"])

    def activation_factor(self, kelvin: float) -> float:
        """Return by what the activation voltages are multiplied at a temperature."""
        return max(0.1, 1 + self.activation_per_kelvin * (kelvin - self.reference_kelvin))

    def acceleration(self, activation_ev: float, kelvin: float) -> float:
        """Return how much faster than at the reference a process runs (Arrhenius)."""
        barrier_kelvin = activation_ev / BOLTZMANN_EV_PER_KELVIN
        exponent = barrier_kelvin / self.reference_kelvin - barrier_kelvin / kelvin
        return math.exp(min(exponent, _MOST_EXPONENT))


@dataclass(frozen=True, slots=True, kw_only=True)
class Breakdown:
    """After a number of cycles, drawn once from a Weibull distribution, the cell is a short.

    scale_cycles: 63.2 % of all cells are short after so many cycles. shape: exponent of the
    distribution. short_ohms: resistance of the short.
    """

    scale_cycles: float = 1e10
    shape: float = 2.0
    short_ohms: float = 50.0

    def __post_init__(self) -> None:
        _check_above_zero(self, "scale_cycles", "shape", "short_ohms")
        check_ranges(self, RANGES["Breakdown"])

    def cycles_at(self, survival: float) -> float:
        """Return the cycles after which this part of all cells, above 0 to 1, still lives."""
        return float(self.scale_cycles * (-math.log(survival)) ** (1 / self.shape))


Option = Incubation | ImprintGrowth | Fatigue | Retention | Thermal | Breakdown


def _power(base: float, exponent: float) -> float:
    """Return base (0 or more) to the exponent; inf where that is too large for a float."""
    try:
        return float(base**exponent)
    except OverflowError:
        return math.inf


def _check_above_zero(option: Option, *names: str) -> None:
    for name in names:
        if not 0 < getattr(option, name) < math.inf:
            raise ValueError(f"{name} is {getattr(option, name)}; it must be above 0")


def _check_not_negative(option: Option, *names: str) -> None:
    for name in names:
        if not 0 <= getattr(option, name) < math.inf:
            raise ValueError(f"{name} is {getattr(option, name)}; it must be 0 or more")
