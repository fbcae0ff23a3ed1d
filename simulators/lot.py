"""A whole lot of cells through the same pulses.

Large lots go through the compiled march of the table, cell by cell, where there is one
(pulsetally.simulators.compiled). Otherwise all cells go together in numpy: with the table's
equations and method (pulsetally.simulators.collocation), but each array has a row for each
cell, and each cell takes steps of its own length. Either way cells are handled in groups that
fit the processor's cache, and the groups side by side in threads.
"""

import math
import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields, replace

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.collocation import AT_BEGIN, EMBEDDED, MATRIX, NODES
from pulsetally.simulators.compiled import compiled_lot
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.lot_numbers import Pieces, numbers_of, pieces_of
from pulsetally.simulators.march import FIRST_MOVE_VOLTS
from pulsetally.simulators.solver import StepTooSmallError

Array = NDArray[np.float64]
# What has a value for each region of each cell is in single precision, which moves an end
# voltage by about 1 uV and takes half the time. Voltages are in double precision.
Single = NDArray[np.float32]
Mask = NDArray[np.bool_]
Places = NDArray[np.intp]

GROUP = 512
# From so many pulses of so many cells on, loading what is compiled is won back.
WORTH_PULSES = 10_000
# Looser than the table's: the end voltages are good to 1 mV, the table's to 0.1 mV.
STEP_TOLERANCE_VOLTS = 5e-4
NEWTON_TOLERANCE_VOLTS = 1e-3
QUIET_FRACTION = 1e-9

_MOST_NEWTON = 10
_LARGEST_CORRECTION_VOLTS = 0.5
_LARGEST_GROWTH, _LARGEST_SHRINK, _SAFETY = 12.0, 0.15, 0.85
_LEAST_SECONDS = 1e-24
_LEAST_DRIVING_VOLTS = 1e-9
_NODES = np.array(NODES)
# Coefficients of x, x^2, x^3 of the cubic through a step's begin and its nodes.
_CUBIC = np.linalg.inv(np.array([[node, node**2, node**3] for node in NODES]))

# What may differ from cell to cell; regions must be equal, and nothing else be given.
DRAWN = (
    "area",
    "thickness",
    "remanent_polarization",
    "relative_permittivity",
    "activation_volts",
    "activation_spread",
    "alpha",
    "attempt_seconds",
    "leak_ohms",
    "imprint_volts",
)


def draw_cells(
    nominal: CellDescription, count: int, *, relative_spread: float, seed: int
) -> list[CellDescription]:
    """Draw cells around a nominal one.

    Area, thickness, remanent polarization and mean activation voltage are each multiplied
    by an independent log-normal factor of this relative spread.
    """
    names = ("area", "thickness", "remanent_polarization", "activation_volts")
    random = np.random.default_rng(seed)
    factors = np.exp(relative_spread * random.standard_normal((count, len(names)))).tolist()
    return [
        replace(
            nominal,
            **{name: getattr(nominal, name) * by for name, by in zip(names, row, strict=True)},
        )
        for row in factors
    ]


def run_lot(
    cells: Sequence[CellDescription],
    wiring: Wiring,
    pulses: Sequence[PulseTrain],
    *,
    threads: int | None = None,
    compiled: bool | None = None,
) -> Array:
    """Drive fresh cells, fully down and discharged, through pulses one after another.

    pulses: trains of one pulse; each takes its period, its start is not looked at. threads:
    how many groups of cells run side by side; as many as the machine has cores if None.
    compiled: whether to use the compiled march, if there is one; None: where it pays.
    Returns end voltages (node voltage at the end of the flat top), V: a row for each cell,
    a column for each pulse; within 1 mV of the table's.
    Raises ValueError where cells differ in regions or have options beyond DRAWN, where the
    wiring has a diode or a clamp, and for a train of several pulses.
    """
    _check(cells, wiring, pulses)
    workers = threads or os.cpu_count() or 1
    size = max(1, min(GROUP, math.ceil(len(cells) / workers)))
    groups = [cells[begin : begin + size] for begin in range(0, len(cells), size)]
    pieces = pieces_of(pulses)
    if compiled is None:
        compiled = len(cells) * len(pulses) >= WORTH_PULSES
    run_compiled = compiled_lot() if compiled else None

    def run_group(group: Sequence[CellDescription]) -> Array:
        ends = np.zeros((len(group), len(pulses)))
        if run_compiled is None:
            _Group(group, wiring).run(pieces, ends)
        elif not run_compiled(numbers_of(group, wiring), pieces, ends):
            raise StepTooSmallError("no step of a cell satisfies the equations")
        return ends

    with ThreadPoolExecutor(workers) as pool:
        found = list(pool.map(run_group, groups))
    return np.concatenate(found) if found else np.zeros((0, len(pulses)))


