"""The table of the simulated bench: one cell, its wiring, the drive and virtual time."""

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.ageing import FULL_CYCLES, Ageing, Tally
from pulsetally.simulators.cell import Cell, CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.drive import PulseTrain, Rest
from pulsetally.simulators.incubation import solver_of
from pulsetally.simulators.repetition import Period
from pulsetally.simulators.ripple import Ripple, ripple_of
from pulsetally.simulators.solver import Ramp, Solver

Array = NDArray[np.float64]

# Pairs of pulses are integrated until two in a row agree in cycles and mean state to the
# first, or until as many as the second have been; at the start, and after each leap.
SETTLED_AT_START = (3e-4, 30)
SETTLED_AGAIN = (1e-3, 8)
LAST_PAIRS = 5
MOST_PAIRS_OF_DOMAINS = 3

# Of a train that has more whole periods than this before it, most are not integrated. The
# last ones are; and, unless the node only sees the mean of them, the first ones, until the
# node is this close to where it repeats, V. After this many, what it still has to go is lost.
MANY_PERIODS = 100
FIRST_PERIODS = 2
LAST_PERIODS = 5
FEWEST_AT_ONCE = 4
REPEATED_VOLTS = 3e-4
MOST_FIRST_PERIODS = 2000
# Of the mean of a train a piece at once is not longer than this part of what is over.
MEAN_PIECE_SHARE = 0.25
# Of a cell whose electrodes touch.
SHORT_OHMS = 5.0


class Observer(Protocol):
    """Whoever watches the table's two voltages."""

    def saw(self, times: Array, terminal_volts: Array, node_volts: Array) -> None:
        """Take one stretch of samples: absolute times (s, strictly rising) and volts.

        The first sample is the instant of the last one before; its terminal voltage
        differs where the EMF or the relay jumped. Straight lines between samples are
        within 0.1 mV of the course. The arrays are not to be changed.
        """


