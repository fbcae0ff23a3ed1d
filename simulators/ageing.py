"""What a cell has gone through, and what it did to it: brought up to date between pieces.

While the table integrates one straight piece of the EMF the cell is as it was at the
piece's begin; afterwards the piece's switching and time are added up here. So temperature,
imprint and wear inside a pulse are those at its begin, to within that pulse's own doing.
"""

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import Cell
from pulsetally.simulators.circuit import Circuit
from pulsetally.simulators.wear import Fatigue, ImprintGrowth

Array = NDArray[np.float64]

# The imprint voltage may move by this much, V, or by what a fifth of a decade moves it, while
# the cell is integrated with the old one.
IMPRINT_STEP_VOLTS = 5e-3
IMPRINT_STEP_DECADES = 0.2

# Many pairs of pulses at once: until the remanent polarization has lost this part (unless
# each pair switches the whole cell anyhow, or next to nothing is left), or imprint has moved
# by so much, V.
FATIGUE_STEP = 0.1
NEGLIGIBLE_KEPT = 0.01
FULL_CYCLES = 0.999
IMPRINT_JUMP_VOLTS = 0.01
# Or until a rest that goes on all the time has lost this part. And a rest in each of them is
# the same one if it is as long to within this part of a pair.
REST_LOSS = 0.02
REST_TOLERANCE = 1e-2
# Many pairs that wear and recover at once: until the wear has changed by this part of itself.
_WEAR_STEP = 0.01

# Log of the traps' rates times the onset time: at these the trapezoid rule gives the
# integral below to 1e-8, from nothing to 1e14 onset times.
_TRAP_STEP = 0.5
_TRAP_LOGS = np.arange(-40.0, 5.0, _TRAP_STEP)


class Traps:
    """The memory of the imprint: traps that follow the polarization, each at its own rate.

    A trap of rate s has relaxed by 1 - exp(-s t) after t. With a density exp(-s t0)/s of
    rates all of them together give the integral from 0 to infinity of
    (1 - exp(-s t)) exp(-s t0)/s ds = ln(1 + t/t0) (Frullani): the log-time law, and with
    it what a history of several states leaves behind. The state held now first turns the
    traps that are fast enough; what was held for years fades only in years. A reversal
    resets nothing at once: if it did, the preset of a reading would wipe out what the
    reading is to find.
    """

    def __init__(self, growth: ImprintGrowth) -> None:
        self._rates = np.exp(_TRAP_LOGS) / growth.onset_seconds
        weights = _TRAP_STEP * np.exp(-np.exp(_TRAP_LOGS)) / math.log(10)
        self._weights = growth.volts_per_decade * weights
        self._turned: Array = np.zeros_like(self._rates)

    def shift_volts(self) -> float:
        """Return how far the imprint voltage has moved, V; below 0 after the up state."""
        return -float(self._weights @ self._turned)

    def after(self, seconds: float, state: float) -> Array:
        """Return the traps after a state (-1 down to 1 up) has been held for seconds."""
        missing = state - self._turned
        turned: Array = self._turned - missing * np.expm1(-self._rates * seconds)
        return turned

    def hold(self, seconds: float, state: float) -> None:
        """Let a state be held for seconds."""
        self._turned = self.after(seconds, state)

    def movement_volts(self, seconds: float, state: float) -> float:
        """Return how far holding a state for seconds would move the imprint voltage, V."""
        return abs(float(self._weights @ (self.after(seconds, state) - self._turned)))

    def slow_movement_volts(self, seconds: float, state: float, period_seconds: float) -> float:
        """Return what of that comes from traps slower than a period, V."""
        slow = self._weights * (self._rates * period_seconds < 1)
        return abs(float(slow @ (self.after(seconds, state) - self._turned)))

    def hold_slow(self, seconds: float, state: float, period_seconds: float) -> None:
        """Hold a state, for traps slower than a period; the others repeat in each of them."""
        slow = self._rates * period_seconds < 1
        self._turned = np.where(slow, self.after(seconds, state), self._turned)


class Tally(NamedTuple):
    """Running sums of a cell's history.

    seconds: virtual time. cycles: switched. recoveries: strong presets. state_seconds:
    integral of the state (-1 down to 1 up) over time, s. rest_seconds: of the present rest
    until now, as long as it would take at the reference temperature (no sum: it starts again).
    """

    seconds: float
    cycles: float
    recoveries: int
    state_seconds: float
    rest_seconds: float = 0.0

    def since(self, begin: "Tally") -> "Tally":
        """Return what came since an earlier tally."""
        return Tally(
            self.seconds - begin.seconds,
            self.cycles - begin.cycles,
            self.recoveries - begin.recoveries,
            self.state_seconds - begin.state_seconds,
            self.rest_seconds - begin.rest_seconds,
        )