def _check(cells: Sequence[CellDescription], wiring: Wiring, pulses: Sequence[PulseTrain]) -> None:
    plain = CellDescription()
    others = [field.name for field in fields(plain) if field.name not in (*DRAWN, "regions")]
    for index, cell in enumerate(cells):
        if cell.regions != cells[0].regions:
            raise ValueError(
                f"cell {index} has {cell.regions} regions, cell 0 has {cells[0].regions}"
            )
        for name in others:
            if getattr(cell, name) != getattr(plain, name):
                raise ValueError(f"cell {index} has {name}; a lot knows only {', '.join(DRAWN)}")
    if wiring.diode_saturation_amperes is not None or wiring.clamp_volts is not None:
        raise ValueError("the wiring has a diode or a clamp; a lot knows only resistances")
    for index, train in enumerate(pulses):
        if train.count != 1:
            raise ValueError(f"pulse {index} has a count of {train.count}; it must be 1")


class _Group:
    """Some cells, a row each."""

    def __init__(self, cells: Sequence[CellDescription], wiring: Wiring) -> None:
        lot = numbers_of(cells, wiring)
        self._alpha, self._barriers = lot.alphas, lot.barriers.astype(np.float32)
        self._attempt_logs = np.log(lot.attempts_per_second)
        self._imprint, self._coulombs = lot.imprint_volts, lot.switchable_coulombs
        self._farads, self._shunt = lot.farads, lot.shunt_siemens
        self._branch = 1 / lot.branch_ohms
        self._up = np.zeros(lot.barriers.shape)
        self._volts = np.zeros(len(cells))
        self._side = np.ones(len(cells))

    def run(self, pieces: Pieces, ends: Array) -> None:
        for begin_volts, slope, seconds, pulse in zip(*pieces, strict=True):
            self._advance(begin_volts, slope, seconds)
            if pulse >= 0:
                ends[:, pulse] = self._volts

    def _advance(self, begin_volts: float, emf_slope: float, seconds: float) -> None:
        """Carry all cells along one straight piece of the EMF."""
        count = len(self._volts)
        left, next_seconds = np.full(count, seconds), np.zeros(count)
        # Of each cell's last step: its cubic, and its length (0: there is none).
        cubic, last_seconds = np.zeros((count, 3)), np.zeros(count)
        flipped = np.zeros(count, dtype=np.bool_)
        distance = self._volts - self._imprint
        self._side = np.where(distance == 0, self._side, np.sign(distance))
        places: Places = np.arange(count)
        while places.size:
            emf = begin_volts + emf_slope * (seconds - left[places])
            step = _Step(self, places, emf, emf_slope)
            quiet = step.is_quiet(left[places])
            if quiet.any():
                still = places[quiet]
                self._volts[still] = step.follow(left[places])[quiet]
                left[still] = 0.0
                places = places[~quiet]
                continue
            planned = next_seconds[places]
            planned = np.where(planned > 0, planned, step.first_seconds(left[places]))
            planned = np.where(planned > 0.9 * left[places], left[places], planned)
            if planned.min() < _LEAST_SECONDS:
                raise StepTooSmallError("no step of a cell satisfies the equations")
            solved, error = step.solve(planned, cubic[places], last_seconds[places])
            two_sided = solved & step.is_two_sided(planned)
            flips = two_sided & ~flipped[places] & (step.moved <= QUIET_FRACTION)
            self._side[places[flips]] *= -1
            flipped[places[flips]] = True
            with np.errstate(invalid="ignore", divide="ignore"):
                factor = _SAFETY * np.maximum(error / STEP_TOLERANCE_VOLTS, 1e-9) ** -0.25
            factor = np.clip(factor, _LARGEST_SHRINK, _LARGEST_GROWTH)
            factor = np.where(solved, factor, 0.25)
            factor = np.where(two_sided, np.where(flips, 1.0, 0.5), factor)
            next_seconds[places] = factor * planned
            good = solved & ~two_sided & (error <= STEP_TOLERANCE_VOLTS)
            taken = places[good]
            step.keep(good)
            cubic[taken] = (step.volts[good] - step.begin_volts[good, None]) @ _CUBIC.T
            last_seconds[taken] = planned[good]
            flipped[taken] = False
            left[taken] -= planned[good]
            places = places[left[places] > 0]


