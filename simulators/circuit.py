"""The wiring between the generator and the cell, as currents at the cell's node.

C dv/dt = (e - v_diode - v)/(R_source + R_series) - A dP/dt
          - v/R_leak - v/R_probe - i_clamp(v)
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.ranges import Ranges, check_ranges

# k T/q at 27 degrees Celsius, from the 2019 SI constants.
BOLTZMANN_JOULES_PER_KELVIN = 1.380649e-23
ELEMENTARY_COULOMBS = 1.602176634e-19
ROOM_KELVIN = 300.15
THERMAL_VOLTS = BOLTZMANN_JOULES_PER_KELVIN * ROOM_KELVIN / ELEMENTARY_COULOMBS

# The clamp carries this current at its nominal voltage, and e times more for each
# further CLAMP_FOLD_VOLTS.
CLAMP_KNEE_AMPERES = 10e-6
CLAMP_FOLD_VOLTS = 0.025
# Beyond this many folds (10 uA times e^20 is 5 kA) the clamp goes on as a straight
# line: a solver's trial voltage must not overflow.
_MOST_CLAMP_FOLDS = 20.0

RANGES: Ranges = {
    "source_ohms": (0.0, 1e12),
    "series_ohms": (0.0, 1e12),
    "diode_saturation_amperes": (1e-30, 1.0),
    "diode_emission": (0.1, 100.0),
    "clamp_volts": (1e-3, 1e4),
    "probe_ohms": (1e-3, math.inf),
    "probe_farads": (0.0, 1.0),
}
# Of source and series resistance together: with less, the node would follow within no time.
LEAST_BRANCH_OHMS = 1e-3

# What is left of a node without cell and probe: its voltage must have something to be on.
STRAY_FARADS = 1e-13

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Wiring:
    """What lies between the generator's EMF and the cell, and across the cell.

    source_ohms, series_ohms: generator's output resistance and the resistor after it;
    together above 0.
    diode_saturation_amperes: of a series diode that conducts towards the cell; None for
    no diode. diode_emission: its emission coefficient.
    clamp_volts: node voltage, of either sign, at which a clamp carries 10 uA, above 0;
    None for no clamp.
    probe_ohms, probe_farads: the oscilloscope's probe across the cell; inf and 0 for none.
    """

    source_ohms: float = 50.0
    series_ohms: float = 220e3
    diode_saturation_amperes: float | None = None
    diode_emission: float = 1.0
    clamp_volts: float | None = None
    probe_ohms: float = 10e6
    probe_farads: float = 12e-12

    def __post_init__(self) -> None:
        for name in ("source_ohms", "series_ohms", "probe_farads"):
            if not 0 <= getattr(self, name) < math.inf:
                raise ValueError(f"{name} is {getattr(self, name)}; it must be 0 or more")
        if self.branch_ohms == 0:
            raise ValueError("source_ohms and series_ohms are both 0; one must be above 0")
        if not self.probe_ohms > 0:
            raise ValueError(f"probe_ohms is {self.probe_ohms}; it must be above 0")
        for name in ("diode_saturation_amperes", "diode_emission", "clamp_volts"):
            value = getattr(self, name)
            if value is not None and not 0 < value < math.inf:
                raise ValueError(f"{name} is {value}; it must be above 0")
        check_ranges(self, RANGES)
        if self.branch_ohms < LEAST_BRANCH_OHMS:
            raise ValueError(
                f"source_ohms and series_ohms together are {self.branch_ohms}; "
                f"they must be at least {LEAST_BRANCH_OHMS}"
            )

    @property
    def branch_ohms(self) -> float:
        """Resistance between the EMF and the node, without the diode."""
        return self.source_ohms + self.series_ohms


class Circuit:
    """The node of one cell in one wiring: its capacitance and the currents into it.

    farads: film and probe. relay_on: whether the source branch is connected.
    cell_on: whether the cell is.
    """

    def __init__(self, cell: CellDescription, wiring: Wiring) -> None:
        self.wiring = wiring
        self.farads = cell.farads + wiring.probe_farads
        self.relay_on = False
        self.cell_on = True
        self._shunt_siemens = 1 / cell.leak_ohms + 1 / wiring.probe_ohms

    def short_through(self, ohms: float) -> None:
        """Put a resistance across the cell, for good; the node sees it with the cell."""
        if self.cell_on:
            self._shunt_siemens += 1 / ohms

    def disconnect_cell(self) -> None:
        """Take the cell, and what lies across it, off the node for good; the probe stays."""
        self.cell_on = False
        self.farads = max(self.wiring.probe_farads, STRAY_FARADS)
        self._shunt_siemens = 1 / self.wiring.probe_ohms

    @property
    def is_linear(self) -> bool:
        """Whether the node follows the EMF through resistances alone."""
        diode = self.relay_on and self.wiring.diode_saturation_amperes is not None
        return not diode and self.wiring.clamp_volts is None

    @property
    def node_siemens(self) -> float:
        """Conductance that loads the node when the circuit is linear, S."""
        return self._shunt_siemens + (1 / self.wiring.branch_ohms if self.relay_on else 0.0)

    @property
    def gain(self) -> float:
        """Part of a constant EMF that a linear circuit's node settles to."""
        return 1 / (self.wiring.branch_ohms * self.node_siemens) if self.relay_on else 0.0

    def lag_volts(self, moved_volts: float, before_volts: float, period_seconds: float) -> float:
        """Return how far the node is from where it repeats in a train of this period, V.

        moved_volts: by how much it moved in the last period; before_volts: in the one before.
        """
        if self.relay_on and self.wiring.diode_saturation_amperes is not None:
            # What is left is a geometric series, as far as can be told.
            ratio = moved_volts / before_volts if before_volts else 0.0
            return abs(moved_volts) / (1 - ratio) if 0 < ratio < 1 else abs(moved_volts)
        return abs(moved_volts) * (1 + self.farads / (self.node_siemens * period_seconds))

    @property
    def branches(self) -> "Branches":
        """What carries current into the node now, as plain numbers."""
        wiring = self.wiring
        return Branches(
            relay_on=self.relay_on,
            branch_ohms=wiring.branch_ohms,
            shunt_siemens=self._shunt_siemens,
            saturation_amperes=wiring.diode_saturation_amperes or 0.0,
            fold_volts=wiring.diode_emission * THERMAL_VOLTS,
            clamp_volts=math.inf if wiring.clamp_volts is None else wiring.clamp_volts,
        )

    def node_current(self, emf_volts: float, node_volts: float) -> tuple[float, float, float]:
        """Return the current into the node's capacitance and its two slopes, as node_current."""
        return node_current(self.branches, emf_volts, node_volts)

    def terminal_volts(self, emf_volts: Array, node_volts: Array) -> Array:
        """Return the voltage at the generator's terminal for pairs of EMF and node, V."""
        if not self.relay_on:
            return node_volts.copy()
        wiring = self.wiring
        if wiring.diode_saturation_amperes is None:
            share = wiring.source_ohms / wiring.branch_ohms
            return emf_volts - share * (emf_volts - node_volts)
        branches = self.branches
        amperes = [branch_current(branches, float(x))[0] for x in emf_volts - node_volts]
        return emf_volts - wiring.source_ohms * np.array(amperes)


