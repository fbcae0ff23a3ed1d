"""A ferroelectric capacitor as a set of regions that switch at their own rates.

Merz's law (W. J. Merz, Phys. Rev. 95, 690 (1954)) gives each region's rate; a spread of
activation voltages over the regions is the inhomogeneous-field picture of
nucleation-limited switching.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.ranges import Ranges, check_ranges
from pulsetally.simulators.wear import (
    Breakdown,
    Fatigue,
    ImprintGrowth,
    Incubation,
    Retention,
    Thermal,
)

FARADS_PER_METRE = 8.8541878128e-12

# With this many domains the full count of the default cell, counted with the default
# recipe (4 V for 100 us), scatters by 0.250 +- 0.007 pulse (standard deviation of 700 rounds).
DEFAULT_DOMAINS = 168

# A slip in a file should be told, and not fill the memory or the integers of a dealt hand.
MOST_REGIONS = 100_000
MOST_DOMAINS = 10**15

RANGES: Ranges = {
    "area": (1e-20, 1.0),
    "thickness": (1e-10, 0.01),
    "relative_permittivity": (0.1, 1e7),
    "remanent_polarization": (0.0, 100.0),
    "activation_volts": (0.5, 1e6),
    "activation_spread": (0.0, 1e6),
    "attempt_seconds": (1e-15, 1e6),
    "leak_ohms": (1e-3, math.inf),
    "imprint_volts": (-1e3, 1e3),
}

# A normal distribution has no lower end: activation voltages stop at this part of their
# mean, so that the law stays a barrier for every region.
LEAST_ACTIVATION_SHARE = 0.05
LEAST_ACTIVATION_VOLTS = 0.5

# A cell counts as fully down below this up fraction, and as used again above the other.
FULLY_DOWN_FRACTION = 1e-4
USED_FRACTION = 1e-3

# Nothing switches closer to the imprint voltage than this; it only keeps a/|v| finite.
LEAST_DRIVING_VOLTS = 1e-9

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class CellDescription:
    """What a cell is made of.

    area: electrode area, m2. thickness: of the film, m.
    remanent_polarization: C/m2 (1 uC/cm2 is 0.01 C/m2).
    relative_permittivity: of the film without switching.
    activation_volts, activation_spread: mean and standard deviation of the regions'
    activation voltages, V; a normal distribution cut off at 5 % of its mean;
    the mean is at least 0.5 V (a lower barrier holds no polarization at microvolts, and
    the solver would have to follow it there).
    alpha: exponent of the activation law, 0.5 to 5 (far below, hardly a voltage stops switching).
    attempt_seconds: switching time at infinite voltage, s.
    regions: how many, 1 to 100 000.
    leak_ohms: resistance across the film; inf for none.
    imprint_volts: voltage at which neither direction is driven, V.
    domains: finite number of domains dealt over the regions anew after each full preset;
    None for infinitely many (no scatter).
    incubation, imprint_growth, fatigue, retention, thermal, breakdown: what else happens to
    the cell; None where it does not.
    """

    area: float = 1e-8
    thickness: float = 150e-9
    remanent_polarization: float = 0.25
    relative_permittivity: float = 500.0
    activation_volts: float = 25.0
    activation_spread: float = 5.0
    alpha: float = 1.0
    attempt_seconds: float = 2e-9
    regions: int = 64
    leak_ohms: float = math.inf
    imprint_volts: float = 0.0
    domains: int | None = None
    incubation: Incubation | None = None
    imprint_growth: ImprintGrowth | None = None
    fatigue: Fatigue | None = None
    retention: Retention | None = None
    thermal: Thermal | None = None
    breakdown: Breakdown | None = None

    def __post_init__(self) -> None:
        for name in (
            "area",
            "thickness",
            "relative_permittivity",
            "attempt_seconds",
        ):
            if not 0 < getattr(self, name) < math.inf:
                raise ValueError(f"{name} is {getattr(self, name)}; it must be above 0")
        for name in ("remanent_polarization", "activation_spread"):
            if not 0 <= getattr(self, name) < math.inf:
                raise ValueError(f"{name} is {getattr(self, name)}; it must be 0 or more")
        if not LEAST_ACTIVATION_VOLTS <= self.activation_volts < math.inf:
            raise ValueError(
                f"activation_volts is {self.activation_volts}; "
                f"it must be at least {LEAST_ACTIVATION_VOLTS}"
            )
        if not 0.5 <= self.alpha <= 5:
            raise ValueError(f"alpha is {self.alpha}; it must be from 0.5 to 5")
        if not 1 <= self.regions <= MOST_REGIONS:
            raise ValueError(f"regions is {self.regions}; it must be from 1 to {MOST_REGIONS}")
        if not self.leak_ohms > 0:
            raise ValueError(f"leak_ohms is {self.leak_ohms}; it must be above 0")
        if not math.isfinite(self.imprint_volts):
            raise ValueError(f"imprint_volts is {self.imprint_volts}; it must be finite")
        check_ranges(self, RANGES)
        if self.domains is not None and not 1 <= self.domains <= MOST_DOMAINS:
            raise ValueError(f"domains is {self.domains}; it must be from 1 to {MOST_DOMAINS:.0e}")

    @property
    def farads(self) -> float:
        """Capacitance without switching, F."""
        return FARADS_PER_METRE * self.relative_permittivity * self.area / self.thickness

    @property
    def switchable_coulombs(self) -> float:
        """Charge of a full reversal, 2 P_r A, C."""
        return 2 * self.remanent_polarization * self.area

    def activations(self) -> Array:
        """Return each region's activation voltage, V: mid-probability quantiles, ascending."""
        mean = self.activation_volts
        if self.activation_spread == 0:
            return np.full(self.regions, mean)
        normal = NormalDist(mean, self.activation_spread)
        quantiles = [normal.inv_cdf((i + 0.5) / self.regions) for i in range(self.regions)]
        guarded: Array = np.maximum(np.array(quantiles), LEAST_ACTIVATION_SHARE * mean)
        return guarded


