"""Let nothing switch before the voltage has stayed beyond a threshold long enough."""

import math

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.march import NEVER, Stop, is_beyond
from pulsetally.simulators.solver import Memory, Ramp, Solver
from pulsetally.simulators.wear import Incubation

Array = NDArray[np.float64]

# The voltage has come back below this part of the threshold before the time starts again:
# an instant exactly at the threshold must not be both in and out.
LEAVING_SHARE = 0.9
# Two periods of a train have waited alike if they agree to within this part of a period.
SAME_SHARE = 1e-3


def solver_of(cell: Cell, circuit: Circuit) -> Solver:
    """Return the solver that a cell needs."""
    incubation = cell.description.incubation
    if incubation is None:
        return Solver(cell, circuit)
    return IncubatingSolver(cell, circuit, incubation)


class IncubatingSolver(Solver):
    """Integrate a cell that is frozen until its voltage has been beyond the threshold.

    The instants at which the threshold is passed are found on straight lines between
    samples, which are within 0.1 mV. A return is noticed at the end of a step: below the
    threshold nothing switches anyhow.
    """

    def __init__(self, cell: Cell, circuit: Circuit, incubation: Incubation) -> None:
        super().__init__(cell, circuit)
        self._incubation = incubation
        self._beyond_side = 0
        self._waited_seconds = 0.0
        cell.frozen = True

    def run(self, ramp: Ramp, *, sampled: bool) -> tuple[Array, Array]:
        """Integrate along a ramp, as Solver does."""
        del sampled  # The samples tell when the threshold is passed.
        times, volts = [np.zeros(1)], [np.array([self.node_volts])]
        done_seconds = 0.0
        while done_seconds < ramp.seconds:
            rest = ramp.after(done_seconds)
            more_times, more_volts = self._piece(rest)
            taken_seconds = float(more_times[-1])
            last = taken_seconds >= rest.seconds
            more_times = more_times[1:] + done_seconds
            done_seconds = ramp.seconds if last else done_seconds + taken_seconds
            if len(more_times):
                more_times[-1] = done_seconds
            times.append(more_times)
            volts.append(more_volts[1:])
        whole, all_volts = np.concatenate(times), np.concatenate(volts)
        rising = np.concatenate((np.diff(whole) > 0, [True]))
        rising[0] = True
        return whole[rising], all_volts[rising]

    @property
    def memory(self) -> Memory:
        """On which side the node is beyond, and how long it has waited there."""
        waiting = self._beyond_side != 0 and self.cell.frozen
        return Memory(self._beyond_side, waiting, self._waited_seconds if waiting else 0.0)

    def most_repeats(self, begin: Memory, period_seconds: float) -> float:
        """Return how often a period that began with a memory comes again as it just did.

        One that waits for all of it does so until the time is over; another one if it ends
        with the memory that it began with.
        """
        now = self.memory
        if (begin.side, begin.waiting) != (now.side, now.waiting):
            return 0
        more_seconds = now.waited_seconds - begin.waited_seconds
        if abs(more_seconds) < SAME_SHARE * period_seconds:
            return math.inf
        if abs(more_seconds - period_seconds) > SAME_SHARE * period_seconds:
            return 0
        return max(0, math.ceil((self._incubation.seconds - now.waited_seconds) / more_seconds) - 1)

    def repeat(self, begin: Memory, repeats: int) -> None:
        """Let the memory be as after so many more of these periods."""
        if self.memory.waiting:
            self._waited_seconds += repeats * (self._waited_seconds - begin.waited_seconds)

    def _stop(self) -> Stop:
        return NEVER if self.cell.frozen else self._leaving()

    def _leaving(self) -> Stop:
        within = LEAVING_SHARE * self._incubation.threshold_volts
        side = self._beyond_side
        return Stop(side, float(self.cell.imprint_volts + side * within))

    def _piece(self, ramp: Ramp) -> tuple[Array, Array]:
        """Go on to the ramp's end or to the next instant at which something changes."""
        waiting_seconds = self._incubation.seconds - self._waited_seconds
        if self._beyond_side == 0:
            times, volts = super().run(ramp, sampled=True)
            distance = np.abs(volts - self.cell.imprint_volts)
            times, volts, passed = self._cut(times, volts, distance, above=True)
            if passed:
                self._beyond_side = 1 if volts[-1] > self.cell.imprint_volts else -1
                self._waited_seconds = 0.0
            return times, volts
        if not self.cell.frozen:
            times, volts = super().run(ramp, sampled=True)
            if is_beyond(self._leaving(), self.node_volts):
                self._go_back()
            return times, volts
        short = min(ramp.seconds, waiting_seconds)
        times, volts = super().run(
            Ramp(
                begin_volts=ramp.begin_volts,
                volts_per_second=ramp.volts_per_second,
                seconds=short,
            ),
            sampled=True,
        )
        distance = self._beyond_side * (volts - self.cell.imprint_volts)
        times, volts, passed = self._cut(times, volts, distance, above=False)
        self._waited_seconds += float(times[-1])
        if passed:
            self._go_back()
        elif short == waiting_seconds:
            self.cell.frozen = False
        return times, volts

    def _go_back(self) -> None:
        self._beyond_side, self._waited_seconds, self.cell.frozen = 0, 0.0, True

    def _cut(
        self, times: Array, volts: Array, distance: Array, *, above: bool
    ) -> tuple[Array, Array, bool]:
        """End a frozen piece where the distance from imprint passes the threshold."""
        limit = self._incubation.threshold_volts * (1.0 if above else LEAVING_SHARE)
        outside = np.flatnonzero(distance > limit if above else distance < limit)
        if not len(outside):
            return times, volts, False
        last = int(outside[0])
        if last > 0:
            share = (limit - distance[last - 1]) / (distance[last] - distance[last - 1])
            seconds = times[last - 1] + share * (times[last] - times[last - 1])
            node = volts[last - 1] + share * (volts[last] - volts[last - 1])
            times = np.append(times[:last], seconds)
            volts = np.append(volts[:last], node)
        else:
            times, volts = times[:1], volts[:1]
        self.node_volts = float(volts[-1])
        return times, volts, True