# Below are functions of plain numbers alone: pulsetally.simulators.kernel compiles them as
# they stand.


class Branches(NamedTuple):
    """What carries current into a cell's node.

    relay_on: whether there is a branch to the EMF, of branch_ohms, with a diode of
    saturation_amperes (0: none) that conducts e times more for each fold_volts.
    shunt_siemens: conductance across the cell. clamp_volts: inf without a clamp.
    """

    relay_on: bool
    branch_ohms: float
    shunt_siemens: float
    saturation_amperes: float
    fold_volts: float
    clamp_volts: float


def node_current(
    branches: Branches, emf_volts: float, node_volts: float
) -> tuple[float, float, float]:
    """Return the current into the node's capacitance and its two slopes.

    In A, A/V against node_volts and A/V against emf_volts; without the switching
    current, which belongs to the cell.
    """
    amperes = -branches.shunt_siemens * node_volts
    siemens = -branches.shunt_siemens
    emf_siemens = 0.0
    if branches.relay_on:
        branch_amperes, emf_siemens = branch_current(branches, emf_volts - node_volts)
        amperes += branch_amperes
        siemens -= emf_siemens
    if branches.clamp_volts < math.inf:
        clamp_amperes, clamp_siemens = clamp_current(node_volts, branches.clamp_volts)
        amperes -= clamp_amperes
        siemens -= clamp_siemens
    return amperes, siemens, emf_siemens