class SwitchingLaw(NamedTuple):
    """The activation law of all regions, as plain numbers.

    barriers: activation voltages to the power alpha, V^alpha, ascending.
    """

    barriers: Array
    alpha: float
    attempts_per_second: float


def rates_and_slopes(law: SwitchingLaw, driving_volts: Sequence[float]) -> tuple[Array, Array]:
    """Evaluate the activation law at distances from the imprint voltage, V.

    At or below 0 nothing switches. Return rates 1/tau (1/s) and their derivatives
    (1/(s V)): a row for each distance, a column for each region.
    """
    inverses = np.array([[1 / max(volts, LEAST_DRIVING_VOLTS)] for volts in driving_volts])
    powers = inverses if law.alpha == 1 else inverses**law.alpha
    slopes = law.barriers * -powers
    rates = np.exp(slopes)
    rates *= law.attempts_per_second
    slopes *= rates
    slopes *= inverses * -law.alpha
    return rates, slopes


def softest_rate(law: SwitchingLaw, driving_volts: float) -> float:
    """Return the largest rate that any region has this far (V) from imprint, 1/s."""
    distance = max(driving_volts, LEAST_DRIVING_VOLTS)
    return law.attempts_per_second * math.exp(-law.barriers[0] * (1 / distance) ** law.alpha)


class Cell:
    """The state of one cell: which part of each region is up.

    up: part of each region that is up, 0 to 1. weights: share of each region, sum 1.
    frozen: nothing switches now, whatever the voltage.
    imprint_volts: at which neither direction is driven, V. remanent_polarization: C/m2, and
    switchable_coulombs, C: of what is not worn out. They begin as described.
    law: of its regions now. used: whether it has been up since domains were last dealt.
    """

    def __init__(self, description: CellDescription, *, seed: int) -> None:
        self.description = description
        self.frozen = False
        self.imprint_volts = description.imprint_volts
        self.remanent_polarization = description.remanent_polarization
        self.switchable_coulombs = description.switchable_coulombs
        self.used = False
        self.scale_activations(1.0)
        self.up: Array = np.zeros(description.regions)
        self.weights: Array = np.full(description.regions, 1 / description.regions)
        self._random = np.random.default_rng(seed)
        self._deal()

    @property
    def up_fraction(self) -> float:
        """Part of the cell that is up, 0 to 1."""
        return float(self.weights @ self.up)

    @property
    def polarization(self) -> float:
        """Polarization, C/m2; -P_r when fully down."""
        return self.remanent_polarization * (2 * self.up_fraction - 1)

    def rates(self, driving_volts: float) -> Array:
        """Return each region's switching rate, 1/s, this far (V) from the imprint voltage."""
        rates: Array = rates_and_slopes(self.law, (driving_volts,))[0][0]
        return rates

    def lose(self, side: int, kept: float) -> None:
        """Keep this part of what each region has up (side 1) or down (side -1)."""
        self.up = self.up * kept if side > 0 else 1 - (1 - self.up) * kept

    def weaken(self, kept: float) -> None:
        """Pin all but this part of the described polarization, whichever way it points."""
        self.remanent_polarization = kept * self.description.remanent_polarization
        self.switchable_coulombs = kept * self.description.switchable_coulombs

    def scale_activations(self, factor: float) -> None:
        """Multiply the described activation voltages by a factor."""
        self.activations = self.description.activations() * factor
        alpha = self.description.alpha
        self.law = SwitchingLaw(
            self.activations**alpha, alpha, 1 / self.description.attempt_seconds
        )

    def settle(self) -> bool:
        """Deal new domains when the cell has become fully down; tell whether that was so."""
        if self.description.domains is None:
            return False
        fraction = self.up_fraction
        if fraction > USED_FRACTION:
            self.used = True
        if not self.used or fraction >= FULLY_DOWN_FRACTION:
            return False
        self.used = False
        # What little is still up is spread evenly: the polarization must not jump
        # when the weights change, or charge would appear from nowhere.
        self.up = np.full_like(self.up, fraction)
        self._deal()
        return True

    def _deal(self) -> None:
        domains, regions = self.description.domains, self.description.regions
        if domains is not None:
            dealt = self._random.multinomial(domains, np.full(regions, 1 / regions))
            self.weights = dealt / domains
