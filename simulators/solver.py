"""Carry one cell and its node along straight pieces of the EMF."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.collocation import NODES, Point, Trial, Triple, point_at, try_step
from pulsetally.simulators.trajectory import (
    Quintic,
    curve_of,
    decay_times,
    extrapolate,
    sample_step,
)

Array = NDArray[np.float64]

# Largest embedded error of a step, V. The embedded formula is of order 3 and the result
# of order 5, so what is really lost in a step is far less.
STEP_TOLERANCE_VOLTS = 2e-3
# Largest distance between the dense output and the step's inner nodes, V.
DENSE_TOLERANCE_VOLTS = 1e-4
# Right after a kink a fast transient may still run, which hides from that measure.
KINK_CAUTION = 0.25
_LARGEST_GROWTH, _LARGEST_SHRINK, _SAFETY = 12.0, 0.15, 0.85
FIRST_MOVE_VOLTS = 0.3
_LEAST_SECONDS = 1e-24
# A stretch over which less than this part of the cell could switch is left unswitched.
QUIET_FRACTION = 1e-12


class StepTooSmallError(RuntimeError):
    """No step, however short, satisfies the equations."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Ramp:
    """A straight line of the EMF: volts at its begin, volts per second, seconds long."""

    begin_volts: float
    volts_per_second: float
    seconds: float

    def at(self, seconds: float) -> float:
        """Return the EMF this long after the begin, V."""
        return self.begin_volts + self.volts_per_second * seconds

    def after(self, seconds: float) -> "Ramp":
        """Return what is left of the ramp after this long."""
        return Ramp(
            begin_volts=self.at(seconds),
            volts_per_second=self.volts_per_second,
            seconds=self.seconds - seconds,
        )