class Ageing:
    """Keep a cell's history and change the cell, and its circuit, by it.

    tally: what has happened. kelvin: temperature now, None without a Thermal. broken:
    whether the cell is a short, as it is from last_cycles on.
    """

    def __init__(self, cell: Cell, circuit: Circuit, *, seed: int) -> None:
        self.tally = Tally(0.0, 0.0, 0, 0.0)
        self.kelvin: float | None = None
        self.broken = False
        self._cell, self._circuit = cell, circuit
        self._options = options = cell.description
        growth = options.imprint_growth
        self._traps = Traps(growth) if growth is not None else None
        self._worn_cycles = 0.0
        self._is_strong = False
        self.last_cycles = math.inf
        if options.breakdown is not None:
            # A stream of its own: the domains are dealt the same with and without it.
            survival = 1 - np.random.default_rng((seed, 1)).random()
            self.last_cycles = options.breakdown.cycles_at(survival)
        if options.thermal is not None:
            self.set_kelvin(options.thermal.kelvin)

    def set_kelvin(self, kelvin: float) -> None:
        """Bring the cell to a temperature at once; ValueError without a Thermal."""
        thermal = self._options.thermal
        if thermal is None:
            raise ValueError("this cell knows no temperature; describe it with a Thermal")
        if not 0 < kelvin < math.inf:
            raise ValueError(f"kelvin is {kelvin}; it must be above 0")
        self.kelvin = kelvin
        self._cell.scale_activations(thermal.activation_factor(kelvin))

    def longest_seconds(self, seconds: float) -> float:
        """Return how much of seconds may pass before the cell must be brought up to date."""
        growth = self._options.imprint_growth
        if self._traps is None or growth is None:
            return seconds
        state, faster = self._state(), self._imprint_speed()
        most_volts = max(IMPRINT_STEP_VOLTS, IMPRINT_STEP_DECADES * growth.volts_per_decade)
        while self._traps.movement_volts(faster * seconds, state) > most_volts:
            seconds /= 4
        return seconds

    def add(
        self, seconds: float, *, up_before: float, volts_before: float, volts_after: float
    ) -> float:
        """Add a piece that has just been integrated; return what is kept of Retention's side.

        up_before: up fraction at its begin. volts_*: of the node at both ends.
        """
        up_after = self._cell.up_fraction
        cycles = abs(up_after - up_before) / 2
        state = up_before + up_after - 1
        self._use(cycles)
        recovered = self._recover(volts_after)
        if self._traps is not None:
            self._traps.hold(self._imprint_speed() * seconds, state)
            self._move_imprint()
        done = self.tally
        self.tally = Tally(
            done.seconds + seconds,
            done.cycles + cycles,
            done.recoveries + recovered,
            done.state_seconds + state * seconds,
            done.rest_seconds,
        )
        kept = self._rest(seconds, volts_before, volts_after)
        self._break_down()
        return kept

    def most_repeats(self, pair: Tally) -> float:
        """Return how often a pair may be repeated before its own effect changes."""
        repeats = math.inf
        fatigue = self._options.fatigue
        kept = 0.0 if fatigue is None else fatigue.kept(self._worn_cycles)
        partly = 0 < pair.cycles < FULL_CYCLES and not pair.recoveries
        if fatigue is not None and partly and kept > NEGLIGIBLE_KEPT:
            worn = fatigue.cycles_at(kept * (1 - FATIGUE_STEP))
            repeats = (worn - self._worn_cycles) / pair.cycles
        if self.last_cycles < math.inf and not self.broken and pair.cycles > 0:
            repeats = min(repeats, math.ceil((self.last_cycles - self.tally.cycles) / pair.cycles))
        return repeats

    def most_held(self, pair: Tally, repeats: int) -> int:
        """Return how many of these repeats may pass before the imprint changes the pair."""
        if self._traps is None:
            return repeats
        state, faster = pair.state_seconds / pair.seconds, self._imprint_speed() * pair.seconds
        while (
            self._traps.slow_movement_volts(faster * repeats, state, faster) > IMPRINT_JUMP_VOLTS
            and repeats > 1
        ):
            repeats = max(1, repeats // 4)
        return repeats

    def repeat(self, pair: Tally, repeats: int) -> None:
        """Add a pair of pulses many times over, in closed form."""
        done = self.tally
        self.tally = Tally(
            done.seconds + repeats * pair.seconds,
            done.cycles + repeats * pair.cycles,
            done.recoveries + repeats * pair.recoveries,
            done.state_seconds + repeats * pair.state_seconds,
            done.rest_seconds,
        )
        if self.rests_throughout(pair):
            self._rest_on(repeats * pair.rest_seconds)
        if pair.recoveries:
            self._alternate(pair.cycles, repeats)
        else:
            self._use(repeats * pair.cycles)
        if self._traps is not None:
            faster = self._imprint_speed() * pair.seconds
            self._traps.hold_slow(faster * repeats, pair.state_seconds / pair.seconds, faster)
            self._move_imprint()
        self._break_down()

    def _state(self) -> float:
        return 2 * self._cell.up_fraction - 1

    def _imprint_speed(self) -> float:
        growth = self._options.imprint_growth
        return self._speed(growth.activation_ev if growth is not None else 0.0)

    def _speed(self, activation_ev: float) -> float:
        thermal = self._options.thermal
        if thermal is None or self.kelvin is None:
            return 1.0
        return thermal.acceleration(activation_ev, self.kelvin)

    def _move_imprint(self) -> None:
        if self._traps is not None:
            self._cell.imprint_volts = self._options.imprint_volts + self._traps.shift_volts()

    def _use(self, cycles: float) -> None:
        if self._options.fatigue is not None and cycles > 0:
            self._worn_cycles += cycles
            self._cell.weaken(self._options.fatigue.kept(self._worn_cycles))

    def _recover(self, volts: float) -> bool:
        """Tell whether the cell is driven strongly down only now, and recover if so."""
        fatigue = self._options.fatigue
        if fatigue is None:
            return False
        was_strong, self._is_strong = self._is_strong, volts <= -fatigue.recovery_volts
        if was_strong or not self._is_strong:
            return False
        self._worn_cycles = fatigue.recovered(self._worn_cycles)
        self._cell.weaken(fatigue.kept(self._worn_cycles))
        return True

    def _alternate(self, cycles: float, repeats: int) -> None:
        fatigue = self._options.fatigue
        if fatigue is None:
            return
        self._worn_cycles = worn_after(fatigue, self._worn_cycles, cycles, repeats)
        self._cell.weaken(fatigue.kept(self._worn_cycles))

    def rests_throughout(self, pair: Tally) -> bool:
        """Tell whether a pair, or a period, was all of it a rest, which goes on and on."""
        retention = self._options.retention
        if retention is None:
            return False
        whole = self._speed(retention.activation_ev) * pair.seconds
        return pair.rest_seconds > (1 - REST_TOLERANCE) * whole

    def rest_repeats(self, period: Tally) -> bool:
        """Tell whether a period loses as much as the one after it, or rests throughout."""
        retention = self._options.retention
        if retention is None or self.rests_throughout(period):
            return True
        whole = self._speed(retention.activation_ev) * period.seconds
        return abs(period.rest_seconds) < REST_TOLERANCE * whole

    def most_rests(self, pair: Tally, repeats: int) -> int:
        """Return how many of these repeats may pass before rest has lost too much."""
        while self.rests_throughout(pair) and repeats > 1:
            if self._kept_in(repeats * pair.rest_seconds) > 1 - REST_LOSS:
                break
            repeats = max(1, repeats // 4)
        return repeats

    def _rest(self, seconds: float, volts_before: float, volts_after: float) -> float:
        """Lose some of the kept state; a piece that ends at rest is rest from its begin."""
        retention = self._options.retention
        if retention is None:
            return 1.0
        if max(abs(volts_before), abs(volts_after)) > retention.rest_volts:
            self.tally = self.tally._replace(rest_seconds=0.0)
        if abs(volts_after) > retention.rest_volts:
            return 1.0
        return self._rest_on(self._speed(retention.activation_ev) * seconds)

    def _rest_on(self, seconds: float) -> float:
        """Let a rest go on, s at the reference temperature; return what is kept."""
        retention, kept = self._options.retention, self._kept_in(seconds)
        self.tally = self.tally._replace(rest_seconds=self.tally.rest_seconds + seconds)
        if retention is not None:
            self._cell.lose(retention.side, kept)
        return kept

    def _kept_in(self, seconds: float) -> float:
        """Return what more of a rest would keep of each region's part on Retention's side."""
        retention, so_far = self._options.retention, self.tally.rest_seconds
        if retention is None:
            return 1.0
        return (1 + retention.kept(so_far + seconds)) / (1 + retention.kept(so_far))

    def _break_down(self) -> None:
        breakdown = self._options.breakdown
        if breakdown is not None and not self.broken and self.tally.cycles >= self.last_cycles:
            self.broken = True
            self._circuit.short_through(breakdown.short_ohms)


def worn_after(fatigue: Fatigue, worn_cycles: float, cycles: float, pairs: int) -> float:
    """Return the cycles that tell the wear after pairs that wear and recover in turn.

    worn_cycles: before them. cycles: of one pair, which goes down first: half of its cycles
    come before the recovery. Where a pair changes little, many are taken at once: their
    changes are nearly a geometric series, to within 1 % of the wear.
    """
    if fatigue.recovered_share == 0:
        return worn_cycles + pairs * cycles

    def after_one(worn: float) -> float:
        return fatigue.recovered(worn + cycles / 2) + cycles / 2

    while pairs > 0:
        change = after_one(worn_cycles) - worn_cycles
        if change == 0:
            break
        many = 1
        if abs(change) < _WEAR_STEP * worn_cycles / 4:
            lower, upper = (worn_cycles * (1 + side * _WEAR_STEP) for side in (-1, 1))
            slope = (after_one(upper) - after_one(lower)) / (upper - lower)
            # What is left of a deviation after one pair, as a logarithm below 0.
            log = math.log(min(max(slope, 0.1), 1 - 1e-15))
            # All the pairs that there could be change the wear by this.
            whole = change / -math.expm1(log)
            share = min(_WEAR_STEP * worn_cycles / abs(whole), 1.0)
            many = pairs if share == 1 else max(1, min(pairs, int(math.log1p(-share) / log)))
            change = whole * -math.expm1(many * log)
        worn_cycles += change
        pairs -= many
    return worn_cycles
