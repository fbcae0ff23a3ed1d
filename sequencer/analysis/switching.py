"""Find what a cell's pulses switched, from four pulses (PUND); loops are in hysteresis.py.

Charges are coulombs, voltages volts at the node, times seconds; arrays are 1-D and of equal
length.
"""

import math
from dataclasses import dataclass

import numpy as np

from pulsetally.sequencer.analysis.charge import (
    ChargeNoise,
    SwitchingUnclear,
    cell_charge,
    charge_noise,
)
from pulsetally.sequencer.analysis.hysteresis import LoopResult, loop_of
from pulsetally.sequencer.analysis.pulses import Samples
from pulsetally.sequencer.quantities import show_quantity

__all__ = [
    "ChargeMoved",
    "ChargeNoise",
    "LoopResult",
    "PundResult",
    "SwitchingUnclear",
    "cell_charge",
    "charge_moved",
    "charge_noise",
    "loop_of",
    "pund_of",
]

# The end of a record over which the charge that stayed is averaged.
_TAIL_SHARE = 0.02
_LEAST_TAIL = 4
# Back at rest: the node, as a share of the farthest it went; the source likewise.
_RELAXED_SHARE = 0.02
_BACK_SHARE = 0.1
# What goes up comes down: both directions must agree to this share of what switched, or to so
# many standard uncertainties of their difference.
_AGREE_SHARE = 0.2
_AGREE_SIGMAS = 10.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ChargeMoved:
    """Give the charge that one pulse left behind in the cell.

    coulombs: from the rest before it to the end of the record, when the source is back and the
    node at rest again. volt_seconds: the node's voltage from its rest, integrated: what a leakage
    current is proportional to. uncertainty: standard uncertainty of coulombs.
    """

    coulombs: float
    volt_seconds: float
    uncertainty: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PundResult:
    """Say what four pulses switched, in coulombs.

    switched_up, switched_down: both positive for a cell that switches; switched: their mean,
    2 P_r A. asymmetry: switched_up - switched_down; 0 for a cell that goes up as it comes down.
    uncertainty: standard uncertainty of switched; of asymmetry it is twice that.
    leakage_siemens: from the pulses that switch nothing, U and D; late switching shows as leakage.
    """

    switched_up: float
    switched_down: float
    switched: float
    asymmetry: float
    uncertainty: float
    leakage_siemens: float


def charge_moved(
    times: Samples,
    source_volts: Samples,
    node_volts: Samples,
    *,
    series_ohms: float,
    probe_ohms: float,
    probe_farads: float,
    before: float,
    steps: tuple[float, float] | None = None,
) -> ChargeMoved:
    """Return what one pulse left behind; arguments as for cell_charge and charge_noise.

    The charge is taken at the end of the record and not at the pulse's top: there, capacitance
    times voltage adds to it, and it doesn't drop out of a difference where the series resistance
    lets the node lag behind. Back at rest a linear capacitor holds what it held before, whatever
    its size and the pulse. Raises SwitchingUnclear where the source isn't back or the node not at
    rest, and as cell_charge does.
    """
    charge = cell_charge(
        times,
        source_volts,
        node_volts,
        series_ohms=series_ohms,
        probe_ohms=probe_ohms,
        probe_farads=probe_farads,
        before=before,
    )
    noise = charge_noise(
        times,
        source_volts,
        node_volts,
        series_ohms=series_ohms,
        probe_ohms=probe_ohms,
        before=before,
        steps=steps,
    )
    resting = int(np.searchsorted(times, before, side="left"))
    tail = max(_LEAST_TAIL, round(_TAIL_SHARE * times.size))
    if times.size - resting <= tail:
        raise SwitchingUnclear(f"only {times.size - resting} samples follow the rest")
    source = source_volts - np.mean(source_volts[:resting])
    node = node_volts - np.mean(node_volts[:resting])
    farthest = float(np.max(np.abs(node)))
    if abs(float(np.mean(source[-tail:]))) > _BACK_SHARE * float(np.max(np.abs(source))):
        raise SwitchingUnclear("the record ends before the pulse does: record longer")
    away = abs(float(np.mean(node[-tail:])))
    unsure = 3 * noise.node_noise / math.sqrt(tail) + noise.node_step
    if away > _RELAXED_SHARE * farthest + unsure:
        raise SwitchingUnclear(
            f"at the record's end the node is {away:.3g} V from where it rested, after a pulse"
            f" that took it {farthest:.3g} V away: record a longer rest"
        )
    moved = charge - np.mean(charge[:resting])
    # What is still to flow back is less than at the farthest, in proportion to the voltage.
    left = float(np.max(np.abs(moved))) / farthest * away if away > unsure else 0.0
    return ChargeMoved(
        coulombs=float(np.mean(moved[-tail:])),
        volt_seconds=float(np.trapezoid(node[resting:], times[resting:])),
        uncertainty=math.hypot(noise.after(float(times[-1] - before)), left),
    )


def pund_of(p: ChargeMoved, u: ChargeMoved, n: ChargeMoved, d: ChargeMoved) -> PundResult:
    """Subtract what doesn't switch: P - U of two pulses up, D - N of two pulses down after them.

    Each charge is what stayed after its pulse (charge_moved). A linear capacitor without losses
    gives exactly 0: each of its charges is. A leakage current's charge is the same for both pulses
    of a pair but for the time in which the switching cell holds the node down; so U and D are
    subtracted in proportion to their volt-seconds, and leakage drops out wholly.
    Raises SwitchingUnclear where the pulses don't go up, up, down, down, and where the two
    directions contradict each other: a diode in series or a pulse too short for one direction
    does that, and then neither charge is what the cell switches.
    """
    for name, moved, sign in (("P", p, 1), ("U", u, 1), ("N", n, -1), ("D", d, -1)):
        if moved.volt_seconds * sign <= 0:
            way = "up" if sign > 0 else "down"
            raise SwitchingUnclear(
                f"pulse {name} must go {way}; its node's volt-seconds are {moved.volt_seconds:.3g}"
            )
    up_share = p.volt_seconds / u.volt_seconds
    down_share = n.volt_seconds / d.volt_seconds
    up = p.coulombs - up_share * u.coulombs
    down = down_share * d.coulombs - n.coulombs
    uncertainty = math.hypot(
        p.uncertainty, up_share * u.uncertainty, n.uncertainty, down_share * d.uncertainty
    )
    far = max(_AGREE_SIGMAS * uncertainty, _AGREE_SHARE * abs(up + down) / 2)
    if abs(up - down) > far:
        raise SwitchingUnclear(
            f"up and down contradict each other: P - U is {show_quantity(up, 'C', 3)}, D - N"
            f" {show_quantity(down, 'C', 3)}, {show_quantity(uncertainty, 'C', 2)} uncertain. A"
            " diode in series, a clamp, or pulses too short for one direction can do that"
        )
    return PundResult(
        switched_up=up,
        switched_down=down,
        switched=(up + down) / 2,
        asymmetry=up - down,
        uncertainty=uncertainty / 2,
        leakage_siemens=(u.coulombs - d.coulombs) / (u.volt_seconds - d.volt_seconds),
    )
