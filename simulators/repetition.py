"""Carry a cell over many equal periods of its drive in closed form.

With a given course of the node's voltage each region obeys du/dt = up (1 - u) - down u, which
is linear: a period takes u to kept u + added, and n periods take it n times so, a geometric
sum. Kept and added are read off one period that was integrated, piece by piece. The course
itself depends on what switches; so only as many periods are taken at once as change the
charge that switches in one of them by little.
"""

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell, rates_and_slopes

Array = NDArray[np.float64]

# By how much the rates of switching may change over the periods taken at once, relatively.
RATE_TOLERANCE = 5e-3
# Below this product of exponent and periods, a geometric sum is the first terms of its series.
_TINY = 1e-6
_LEAST_VOLTS = 1e-3
# What all repeats together switch less than, as a part of the cell.
_NOTHING = 1e-9
# In place of a piece's length: it takes no time.
LOSS = -1.0


class Period:
    """One period of the drive: what each piece of it does to each region of a cell.

    It begins with the cell as it is now. repeats: how often it may come at most.
    """

    def __init__(self, cell: Cell, *, repeats: int) -> None:
        self._cell, self._repeats = cell, repeats
        self._begin: Array = cell.up.copy()
        self._before, self._was_frozen = self._begin, cell.frozen
        # Sum over the pieces of the logarithm of what each keeps, and what the solver left
        # out because it is too little for one piece.
        self._logs: Array = np.zeros_like(self._begin)
        self._left_out: Array = np.zeros_like(self._begin)
        # For each piece: kept, added and its length in seconds, or LOSS.
        self._pieces: list[tuple[Array, Array, float]] = []
        self._largest_volts = _LEAST_VOLTS

    def add(self, times: Array, node_volts: Array) -> None:
        """Add a piece that was just integrated, before any loss: its course, in s and V."""
        before, after = self._before, self._cell.up.copy()
        driving = node_volts - self._cell.imprint_volts
        self._largest_volts = max(self._largest_volts, float(np.max(np.abs(driving))))
        kept, added = _map_of(before, after)
        self._append(kept, added, float(times[-1] - times[0]))
        if not (self._was_frozen or self._cell.frozen) and np.array_equal(before, after):
            self._add_left_out(before, times, driving)
        self._before, self._was_frozen = after, self._cell.frozen

    def lose(self, side: int, kept: float) -> None:
        """Add a loss that has just come: this part was kept of what each region has on a side.

        It is no switching: it uses nothing.
        """
        if kept == 1:
            return
        share = np.full_like(self._begin, kept)
        self._append(share, np.zeros_like(share) if side > 0 else 1 - share, LOSS)
        self._before = self._cell.up.copy()

    def without_losses(self) -> "Period":
        """Return the same period without its losses, of a cell that has had them before it."""
        other = Period(self._cell, repeats=self._repeats)
        other._largest_volts, other._left_out = self._largest_volts, self._left_out
        other._logs = self._logs.copy()
        begin = self._begin
        for kept, added, seconds in self._pieces:
            if seconds == LOSS:
                other._logs -= np.log(kept)
                begin = kept * begin + added
        other._begin = other._before = begin
        for kept, added, seconds in self._pieces:
            if seconds != LOSS:
                other._pieces.append((kept, added, seconds))
                other._before = kept * other._before + added
        return other

    def _append(self, kept: Array, added: Array, seconds: float) -> None:
        self._left_out *= kept
        with np.errstate(divide="ignore"):
            self._logs += np.log(kept)
        self._pieces.append((kept, added, seconds))

    def _add_left_out(self, up: Array, times: Array, driving: Array) -> None:
        """Add what switches in a piece that the solver took for nothing: it may add up."""
        seconds, largest = float(times[-1] - times[0]), float(np.max(np.abs(driving)))
        if self._cell.rates(largest).max() * seconds * self._repeats < _NOTHING:
            return
        for side in (1, -1):
            volts = np.maximum(side * driving, 0.0)
            if not volts.any():
                continue
            rates, _ = rates_and_slopes(self._cell.law, volts.tolist())
            # The trapezoid rule.
            share: Array = np.diff(times) @ (rates[1:] + rates[:-1]) / 2
            self._left_out += share * (1 - up) if side > 0 else -share * up
            self._logs -= share

    @property
    def _change(self) -> Array:
        change: Array = self._before - self._begin + self._left_out
        return change

    def most_repeats(self, repeats: int, *, switched_volts: float) -> int:
        """Return how many of so many repeats leave the course of the voltage as it is.

        switched_volts: what the node would move by if the whole cell switched, V.
        """
        cell, volts = self._cell, self._largest_volts
        alpha = cell.description.alpha
        # The logarithm of a rate changes by this for each volt.
        per_volt = alpha * (float(np.mean(cell.activations)) / volts) ** alpha / volts
        moved = cell.weights * np.abs(self._change)
        while repeats > 0:
            switched = float(moved @ -np.expm1((repeats + 1) * self._logs))
            if switched * switched_volts * per_volt < RATE_TOLERANCE:
                break
            repeats //= 2
        return repeats

    def after(self, repeats: int) -> Array:
        """Return the up part of each region when the period has come so often again."""
        up: Array = self._begin + self._change * _geometric(repeats + 1, self._logs)
        return np.clip(up, 0.0, 1.0)

    def mean_use(self, repeats: int) -> tuple[float, float]:
        """Return cycles and state_seconds (see Tally) of a mean one of so many repeats."""
        mean = _mean_geometric(repeats, self._logs)
        up: Array = np.clip(self._begin + self._change * mean, 0.0, 1.0)
        weights = self._cell.weights
        cycles = state_seconds = 0.0
        fraction = float(weights @ up)
        for kept, added, seconds in self._pieces:
            up = kept * up + added
            before, fraction = fraction, float(weights @ up)
            if seconds == LOSS:
                continue
            cycles += abs(fraction - before) / 2
            state_seconds += (before + fraction - 1) * seconds
        return cycles, state_seconds


def _map_of(before: Array, after: Array) -> tuple[Array, Array]:
    """Return kept and added of a piece; each region has gone one way or stayed."""
    kept = np.ones_like(before)
    up, down = after > before, after < before
    np.divide(1 - after, 1 - before, out=kept, where=up)
    np.divide(after, before, out=kept, where=down)
    added: Array = np.where(up, 1 - kept, 0.0)
    return kept, added


def _geometric(terms: int, logs: Array) -> Array:
    """Return 1 + a + a^2 + ... of so many terms (at least 1), where logs = ln a, at most 0."""
    total = np.full_like(logs, float(terms))
    np.divide(np.expm1(terms * logs), np.expm1(logs), out=total, where=logs < 0)
    return total


def _mean_geometric(repeats: int, logs: Array) -> Array:
    """Return the mean of the geometric sums of 1, 2, ... repeats terms."""
    mean = np.full_like(logs, (repeats + 1) / 2)
    kept = np.exp(logs)
    long_enough = -repeats * logs > _TINY
    np.divide(
        1 - kept * _geometric(repeats, logs) / repeats,
        -np.expm1(logs),
        out=mean,
        where=long_enough,
    )
    return mean