class Solver:
    """Integrate one cell in one circuit.

    node_volts: the node now, V. The cell and the circuit are changed from outside only
    between calls.
    """

    def __init__(self, cell: Cell, circuit: Circuit, *, node_volts: float = 0.0) -> None:
        self.cell, self.circuit = cell, circuit
        self.node_volts = node_volts
        self._side = 1
        self._next_seconds = 0.0

    def run(self, ramp: Ramp, *, sampled: bool) -> tuple[Array, Array]:
        """Integrate along a ramp.

        Return times after its begin (s, from 0 to its length) and node voltages there;
        straight lines between them stay within 0.1 mV. Not sampled: fewer of them.
        Raises StepTooSmallError when the equations can't be satisfied.
        """
        times, volts = [np.zeros(1)], [np.array([self.node_volts])]
        done_seconds = 0.0
        begin: Point | None = None
        previous: tuple[Quintic, Trial] | None = None
        while done_seconds < ramp.seconds:
            rest = ramp.after(done_seconds)
            if self.circuit.is_linear and self._is_quiet(rest, begin):
                more_times, more_volts = self._follow(rest)
                taken_seconds = rest.seconds
            else:
                if begin is None:
                    begin = self._begin(rest)
                    self._next_seconds = self._first_seconds(rest, begin)
                trial, quintic = self._step(rest, begin, previous)
                taken_seconds = trial.seconds
                if sampled:
                    more_times, more_volts = sample_step(quintic, trial.seconds)
                else:
                    more_times, more_volts = np.array([taken_seconds]), np.array([trial.volts[2]])
                previous = (quintic, trial)
                begin = self._accept(rest, trial)
            more_times += done_seconds
            last = taken_seconds >= rest.seconds
            done_seconds = ramp.seconds if last else done_seconds + taken_seconds
            more_times[-1] = done_seconds
            times.append(more_times)
            volts.append(more_volts)
            if self._stops_here():
                break
        return np.concatenate(times), np.concatenate(volts)

    def _stops_here(self) -> bool:
        """Tell whether to return before the ramp's end; for those who watch the node."""
        return False

    def _is_quiet(self, ramp: Ramp, begin: Point | None) -> bool:
        """Tell whether the cell switches nothing, wherever a linear node can get to."""
        if self.cell.frozen:
            return True
        if begin is not None and begin.moving * ramp.seconds > QUIET_FRACTION:
            return False
        gain = self.circuit.gain
        reach = (self.node_volts, gain * ramp.begin_volts, gain * ramp.at(ramp.seconds))
        cell = self.cell
        imprint_volts = cell.imprint_volts
        up_volts, down_volts = max(reach) - imprint_volts, imprint_volts - min(reach)
        # Cheap, and enough in most idle times: not even the softest region moves.
        if cell.softest_rate(max(up_volts, down_volts)) * ramp.seconds < QUIET_FRACTION:
            return True
        rates, _ = cell.rates_and_slopes((up_volts, down_volts))
        moving = rates[0] * (1 - cell.up) + rates[1] * cell.up
        return bool(moving @ cell.weights * ramp.seconds < QUIET_FRACTION)

    def _follow(self, ramp: Ramp) -> tuple[Array, Array]:
        """Follow a ramp in closed form: one resistance and one capacitance."""
        circuit = self.circuit
        siemens = circuit.node_siemens
        if siemens == 0:
            return np.array([ramp.seconds]), np.array([self.node_volts])
        tau_seconds = circuit.farads / siemens
        # The forced solution lags the EMF by tau.
        forced_volts = circuit.gain * ramp.at(-tau_seconds)
        forced_slope = circuit.gain * ramp.volts_per_second
        decaying_volts = self.node_volts - forced_volts
        times = decay_times(ramp.seconds, tau_seconds, decaying_volts)
        volts = forced_volts + forced_slope * times + decaying_volts * np.exp(-times / tau_seconds)
        self.node_volts = float(volts[-1])
        return times, volts

    def _begin(self, ramp: Ramp) -> Point:
        distance = self.node_volts - self.cell.imprint_volts
        if distance != 0:
            self._side = 1 if distance > 0 else -1
        return self._point(ramp)

    def _point(self, ramp: Ramp) -> Point:
        return point_at(
            self.cell,
            self.circuit,
            self.node_volts,
            self._side,
            emf_volts=ramp.begin_volts,
            emf_slope=ramp.volts_per_second,
        )

    def _first_seconds(self, ramp: Ramp, begin: Point) -> float:
        """Return a step over which the node moves by about FIRST_MOVE_VOLTS."""
        amperes, _, _ = self.circuit.node_current(ramp.at(ramp.seconds), self.node_volts)
        slope = max(abs(begin.slope), abs(amperes) / self.circuit.farads)
        return min(ramp.seconds, FIRST_MOVE_VOLTS / slope) if slope > 0 else ramp.seconds

    def _step(
        self, ramp: Ramp, begin: Point, previous: tuple[Quintic, Trial] | None
    ) -> tuple[Trial, Quintic]:
        seconds = self._next_seconds
        dense_volts = DENSE_TOLERANCE_VOLTS * (KINK_CAUTION if previous is None else 1)
        flipped = False
        while seconds > _LEAST_SECONDS:
            # A sliver left over would cost a whole step.
            if seconds > 0.9 * ramp.seconds:
                seconds = ramp.seconds
            trial = try_step(
                self.cell,
                self.circuit,
                begin,
                seconds,
                _guess(begin, previous, seconds),
                emf_volts=ramp.begin_volts,
                emf_slope=ramp.volts_per_second,
            )
            if trial is None:
                seconds *= 0.25
                continue
            if not self._is_one_sided(begin, trial):
                if flipped or trial.moved > QUIET_FRACTION:
                    seconds *= self._crossing(begin, trial)
                else:
                    self._side, flipped = -begin.side, True
                    begin = self._point(ramp)
                continue
            quintic, off_volts = curve_of(begin, trial)
            error = max(
                trial.error_volts / STEP_TOLERANCE_VOLTS,
                off_volts / dense_volts,
            )
            factor = _SAFETY * max(error, 1e-9) ** -0.25
            factor = min(max(factor, _LARGEST_SHRINK), _LARGEST_GROWTH)
            if error > 1:
                seconds *= factor
                continue
            self._next_seconds = factor * seconds
            return trial, quintic
        raise StepTooSmallError(
            f"no step from {self.node_volts} V at the node satisfies the equations"
        )

    def _is_one_sided(self, begin: Point, trial: Trial) -> bool:
        """Tell whether the step neglects no switching to the other side."""
        imprint_volts = self.cell.imprint_volts
        other = max(begin.side * (imprint_volts - volts) for volts in trial.volts)
        if other <= 0 or self.cell.softest_rate(other) * trial.seconds < QUIET_FRACTION:
            return True
        shares = self.cell.weights * self.cell.remaining(-begin.side)
        return bool(shares @ self.cell.rates(other) * trial.seconds < QUIET_FRACTION)

    def _crossing(self, begin: Point, trial: Trial) -> float:
        """Return the part of a step after which the node comes to the imprint voltage."""
        imprint_volts = self.cell.imprint_volts
        before, place = begin.volts - imprint_volts, 0.0
        for node, volts in zip(NODES, trial.volts, strict=True):
            after = volts - imprint_volts
            if before * after <= 0 and before != after:
                found = place + (node - place) * before / (before - after)
                return min(max(found, 0.05), 0.8)
            before, place = after, node
        return 0.5

    def _accept(self, ramp: Ramp, trial: Trial) -> Point:
        self.cell.switch(trial.end.side, trial.kept)
        self.node_volts = trial.volts[2]
        if self.cell.settle():
            # The new weights change how fast the node's charge goes into the cell.
            return self._point(ramp.after(trial.seconds))
        return trial.end


def _guess(begin: Point, previous: tuple[Quintic, Trial] | None, seconds: float) -> Triple:
    """Guess the node at NODES of the next step, V."""
    if previous is not None:
        quintic, trial = previous
        if seconds < 2 * trial.seconds and begin.side == trial.end.side:
            return extrapolate(quintic, seconds / trial.seconds)
    limit = FIRST_MOVE_VOLTS
    first, second, third = (
        begin.volts + min(max(begin.slope * node * seconds, -limit), limit) for node in NODES
    )
    return first, second, third
