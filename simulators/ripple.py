"""A train too fast for its node, which follows the mean of the EMF with a ripple on it.

Where the node is linear in the EMF, its voltage is a sum of two: what the EMF's mean and the
cell make of it, and the periodic answer to the rest of the EMF. That answer is the ripple;
its mean is 0. As long as the ripple is too small to change the rates of switching, which it
does in second order, the cell and the node go as at the mean; so any number of periods is
one stretch of a constant EMF. (Averaging; the ripple itself is a closed form.)
"""

import math
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.drive import PulseTrain

Array = NDArray[np.float64]

# A ripple of more than this, root mean square, is not looked at any further, V: thresholds
# of rest, incubation and recovery are passed by the mean. Less across a clamp, whose current
# changes by a factor of e over 25 mV.
MOST_RIPPLE_VOLTS = 20e-3
MOST_CLAMPED_RIPPLE_VOLTS = 5e-3
# By how much the ripple may raise the mean rate of switching, relatively.
RATE_TOLERANCE = 1e-2
# What all the periods together switch less than, as a part of the cell.
_NOTHING = 1e-9
# Each straight piece of the EMF is cut into so many for the ripple's mean square.
_PARTS = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Ripple:
    """What a node does besides following the mean of a train, V.

    mean_volts: of the EMF. settled_volts: of the node without switching, in the end.
    begin_volts: of the ripple at the begin of a period. rms_volts: of the ripple.
    """

    mean_volts: float = 0.0
    settled_volts: float = 0.0
    begin_volts: float = 0.0
    rms_volts: float = 0.0

    def is_harmless(self, cell: Cell, node_volts: float, seconds: float) -> bool:
        """Tell whether the cell switches as at the mean for so long, from a node voltage on."""
        if self.rms_volts == 0:
            return True
        if self.rms_volts > MOST_RIPPLE_VOLTS:
            return False
        # Without switching the mean goes straight from the one to the other.
        farthest = max(
            abs(volts - cell.imprint_volts) for volts in (node_volts, self.settled_volts)
        )
        above, here, below = (
            float(cell.weights @ cell.rates(max(farthest + side * self.rms_volts, 0.0)))
            for side in (1, 0, -1)
        )
        if above * seconds < _NOTHING:
            return True
        return (above + below) / 2 - here < RATE_TOLERANCE * here


def ripple_of(train: PulseTrain, circuit: Circuit) -> Ripple | None:
    """Return the ripple of a train's periods; None where the node has no such thing.

    That is so behind a diode, and across a clamp where the ripple is not small.
    """
    wiring = circuit.wiring
    if not circuit.relay_on:
        return Ripple()
    if wiring.diode_saturation_amperes is not None:
        return None
    tau_seconds, gain = circuit.farads / circuit.node_siemens, circuit.gain
    lengths, begins, ends = _pieces(train)
    seconds = float(lengths.sum())
    mean_volts = float(lengths @ (begins + ends)) / 2 / seconds
    exponents = -lengths / tau_seconds
    kept = np.exp(exponents)
    # dr/dt = (gain (e - mean) - r)/tau along each piece, with e a straight line.
    gained = [
        -exponent
        * gain
        * ((begin - mean_volts) * _phi1(exponent) + (end - begin) * _phi2(exponent))
        for exponent, begin, end in zip(
            exponents.tolist(), begins.tolist(), ends.tolist(), strict=True
        )
    ]
    whole = 0.0
    for keep, gain_volts in zip(kept.tolist(), gained, strict=True):
        whole = keep * whole + gain_volts
    # It comes back to where it began.
    course = [whole / -math.expm1(-seconds / tau_seconds)]
    for keep, gain_volts in zip(kept.tolist(), gained, strict=True):
        course.append(keep * course[-1] + gain_volts)
    squares = np.square(course)
    rms_volts = math.sqrt(float(lengths @ (squares[1:] + squares[:-1])) / 2 / seconds)
    if wiring.clamp_volts is not None and rms_volts > MOST_CLAMPED_RIPPLE_VOLTS:
        return None
    return Ripple(
        mean_volts=mean_volts,
        settled_volts=gain * mean_volts,
        begin_volts=course[0],
        rms_volts=rms_volts,
    )


def _pieces(train: PulseTrain) -> tuple[Array, Array, Array]:
    """Return lengths (s) and EMF at both ends (V) of short straight pieces of one period."""
    # A second pulse after it, so that the first one's period has an end.
    train = replace(train, start_seconds=0.0, count=2)
    rows: list[tuple[float, float, float]] = []
    at_seconds = 0.0
    while at_seconds < train.period_seconds:
        stretch = train.stretch_at(at_seconds)
        length = (stretch.end_seconds - at_seconds) / _PARTS
        volts = np.linspace(stretch.begin_volts, stretch.end_volts, _PARTS + 1).tolist()
        rows += [(length, begin, end) for begin, end in pairwise(volts)]
        at_seconds = stretch.end_seconds
    lengths, begins, ends = np.array(rows).T
    return lengths, begins, ends


def _phi1(exponent: float) -> float:
    """Return the mean of exp(exponent (1 - s)) over s from 0 to 1."""
    return math.expm1(exponent) / exponent if exponent else 1.0


def _phi2(exponent: float) -> float:
    """Return the mean of s exp(exponent (1 - s)) over s from 0 to 1."""
    if abs(exponent) < 1e-3:
        return 0.5 + exponent / 6 + exponent**2 / 24
    return (_phi1(exponent) - 1) / exponent
