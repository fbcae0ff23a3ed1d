"""Carry one cell and its node along straight pieces of the EMF."""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.collocation import Equations, equations_of
from pulsetally.simulators.compiled import march_in_use
from pulsetally.simulators.march import (
    FIRST_STRIDE,
    NEVER,
    Course,
    State,
    Stop,
    Stride,
    reach,
    softest_is_quiet,
)
from pulsetally.simulators.trajectory import decay_times

Array = NDArray[np.float64]


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


class Memory(NamedTuple):
    """What a solver knows besides the cell and the node.

    side: on which the node has been beyond a threshold, 1 or -1; 0 where it has not, or
    where there is none. waited_seconds: for how long; 0 from when that was long enough.
    """

    side: int = 0
    waiting: bool = False
    waited_seconds: float = 0.0


class Solver:
    """Integrate one cell in one circuit.

    node_volts: the node now, V. The cell and the circuit are changed from outside only
    between calls.
    """

    def __init__(self, cell: Cell, circuit: Circuit, *, node_volts: float = 0.0) -> None:
        self.cell, self.circuit = cell, circuit
        self.node_volts = node_volts
        self._side = 1

    def run(self, ramp: Ramp, *, sampled: bool) -> tuple[Array, Array]:
        """Integrate along a ramp.

        Return times after its begin (s, from 0 to its length) and node voltages there;
        straight lines between them stay within 0.1 mV. Not sampled: fewer of them.
        Raises StepTooSmallError when the equations can't be satisfied.
        """
        times, volts = [np.zeros(1)], [np.array([self.node_volts])]
        done_seconds = 0.0
        stride = FIRST_STRIDE
        stopped = False
        while done_seconds < ramp.seconds and not stopped:
            rest = ramp.after(done_seconds)
            equations = equations_of(self.cell, self.circuit)
            quiet = equations.linear and self._is_idle(equations, rest)
            if not quiet:
                course = self._march(equations, stride, rest, sampled=sampled)
                quiet, stopped, stride = course.quiet, course.stopped, course.stride
                times.append(course.times + done_seconds)
                volts.append(course.volts)
                ended = course.seconds >= rest.seconds
                done_seconds = ramp.seconds if ended else done_seconds + course.seconds
                times[-1][-1:] = done_seconds
            if quiet:
                more_times, more_volts = self._follow(ramp.after(done_seconds))
                more_times += done_seconds
                more_times[-1] = done_seconds = ramp.seconds
                times.append(more_times)
                volts.append(more_volts)
        return np.concatenate(times), np.concatenate(volts)

    @property
    def memory(self) -> Memory:
        """What it knows now."""
        return Memory()

    def most_repeats(self, begin: Memory, period_seconds: float) -> float:
        """Return how often a period that began with a memory comes again as it just did."""
        del begin, period_seconds
        return math.inf

    def repeat(self, begin: Memory, repeats: int) -> None:
        """Let the memory be as after so many more of these periods."""

    def _stop(self) -> Stop:
        """Tell where to return before the ramp's end; for those who watch the node."""
        return NEVER

    def _is_idle(self, equations: Equations, ramp: Ramp) -> bool:
        """Tell, cheaply, whether the cell switches nothing; it may be so all the same."""
        up_volts, down_volts = reach(
            equations, self.node_volts, ramp.begin_volts, ramp.at(ramp.seconds)
        )
        return softest_is_quiet(equations, up_volts, down_volts, ramp.seconds)

    def _march(self, equations: Equations, stride: Stride, ramp: Ramp, *, sampled: bool) -> Course:
        cell = self.cell
        course = march_in_use()(
            equations,
            State(cell.up, float(self.node_volts), self._side, cell.used),
            stride,
            float(ramp.begin_volts),
            float(ramp.volts_per_second),
            float(ramp.seconds),
            sampled,
            self._stop(),
        )
        cell.up, self.node_volts, self._side, cell.used = course.state
        if course.failed:
            raise StepTooSmallError(
                f"no step from {self.node_volts} V at the node satisfies the equations"
            )
        cell.settle()
        return course

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