class _Step:
    """One step of the cells at some places of a group: see collocation.try_step."""

    def __init__(self, group: _Group, places: Places, emf: Array, emf_slope: float) -> None:
        self._group, self._places = group, places
        self._emf, self._emf_slope = emf, emf_slope
        self._alpha, self._barriers = group._alpha[places], group._barriers[places]
        self._attempt_logs, self._imprint = group._attempt_logs[places], group._imprint[places]
        self._coulombs, self._farads = group._coulombs[places], group._farads[places]
        self._shunt, self._branch = group._shunt[places], group._branch
        self._siemens = self._shunt + self._branch
        self._side, self._up = group._side[places], group._up[places]
        self.begin_volts = group._volts[places]
        up = self._side[:, None] > 0
        open_shares = np.where(up, 1 - self._up, self._up) / self._up.shape[1]
        self._open: Single = open_shares.astype(np.float32)
        self._open_total = self._open.sum(axis=1)
        self._begin_rates = self._rates(self._side * (self.begin_volts - self._imprint))
        self._moving = (self._open * self._begin_rates).sum(axis=1)
        self._amperes = self._current(emf, self.begin_volts)
        self.volts = np.zeros((len(places), 3))
        self.moved = np.zeros(len(places))
        self._kept = self._open

    def _current(self, emf: Array, volts: Array) -> Array:
        return (emf - volts) * self._branch - volts * self._shunt

    def _rates(self, driving_volts: Array) -> Single:
        inverses = (1 / np.maximum(driving_volts, _LEAST_DRIVING_VOLTS)) ** self._alpha
        # The attempt rate goes in before exp(), which would else give subnormal numbers.
        logs = self._barriers * -inverses[:, None].astype(np.float32)
        logs += self._attempt_logs[:, None].astype(np.float32)
        rates: Single = np.exp(logs)
        return rates

    def _softest_rate(self, driving_volts: Array) -> Array:
        inverses = (1 / np.maximum(driving_volts, _LEAST_DRIVING_VOLTS)) ** self._alpha
        rates: Array = np.exp(self._attempt_logs - self._barriers[:, 0] * inverses)
        return rates

    def is_quiet(self, left: Array) -> Mask:
        """Tell which cells switch nothing in the time left, wherever they can get to."""
        gain = self._branch / self._siemens
        ends = (self.begin_volts, gain * self._emf, gain * (self._emf + self._emf_slope * left))
        up_volts = np.maximum.reduce(ends) - self._imprint
        down_volts = self._imprint - np.minimum.reduce(ends)
        quiet: Mask = self._softest_rate(np.maximum(up_volts, down_volts)) * left < QUIET_FRACTION
        unsure = ~quiet & (self._moving * left < QUIET_FRACTION)
        if unsure.any():
            moving = self._rates(up_volts) * (1 - self._up) + self._rates(down_volts) * self._up
            quiet |= unsure & (moving.mean(axis=1) * left < QUIET_FRACTION)
        return quiet

    def follow(self, left: Array) -> Array:
        """Return the voltages after the time left without switching, in closed form."""
        tau = self._farads / self._siemens
        gain = self._branch / self._siemens
        forced = gain * (self._emf - self._emf_slope * tau)
        decay = np.exp(-left / tau)
        volts: Array = forced + gain * self._emf_slope * left + (self.begin_volts - forced) * decay
        return volts

    def first_seconds(self, left: Array) -> Array:
        """Return steps over which the nodes move by about FIRST_MOVE_VOLTS."""
        at_end = self._current(self._emf + self._emf_slope * left, self.begin_volts)
        slope = np.maximum(np.abs(self._slope()), np.abs(at_end) / self._farads)
        seconds: Array = np.minimum(left, FIRST_MOVE_VOLTS / np.maximum(slope, 1e-300))
        return seconds

    def _slope(self) -> Array:
        switching = self._side * self._coulombs * self._moving
        slope: Array = (self._amperes - switching) / self._farads
        return slope

    def _guess(self, seconds: Array, cubic: Array, last_seconds: Array) -> Array:
        move = np.clip(
            self._slope()[:, None] * seconds[:, None] * _NODES, -FIRST_MOVE_VOLTS, FIRST_MOVE_VOLTS
        )
        known = (last_seconds > 0) & (seconds < 2 * last_seconds)
        ratio = np.divide(seconds, last_seconds, out=np.zeros_like(seconds), where=known)
        place = 1 + ratio[:, None] * _NODES
        c1, c2, c3 = (cubic[:, k, None] for k in range(3))
        onwards = place * (c1 + place * (c2 + place * c3)) - (c1 + c2 + c3)
        guess: Array = self.begin_volts[:, None] + np.where(known[:, None], onwards, move)
        return guess

    def solve(self, seconds: Array, cubic: Array, last_seconds: Array) -> tuple[Mask, Array]:
        """Solve by Newton's method; return who converged, and the embedded errors, V."""
        scaled = -seconds[:, None, None] * MATRIX
        scaled32 = scaled.astype(np.float32)
        logs32 = self._attempt_logs[:, None, None].astype(np.float32)
        signed = self._side * self._coulombs
        volts = self._guess(seconds, cubic, last_seconds)
        emf = self._emf[:, None] + self._emf_slope * seconds[:, None] * _NODES
        siemens, farads = self._siemens[:, None, None], self._farads[:, None]
        coulombs = self._coulombs[:, None, None]
        diagonal = self._farads[:, None, None] * np.eye(3)
        for _ in range(_MOST_NEWTON):
            amperes = emf * self._branch - volts * self._siemens[:, None]
            driving = self._side[:, None] * (volts - self._imprint[:, None])
            inverses = 1 / np.maximum(driving, _LEAST_DRIVING_VOLTS)
            folds = -(inverses ** self._alpha[:, None])
            # Slopes of the rates are steepness times these; it is put in after the sums.
            slopes = folds[:, :, None].astype(np.float32) * self._barriers[:, None, :]
            steepness = -self._alpha[:, None] * inverses
            rates = slopes + logs32
            np.exp(rates, out=rates)
            slopes *= rates
            shares = np.matmul(scaled32, rates)
            np.minimum(shares, 0.0, out=shares)
            last_exponents = shares[:, 2, :].copy()
            np.exp(shares, out=shares)
            shares *= self._open[:, None, :]
            gone = self._open_total[:, None] - shares.sum(axis=2)
            growth = np.matmul(shares, slopes.transpose(0, 2, 1)) * steepness[:, None, :]
            jacobian = diagonal - scaled * (coulombs * growth + siemens)
            missing = (
                farads * (volts - self.begin_volts[:, None])
                + signed[:, None] * gone
                + np.matmul(scaled, amperes[:, :, None])[:, :, 0]
            )
            change = np.linalg.solve(jacobian, missing[:, :, None])[:, :, 0]
            largest = np.abs(change).max(axis=1)
            damp = np.minimum(1.0, _LARGEST_CORRECTION_VOLTS / np.maximum(largest, 1e-300))
            change *= damp[:, None]
            volts = volts - change
            if not np.any(largest >= NEWTON_TOLERANCE_VOLTS):
                break
        solved: Mask = largest < NEWTON_TOLERANCE_VOLTS
        # The last correction goes into the exposures too, or charge would be lost.
        turns = -self._side[:, None] * scaled[:, 2, :] * change * steepness
        last = np.matmul(turns[:, None, :].astype(np.float32), slopes)[:, 0, :]
        last += last_exponents
        np.minimum(last, 0.0, out=last)
        self._kept = np.exp(last, out=last)
        remaining = self._open * self._kept
        self.volts, self.moved = volts, self._open_total - remaining.sum(axis=1)
        missed_rates = self._begin_rates - np.matmul(AT_BEGIN.astype(np.float32), rates)
        missed_amperes = self._amperes - amperes @ AT_BEGIN
        weight = EMBEDDED * seconds
        missed = weight * (missed_amperes - signed * (remaining * missed_rates).sum(axis=1))
        growth_at_end = (remaining * slopes[:, 2, :]).sum(axis=1) * steepness[:, 2]
        stiffness = self._farads + weight * (self._coulombs * growth_at_end + self._siemens)
        return solved, np.abs(missed) / stiffness

    def is_two_sided(self, seconds: Array) -> Mask:
        """Tell which steps neglect switching to the other side."""
        other = (self._side[:, None] * (self._imprint[:, None] - self.volts)).max(axis=1)
        unsure: Mask = (other > 0) & (self._softest_rate(other) * seconds >= QUIET_FRACTION)
        if unsure.any():
            shares = 1 / self._up.shape[1] - self._open
            moving = (shares * self._rates(other)).sum(axis=1)
            unsure &= moving * seconds >= QUIET_FRACTION
        return unsure

    def keep(self, good: Mask) -> None:
        """Make these cells' steps theirs."""
        places, kept = self._places[good], self._kept[good]
        up = self._side[good, None] > 0
        before = self._up[good]
        self._group._up[places] = np.where(up, 1 - (1 - before) * kept, before * kept)
        self._group._volts[places] = self.volts[good, 2]
