"""Carry one cell and its node along straight pieces of the EMF."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.collocation import NODES, Begin, Trial, Triple, begin_step, try_step
from pulsetally.simulators.trajectory import decay_times, dense_error, sample_step

Array = NDArray[np.float64]

# Largest embedded error of a step, V. The embedded formula is of order 3 and the result
# of order 5, so what is really lost in a step is far less.
STEP_TOLERANCE_VOLTS = 2e-3
# Largest change of the dense output when one of its conditions is left out, V.
DENSE_TOLERANCE_VOLTS = 1e-4
_LARGEST_GROWTH, _LARGEST_SHRINK, _SAFETY = 12.0, 0.15, 0.85
_FIRST_SHARE = 0.05
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

        Return times after its begin (s, strictly rising, from 0 to its length) and node
        voltages there; straight lines between them stay within 0.1 mV. Not sampled: only
        the two ends. Raises StepTooSmallError when the equations can't be satisfied.
        """
        times, volts = [np.zeros(1)], [np.array([self.node_volts])]
        done_seconds = 0.0
        begin: Begin | None = None
        previous: Trial | None = None
        self._next_seconds = _FIRST_SHARE * ramp.seconds
        while done_seconds < ramp.seconds:
            rest_seconds = ramp.seconds - done_seconds
            emf_volts = ramp.at(done_seconds)
            quiet = self.circuit.is_linear and self._is_quiet(
                rest_seconds, emf_volts, ramp.at(ramp.seconds)
            )
            if quiet:
                rest = Ramp(
                    begin_volts=emf_volts,
                    volts_per_second=ramp.volts_per_second,
                    seconds=rest_seconds,
                )
                more_times, more_volts = self._follow(rest)
                more_times += done_seconds
                more_times[-1] = ramp.seconds
                done_seconds = ramp.seconds
            else:
                begin, trial = self._step(ramp, done_seconds, begin, previous)
                last = trial.seconds >= rest_seconds
                if sampled:
                    more_times, more_volts = sample_step(
                        trial.seconds, begin.volts, begin.slope, trial.volts, trial.slope
                    )
                    more_times += done_seconds
                else:
                    more_times = np.array([done_seconds + trial.seconds])
                    more_volts = np.array([trial.volts[2]])
                done_seconds = ramp.seconds if last else done_seconds + trial.seconds
                more_times[-1] = done_seconds
                previous = trial
                begin = self._accept(begin, trial)
            times.append(more_times)
            volts.append(more_volts)
        return np.concatenate(times), np.concatenate(volts)

    def _is_quiet(self, seconds: float, emf_volts: float, end_emf_volts: float) -> bool:
        """Tell whether the cell switches nothing, wherever a linear node can get to."""
        gain = self.circuit.gain
        reach = (self.node_volts, gain * emf_volts, gain * end_emf_volts)
        cell = self.cell
        imprint_volts = cell.description.imprint_volts
        distances = np.array((max(reach) - imprint_volts, imprint_volts - min(reach)))
        # Cheap, and enough in most idle times: not even the softest region moves.
        if cell.softest_rate(float(distances.max())) * seconds < QUIET_FRACTION:
            return True
        rates, _ = cell.rates_and_slopes(distances)
        moving = rates[0] * (1 - cell.up) + rates[1] * cell.up
        return bool(moving @ cell.weights * seconds < QUIET_FRACTION)

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

    def _step(
        self, ramp: Ramp, done_seconds: float, begin: Begin | None, previous: Trial | None
    ) -> tuple[Begin, Trial]:
        emf_volts = ramp.at(done_seconds)
        rest_seconds = ramp.seconds - done_seconds
        if begin is None:
            begin = self._begin(emf_volts)
        seconds = self._next_seconds
        flipped = False
        while seconds > 1e-15 * ramp.seconds:
            # A sliver left over would cost a whole step.
            if seconds > 0.9 * rest_seconds:
                seconds = rest_seconds
            ends = [ramp.at(done_seconds + node * seconds) for node in NODES]
            guess = _guess(begin, previous, seconds)
            trial = try_step(
                self.cell, self.circuit, begin, (ends[0], ends[1], ends[2]), seconds, guess
            )
            if trial is None:
                seconds *= 0.25
                continue
            if not self._is_one_sided(begin, trial):
                if flipped or trial.moved > QUIET_FRACTION:
                    seconds *= self._crossing(begin, trial)
                else:
                    self._side, flipped = -begin.side, True
                    begin = begin_step(
                        self.cell, self.circuit, emf_volts, self.node_volts, self._side
                    )
                continue
            dense_volts = dense_error(seconds, begin.volts, begin.slope, trial.volts, trial.slope)
            error = max(
                trial.error_volts / STEP_TOLERANCE_VOLTS, dense_volts / DENSE_TOLERANCE_VOLTS
            )
            factor = _SAFETY * max(error, 1e-9) ** -0.25
            factor = min(max(factor, _LARGEST_SHRINK), _LARGEST_GROWTH)
            if error > 1:
                seconds *= factor
                continue
            self._next_seconds = factor * seconds
            return begin, trial
        raise StepTooSmallError(
            f"no step from {self.node_volts} V at the node satisfies the equations"
        )

    def _begin(self, emf_volts: float) -> Begin:
        distance = self.node_volts - self.cell.description.imprint_volts
        if distance != 0:
            self._side = 1 if distance > 0 else -1
        return begin_step(self.cell, self.circuit, emf_volts, self.node_volts, self._side)

    def _is_one_sided(self, begin: Begin, trial: Trial) -> bool:
        """Tell whether the step neglects no switching to the other side."""
        imprint_volts = self.cell.description.imprint_volts
        other = max(begin.side * (imprint_volts - volts) for volts in trial.volts)
        if other <= 0 or self.cell.softest_rate(other) * trial.seconds < QUIET_FRACTION:
            return True
        shares = self.cell.weights * self.cell.remaining(-begin.side)
        return bool(shares @ self.cell.rates(other) * trial.seconds < QUIET_FRACTION)

    def _crossing(self, begin: Begin, trial: Trial) -> float:
        """Return the part of a step after which the node comes to the imprint voltage."""
        imprint_volts = self.cell.description.imprint_volts
        before, place = begin.volts - imprint_volts, 0.0
        for node, volts in zip(NODES, trial.volts, strict=True):
            after = volts - imprint_volts
            if before * after <= 0 and before != after:
                found = place + (node - place) * before / (before - after)
                return min(max(found, 0.05), 0.8)
            before, place = after, node
        return 0.5

    def _accept(self, begin: Begin, trial: Trial) -> Begin:
        cell = self.cell
        cell.switch(begin.side, trial.exposures)
        self.node_volts = trial.volts[2]
        if cell.settle():
            # The new weights change how fast the node's charge goes into the cell.
            open_shares = cell.weights * cell.remaining(begin.side)
            switching = cell.description.switchable_coulombs * float(open_shares @ trial.rates)
            slope = (trial.amperes - begin.side * switching) / self.circuit.farads
            return Begin(trial.volts[2], begin.side, open_shares, trial.rates, trial.amperes, slope)
        return Begin(
            trial.volts[2],
            begin.side,
            trial.open_shares,
            trial.rates,
            trial.amperes,
            trial.slope,
        )


def _guess(begin: Begin, previous: Trial | None, seconds: float) -> Triple:
    del previous
    limit = 0.3
    points = [begin.volts + min(max(begin.slope * node * seconds, -limit), limit) for node in NODES]
    return points[0], points[1], points[2]