def branch_current(branches: Branches, across_volts: float) -> tuple[float, float]:
    """Return the branch's current (A) and slope (S) at a voltage across all of it."""
    if branches.saturation_amperes == 0:
        return across_volts / branches.branch_ohms, 1 / branches.branch_ohms
    return diode_branch_current(
        across_volts, branches.branch_ohms, branches.saturation_amperes, branches.fold_volts
    )


def diode_drop(
    amperes: float, saturation_amperes: float, fold_volts: float = THERMAL_VOLTS
) -> float:
    """Return a Shockley diode's voltage, V; amperes above minus the saturation current."""
    return fold_volts * math.log1p(amperes / saturation_amperes)


def diode_branch_current(
    across_volts: float, ohms: float, saturation_amperes: float, fold_volts: float
) -> tuple[float, float]:
    """Solve a resistor in series with a Shockley diode.

    Return the current (A) and its slope against the voltage across both (S).
    """
    # With w = (i + I_s) R/(n V_t) the two drops add up to w + ln w = z: Wright's omega.
    argument = (
        math.log(ohms * saturation_amperes / fold_volts)
        + (across_volts + ohms * saturation_amperes) / fold_volts
    )
    omega = wright_omega(argument)
    return fold_volts / ohms * omega - saturation_amperes, omega / (1 + omega) / ohms


def wright_omega(argument: float) -> float:
    """Solve w + ln w = argument for w > 0, to double precision."""
    if argument < -40:
        return math.exp(max(argument, -700.0))
    if argument > 1:
        omega = argument - math.log(argument)
    else:
        omega = math.log1p(math.exp(argument)) if argument > -2 else math.exp(argument)
    # Fritsch, Shafer and Crowley, Comm. ACM 16, 123 (1973), from memory: each pass
    # multiplies the number of right digits by four.
    for _ in range(3):
        residual = argument - omega - math.log(omega)
        if abs(residual) < 1e-15 * (1 + abs(argument)):
            break
        partial = 2 * (1 + omega) * (1 + omega + 2 / 3 * residual)
        omega *= 1 + residual / (1 + omega) * (partial - residual) / (partial - 2 * residual)
    return omega


def clamp_current(node_volts: float, clamp_volts: float) -> tuple[float, float]:
    """Return a clamp's current (A) and slope (S); equal and opposite for both polarities."""
    forward, forward_slope = clamp_arm((node_volts - clamp_volts) / CLAMP_FOLD_VOLTS)
    reverse, reverse_slope = clamp_arm((-node_volts - clamp_volts) / CLAMP_FOLD_VOLTS)
    return forward - reverse, forward_slope + reverse_slope


def clamp_arm(folds: float) -> tuple[float, float]:
    """Return the current (A) and slope (S) of one polarity, so many folds above the knee."""
    growth = math.exp(min(folds, _MOST_CLAMP_FOLDS))
    beyond = max(folds - _MOST_CLAMP_FOLDS, 0.0)
    return CLAMP_KNEE_AMPERES * growth * (
        1 + beyond
    ), CLAMP_KNEE_AMPERES * growth / CLAMP_FOLD_VOLTS