class Table:
    """A cell in its wiring, driven by an EMF, in virtual time.

    Starts at 0 s, fully down, discharged, at rest at 0 V and with the output relay off.
    now: virtual time, s. delivered: whole pulses of an amplitude other than 0 that
    reached the terminal, the relay being on from begin to end. presets: those of them
    that drive the cell down, that is with a level or a base below 0 V.
    """

    def __init__(self, cell: CellDescription, wiring: Wiring, *, seed: int = 1) -> None:
        self.now = 0.0
        self.delivered = self.presets = 0
        self._cell = Cell(cell, seed=seed)
        self._circuit = Circuit(cell, wiring)
        self._ageing = Ageing(self._cell, self._circuit, seed=seed)
        self._solver = solver_of(self._cell, self._circuit)
        self._drive: PulseTrain | Rest = Rest()
        self._observers: list[Observer] = []
        self._needing_detail: list[Callable[[], bool]] = []
        self._period: Period | None = None
        # Pulses of the present train that are settled: delivered, or missed.
        self._settled_pulses = 0

    @property
    def polarization(self) -> float:
        """Polarization of the cell, C/m2."""
        return self._cell.polarization

    @property
    def up_fraction(self) -> float:
        """Part of the cell that is up, 0 to 1."""
        return self._cell.up_fraction

    @property
    def remanent_polarization(self) -> float:
        """Remanent polarization that is not worn out, C/m2."""
        return self._cell.remanent_polarization

    @property
    def imprint_volts(self) -> float:
        """Voltage at which the cell is driven neither up nor down now, V."""
        return self._cell.imprint_volts

    @property
    def cycles(self) -> float:
        """Switching cycles so far: the whole cell up and down again is one."""
        return self._ageing.tally.cycles

    @property
    def broken(self) -> bool:
        """Whether the cell has become a short."""
        return self._ageing.broken

    @property
    def connected_cell(self) -> bool:
        """Whether the cell is connected to the node, as it is until it opens."""
        return self._circuit.cell_on

    def open_cell(self) -> None:
        """Let the cell lose contact, for good: the node keeps its voltage and the probe.

        The cell keeps its state, and ages as one at rest at 0 V.
        """
        if not self._circuit.cell_on:
            return
        self._circuit.disconnect_cell()
        self._cell.frozen = True
        # Not the cell's own solver, which may wait for an incubation to end.
        self._solver = Solver(self._cell, self._circuit, node_volts=self.node_volts)

    def short_cell(self, ohms: float = SHORT_OHMS) -> None:
        """Let the cell become a short of so many ohms, above 0, for good; once at most.

        One that is open already shows nothing of it.
        """
        if not 0 < ohms < math.inf:
            raise ValueError(f"ohms is {ohms}; a short has more than 0 and not for ever many")
        if not self._ageing.broken:
            self._ageing.broken = True
            self._circuit.short_through(ohms)

    @property
    def breakdown_cycles(self) -> float:
        """Cycles after which the cell becomes a short; inf where it never does."""
        return self._ageing.last_cycles

    @property
    def kelvin(self) -> float | None:
        """Temperature of the cell, K; None when it knows none."""
        return self._ageing.kelvin

    def set_kelvin(self, kelvin: float) -> None:
        """Bring the cell to a temperature, K, at once; ValueError when it knows none."""
        self._ageing.set_kelvin(kelvin)

    @property
    def node_volts(self) -> float:
        """Voltage across the cell, V."""
        return self._solver.node_volts

    @property
    def terminal_volts(self) -> float:
        """Voltage at the generator's terminal, V; the node's while the relay is off."""
        emf_volts = np.array([self._drive.volts_at(self.now)])
        return float(self._circuit.terminal_volts(emf_volts, np.array([self.node_volts]))[0])

    def observe(
        self, observer: Observer, *, needs_detail: Callable[[], bool] | None = None
    ) -> None:
        """Show every stretch from now on to an observer.

        needs_detail: asked while a long train goes on; where it says no, most of the
        train's periods are shown as one stretch at rest.
        """
        self._observers.append(observer)
        if needs_detail is not None:
            self._needing_detail.append(needs_detail)

    def connect(self, on: bool) -> None:
        """Switch the output relay; a pulse under way is lost either way."""
        if on == self._circuit.relay_on:
            return
        self._circuit.relay_on = on
        if isinstance(self._drive, PulseTrain):
            self._settled_pulses = self._drive.pulses_begun(self.now)

    def rest_at(self, volts: float) -> None:
        """Put the EMF at a constant, V, at once and until something else is said."""
        self._drive = Rest(base_volts=volts)

    def play(self, train: PulseTrain) -> None:
        """Play a train; until it starts the EMF is at the train's base."""
        if train.start_seconds < self.now:
            raise ValueError(
                f"the train starts at {train.start_seconds} s, which is before now, {self.now} s"
            )
        self._drive, self._settled_pulses = train, 0

    def stop_drive(self) -> None:
        """Abort: the EMF falls to its base at once."""
        self.rest_at(self._drive.base_volts)

    def advance(self, seconds: float) -> None:
        """Let this many seconds pass, at least 0; observers see each stretch of them."""
        if not 0 <= seconds < math.inf:
            raise ValueError(f"seconds is {seconds}; time passes forwards and not for ever")
        self._advance_to(self.now + seconds, in_detail=False)

    def _advance_to(self, end_seconds: float, *, in_detail: bool) -> None:
        while self.now < end_seconds:
            if not in_detail and self._pass_many_periods(end_seconds):
                continue
            stretch = self._drive.stretch_at(self.now)
            stop_seconds = min(stretch.end_seconds, end_seconds)
            stop_seconds = self._up_to_date_until(stop_seconds)
            slope = 0.0
            if stretch.begin_volts != stretch.end_volts:
                slope = (stretch.end_volts - stretch.begin_volts) / (stretch.end_seconds - self.now)
            self._pass(
                Ramp(
                    begin_volts=stretch.begin_volts,
                    volts_per_second=slope,
                    seconds=stop_seconds - self.now,
                ),
                stop_seconds,
            )
            self._count_pulses()

    def _pass_many_periods(self, end_seconds: float) -> bool:
        """Pass most of the train's periods before an instant; False where they are few.

        Lost are, behind a diode, what the node moves by after MOST_FIRST_PERIODS of them, and
        in what is left out altogether the order of events: ageing is that of a mean period.
        """
        train = self._drive
        if not isinstance(train, PulseTrain) or train.count <= MANY_PERIODS:
            return False
        index = train.pulses_begun(self.now)
        # Only at the very begin of a pulse; the last one begun before the end is left.
        if index >= train.count or train.pulse_start(index) != self.now:
            return False
        whole = train.pulses_begun(end_seconds) - 1 - index
        if whole <= MANY_PERIODS:
            return False
        if any(needs() for needs in self._needing_detail):
            return False
        ripple = ripple_of(train, self._circuit)
        seconds = whole * train.period_seconds
        if ripple and ripple.is_harmless(self._cell, self.node_volts, seconds):
            self._pass_mean(train, ripple, index, whole - LAST_PERIODS)
            return True
        integrated = 0
        moved_volts = math.inf
        while whole > LAST_PERIODS and not any(needs() for needs in self._needing_detail):
            begin, begin_volts = self._ageing.tally, self.node_volts
            memory = self._solver.memory
            self._period = Period(self._cell, repeats=whole)
            self._advance_to(train.pulse_start(index + 1), in_detail=True)
            period, self._period = self._period, None
            index, whole, integrated = index + 1, whole - 1, integrated + 1
            before_volts, moved_volts = moved_volts, self.node_volts - begin_volts
            lag_volts = self._circuit.lag_volts(moved_volts, before_volts, train.period_seconds)
            last = self._ageing.tally.since(begin)
            repeated = lag_volts < REPEATED_VOLTS and self._ageing.rest_repeats(last)
            alike = self._solver.most_repeats(memory, train.period_seconds)
            if integrated >= MOST_FIRST_PERIODS:
                repeated, alike = True, alike or math.inf
            if integrated < FIRST_PERIODS or not repeated:
                continue
            if self._ageing.rests_throughout(last):
                period = period.without_losses()
            many, mean = self._most_periods(period, last, int(min(alike, whole - LAST_PERIODS)))
            if many >= FEWEST_AT_ONCE:
                self._cell.up = period.after(many)
                self._solver.repeat(memory, many)
                self._repeat_periods(train, mean, index, many)
                index, whole = index + many, whole - many
        return integrated > 0

    def _most_periods(self, period: Period, last: Tally, periods: int) -> tuple[int, Tally]:
        """Return how many periods may come at once, and the mean one of them."""
        volts = self._cell.switchable_coulombs / self._circuit.farads
        many = period.most_repeats(periods, switched_volts=volts)
        mean = last
        # Fewer periods have another mean, which allows another number of them.
        for _ in range(2):
            if many < 1:
                break
            cycles, state_seconds = period.mean_use(many)
            mean = last._replace(cycles=cycles, state_seconds=state_seconds)
            many = int(max(1, min(many, self._ageing.most_repeats(mean))))
            many = self._ageing.most_rests(mean, self._ageing.most_held(mean, many))
        return many, mean

    def _repeat_periods(self, train: PulseTrain, mean: Tally, index: int, many: int) -> None:
        self._ageing.repeat(mean, many)
        begin_seconds = self.now
        self.now = train.pulse_start(index + many)
        self._leave_out(train, index, many, begin_seconds, self.node_volts)

    def _pass_mean(self, train: PulseTrain, ripple: Ripple, index: int, many: int) -> None:
        """Pass periods that only the mean of is seen by the node."""
        begin_seconds, begin_volts = self.now, self.node_volts
        end_seconds = train.pulse_start(index + many)
        self._solver.node_volts -= ripple.begin_volts
        while self.now < end_seconds:
            # Ageing, which comes between pieces, slows down; so do what it acts on.
            longest = max(train.period_seconds, MEAN_PIECE_SHARE * (self.now - begin_seconds))
            later_seconds = max(self.now + longest, math.nextafter(self.now, math.inf))
            stop_seconds = self._up_to_date_until(min(end_seconds, later_seconds))
            seconds = stop_seconds - self.now
            ramp = Ramp(begin_volts=ripple.mean_volts, volts_per_second=0.0, seconds=seconds)
            self._integrate(ramp, sampled=False)
            self.now = stop_seconds
        self._solver.node_volts += ripple.begin_volts
        self._leave_out(train, index, many, begin_seconds, begin_volts)

    def _leave_out(
        self, train: PulseTrain, index: int, many: int, begin_seconds: float, begin_volts: float
    ) -> None:
        """Count periods that have been passed, and show them as one stretch at rest."""
        if self._circuit.relay_on:
            self._deliver(train, many)
        self._settled_pulses = index + many
        self._show_rest(begin_seconds, begin_volts)

    def cycle(self, down: PulseTrain, up: PulseTrain, *, pairs: int) -> None:
        """Deliver pairs of pulses, down then up, from now on, and let their time pass.

        Each train is one pulse (a count of 1); its period is how long it takes, and its
        start is not looked at. Some pairs are integrated: the first until they repeat, the
        last, and some between where wear or imprint change what a pair does (none where
        each pair switches the whole cell). All others are added to cycles, wear, breakdown,
        delivered and time in closed form; observers see them as one stretch at rest. A
        breakdown falls on a whole pair.
        Raises ValueError for a train of several pulses and for less than one pair.
        """
        for name, train in (("down", down), ("up", up)):
            if train.count != 1:
                raise ValueError(f"{name} has a count of {train.count}; a pair has one of each")
        if pairs < 1:
            raise ValueError(f"pairs is {pairs}; it must be at least 1")
        before: Tally | None = None
        integrated = 0
        alike, most_pairs = SETTLED_AT_START
        while pairs > 0:
            begin = self._ageing.tally
            for train in (down, up):
                self.play(replace(train, start_seconds=self.now))
                self.advance(train.period_seconds)
            pairs -= 1
            integrated += 1
            pair = self._ageing.tally.since(begin)
            settled = before is not None and _differ(before, pair) < alike
            before = pair
            # Where a pair leaves traces of the one before, the last ones are integrated too.
            last = 1 if pair.cycles > FULL_CYCLES else LAST_PAIRS
            if self._cell.description.domains is not None:
                # Domains are dealt anew in each pair, so that no two are alike.
                most_pairs = MOST_PAIRS_OF_DOMAINS
            if pairs > last and (settled or integrated >= most_pairs):
                many = int(max(1, min(pairs - last, self._ageing.most_repeats(pair))))
                many = self._ageing.most_rests(pair, self._ageing.most_held(pair, many))
                self._repeat(down, up, pair, many)
                pairs -= many
                before, integrated = None, 0
                alike, most_pairs = SETTLED_AGAIN

    def _repeat(self, down: PulseTrain, up: PulseTrain, pair: Tally, repeats: int) -> None:
        self._ageing.repeat(pair, repeats)
        begin_seconds = self.now
        self.now += repeats * (down.period_seconds + up.period_seconds)
        if self._circuit.relay_on:
            for train in (down, up):
                self._deliver(train, repeats)
        self._show_rest(begin_seconds, self.node_volts)

    def _show_rest(self, begin_seconds: float, begin_volts: float) -> None:
        volts = np.array([begin_volts, self.node_volts])
        terminal_volts = np.full(2, self.terminal_volts)
        for observer in self._observers:
            observer.saw(np.array([begin_seconds, self.now]), terminal_volts, volts)

    def _up_to_date_until(self, stop_seconds: float) -> float:
        seconds = stop_seconds - self.now
        longest = self._ageing.longest_seconds(seconds)
        if longest == seconds:
            return stop_seconds
        # The clock is coarse late in virtual time, but it must go on.
        return max(self.now + longest, math.nextafter(self.now, math.inf))

    def _integrate(self, ramp: Ramp, *, sampled: bool) -> tuple[Array, Array]:
        """Integrate along a ramp and let the cell age by it; return the node's course."""
        up_before, volts_before = self.up_fraction, self.node_volts
        times, node_volts = self._solver.run(ramp, sampled=sampled)
        # A cell that is open has nothing of the node's voltage.
        share = 1.0 if self._circuit.cell_on else 0.0
        if self._period is not None:
            self._period.add(times, share * node_volts)
        kept = self._ageing.add(
            ramp.seconds,
            up_before=up_before,
            volts_before=share * volts_before,
            volts_after=share * self.node_volts,
        )
        retention = self._cell.description.retention
        if self._period is not None and retention is not None:
            self._period.lose(retention.side, kept)
        return times, node_volts

    def _pass(self, ramp: Ramp, stop_seconds: float) -> None:
        times, node_volts = self._integrate(ramp, sampled=bool(self._observers))
        begin_seconds, self.now = self.now, stop_seconds
        if not self._observers:
            return
        emf_volts = ramp.begin_volts + ramp.volts_per_second * times
        times = begin_seconds + times
        times[-1] = stop_seconds
        if not (times[1:] > times[:-1]).all():
            # Late in virtual time the clock is coarser than the solver's shortest steps.
            rising = np.concatenate(([True], np.diff(times) > 0))
            rising[:-1] &= times[:-1] < stop_seconds
            rising[-1] = True
            times, emf_volts, node_volts = times[rising], emf_volts[rising], node_volts[rising]
        terminal_volts = self._circuit.terminal_volts(emf_volts, node_volts)
        for observer in self._observers:
            observer.saw(times, terminal_volts, node_volts)

    def _count_pulses(self) -> None:
        train = self._drive
        if not isinstance(train, PulseTrain):
            return
        ended = train.pulses_ended(self.now)
        if ended > self._settled_pulses:
            if self._circuit.relay_on:
                self._deliver(train, ended - self._settled_pulses)
            self._settled_pulses = ended

    def _deliver(self, train: PulseTrain, pulses: int) -> None:
        if train.level_volts == train.base_volts:
            return
        self.delivered += pulses
        if min(train.level_volts, train.base_volts) < 0:
            self.presets += pulses


def _differ(one: Tally, other: Tally) -> float:
    """Return by how much two pairs differ, in cycles or in the mean state."""
    if one.recoveries != other.recoveries:
        return math.inf
    return max(
        abs(one.cycles - other.cycles),
        abs(one.state_seconds / one.seconds - other.state_seconds / other.seconds),
    )
