"""The solver's march compiled to machine code, with loops where numpy has whole arrays.

Importing this module needs numba: use it through pulsetally.simulators.compiled. What chooses
the steps, and the circuit, is the very code that runs otherwise; only what runs over all
regions is written anew here, as loops.
"""

import math
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numba import config, float64, int64, njit, typeof
from numba.core.errors import NumbaError
from numba.extending import intrinsic, overload, register_jitable

from pulsetally.simulators import cell, circuit, collocation, march, trajectory
from pulsetally.simulators.cell import LEAST_DRIVING_VOLTS, Cell, CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring, node_current
from pulsetally.simulators.collocation import (
    EMBEDDED,
    MATRIX,
    MOST_NEWTON,
    NEWTON_TOLERANCE_VOLTS,
    WEIGHTS_AT_BEGIN,
    Equations,
    Point,
    Trial,
    Triple,
    correction,
    embedded_error,
    emf_at_nodes,
    equations_of,
    point_of,
    unsolved,
)
from pulsetally.simulators.march import FIRST_STRIDE, NEVER, State
from pulsetally.simulators.trajectory import Quintic, value

(_A11, _A12, _A13), (_A21, _A22, _A23), (_A31, _A32, _A33) = MATRIX.tolist()
_W1, _W2, _W3 = WEIGHTS_AT_BEGIN

# Called by the compiled march as they stand.
SHARED = (
    cell.softest_rate,
    circuit.node_current,
    circuit.branch_current,
    circuit.diode_branch_current,
    circuit.wright_omega,
    circuit.clamp_current,
    circuit.clamp_arm,
    collocation.point_of,
    collocation.unsolved,
    collocation.emf_at_nodes,
    collocation.correction,
    collocation.embedded_error,
    collocation.solve3,
    trajectory.quintic_of,
    trajectory.value,
    trajectory.dot,
    trajectory.curve_of,
    trajectory.extrapolate,
    trajectory.samples_of,
    march.is_beyond,
    march.is_quiet,
    march.reach,
    march.softest_is_quiet,
    march.first_step,
    march.find_step,
    march.first_guess,
    march.is_one_sided,
    march.crossing,
)
for _function in SHARED:
    register_jitable(_function)


# exp() as the processor can do it for several numbers at once, which the library's can't:
# x = k ln 2 + r, a power series of r up to r^11/11! (|r| <= ln 2 / 2: the rest is 6e-15), and k
# put into the exponent of the floating-point number. ROUNDER leaves k in the last bits.
_ROUNDER = 1.5 * 2.0**52
_PER_LN2, _LN2_HIGH = 1 / math.log(2), 0.693145751953125
_LN2_LOW = 1.42860682030941723212e-6
_LEAST_EXPONENT = -708.0
_C3, _C4, _C5, _C6, _C7, _C8, _C9, _C10, _C11 = (1 / math.factorial(n) for n in range(3, 12))


def _cast(kind: Any) -> Any:
    def as_kind(_: Any, number: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            return builder.bitcast(arguments[0], context.get_value_type(signature.return_type))

        return kind(number), generate

    return intrinsic(as_kind)


_as_bits, _as_float = _cast(int64), _cast(float64)


def _exp(exponent: float) -> Any:
    """Return e^exponent of a number up to 0 (or little above)."""
    x = exponent if exponent > _LEAST_EXPONENT else _LEAST_EXPONENT
    shifted = x * _PER_LN2 + _ROUNDER
    whole = shifted - _ROUNDER
    r = x - whole * _LN2_HIGH - whole * _LN2_LOW
    series = _C10 + r * _C11
    series = _C9 + r * series
    series = _C8 + r * series
    series = _C7 + r * series
    series = _C6 + r * series
    series = _C5 + r * series
    series = _C4 + r * series
    series = _C3 + r * series
    series = 0.5 + r * series
    series = 1 + r * series
    series = 1 + r * series
    return series * _as_float((_as_bits(shifted) << 52) + (1023 << 52))


# A product and a sum may be one instruction: it is as exact, and faster.
register_jitable(fastmath={"contract"})(_exp)


def _power(distance: float, alpha: float) -> float:
    inverse = 1 / max(distance, LEAST_DRIVING_VOLTS)
    return inverse if alpha == 1 else inverse**alpha


register_jitable(_power)


def _open_share(equations: Equations, up: Any, side: int, k: int) -> Any:
    if equations.frozen:
        return 0.0
    return equations.weights[k] * (1 - up[k]) if side > 0 else equations.weights[k] * up[k]


register_jitable(_open_share)


def _switching_rate(equations: Equations, up: Any, up_volts: float, down_volts: float) -> float:
    law = equations.law
    up_power, down_power = _power(up_volts, law.alpha), _power(down_volts, law.alpha)
    total = 0.0
    if equations.frozen:
        return total
    for k in range(len(up)):
        rising = _exp(-law.barriers[k] * up_power) * (1 - up[k])
        falling = _exp(-law.barriers[k] * down_power) * up[k]
        total += equations.weights[k] * (rising + falling)
    return law.attempts_per_second * total


def _point_at(
    equations: Equations,
    up: Any,
    node_volts: float,
    side: int,
    emf_volts: float,
    emf_slope: float,
) -> Point:
    law = equations.law
    distance = side * (node_volts - equations.imprint_volts)
    power = _power(distance, law.alpha)
    steepness = law.alpha / max(distance, LEAST_DRIVING_VOLTS)
    shares, rates = np.empty(len(up)), np.empty(len(up))
    moving = steepening = dying = 0.0
    for k in range(len(up)):
        barrier = law.barriers[k] * power
        rate = law.attempts_per_second * _exp(-barrier)
        share = _open_share(equations, up, side, k)
        shares[k], rates[k] = share, rate
        moving += share * rate
        steepening += share * rate * barrier * steepness
        dying += share * rate * rate
    current = node_current(equations.branches, emf_volts, node_volts)
    sums = (moving, steepening, dying)
    return point_of(equations, node_volts, side, shares, rates, sums, current, emf_slope)


def _fill(equations: Equations, distance: float, rates: Any, slopes: Any) -> None:
    law = equations.law
    power = _power(distance, law.alpha)
    steepness = law.alpha / max(distance, LEAST_DRIVING_VOLTS)
    for k in range(len(rates)):
        barrier = law.barriers[k] * power
        rate = law.attempts_per_second * _exp(-barrier)
        rates[k] = rate
        slopes[k] = rate * barrier * steepness


register_jitable(_fill)


def _leave(seconds: float, shares: Any, rates: Any, left: Any) -> None:
    for k in range(len(shares)):
        r1, r2, r3 = rates[0, k], rates[1, k], rates[2, k]
        # Between the nodes a steep rise can make an exposure negative for a moment.
        exponent1 = -seconds * (_A11 * r1 + _A12 * r2 + _A13 * r3)
        exponent2 = -seconds * (_A21 * r1 + _A22 * r2 + _A23 * r3)
        exponent3 = -seconds * (_A31 * r1 + _A32 * r2 + _A33 * r3)
        left[0, k] = shares[k] * _exp(exponent1 if exponent1 < 0.0 else 0.0)
        left[1, k] = shares[k] * _exp(exponent2 if exponent2 < 0.0 else 0.0)
        left[2, k] = shares[k] * _exp(exponent3 if exponent3 < 0.0 else 0.0)


def _sums(shares: Any, left: Any, slopes: Any) -> Any:
    gone1 = gone2 = gone3 = 0.0
    s11 = s12 = s13 = s21 = s22 = s23 = s31 = s32 = s33 = 0.0
    for k in range(len(shares)):
        left1, left2, left3 = left[0, k], left[1, k], left[2, k]
        slope1, slope2, slope3 = slopes[0, k], slopes[1, k], slopes[2, k]
        gone1 += shares[k] - left1
        gone2 += shares[k] - left2
        gone3 += shares[k] - left3
        s11 += left1 * slope1
        s12 += left1 * slope2
        s13 += left1 * slope3
        s21 += left2 * slope1
        s22 += left2 * slope2
        s23 += left2 * slope3
        s31 += left3 * slope1
        s32 += left3 * slope2
        s33 += left3 * slope3
    growth = ((s11, s12, s13), (s21, s22, s23), (s31, s32, s33))
    return (gone1, gone2, gone3), growth


register_jitable(_leave)
# Sums may be taken in any order: the processor adds several numbers at once.
register_jitable(fastmath={"reassoc"})(_sums)


def _try_step(
    equations: Equations,
    begin: Point,
    seconds: float,
    guess_volts: Triple,
    emf_volts: float,
    emf_slope: float,
) -> Trial:
    side, branches = begin.side, equations.branches
    origin_volts = side * equations.imprint_volts
    shares = begin.open_shares
    count = len(shares)
    rates, slopes, left = np.empty((3, count)), np.empty((3, count)), np.empty((3, count))
    v1, v2, v3 = guess_volts
    x1 = x2 = x3 = 0.0
    e1, e2, e3 = emf_at_nodes(emf_volts, emf_slope * seconds)
    currents = (
        node_current(branches, e1, v1),
        node_current(branches, e2, v2),
        node_current(branches, e3, v3),
    )
    converged = False
    for _ in range(MOST_NEWTON):
        currents = (
            node_current(branches, e1, v1),
            node_current(branches, e2, v2),
            node_current(branches, e3, v3),
        )
        _fill(equations, side * v1 - origin_volts, rates[0], slopes[0])
        _fill(equations, side * v2 - origin_volts, rates[1], slopes[1])
        _fill(equations, side * v3 - origin_volts, rates[2], slopes[2])
        _leave(seconds, shares, rates, left)
        gone, growth = _sums(shares, left, slopes)
        x1, x2, x3 = correction(
            equations,
            begin,
            seconds,
            (v1, v2, v3),
            currents,
            gone,
            growth,
        )
        largest = max(abs(x1), abs(x2), abs(x3))
        if not largest < math.inf:
            return unsolved(begin, seconds, guess_volts)
        v1, v2, v3 = v1 - x1, v2 - x2, v3 - x3
        if largest < NEWTON_TOLERANCE_VOLTS:
            converged = True
            break
    if not converged:
        return unsolved(begin, seconds, guess_volts)
    # The last correction goes into the exposures too, or charge would be lost.
    t1, t2, t3 = -side * _A31 * x1, -side * _A32 * x2, -side * _A33 * x3
    kept, shares_left, end_rates = np.empty(count), np.empty(count), np.empty(count)
    moved = moving = steepening = dying = missed_rate = 0.0
    for k in range(count):
        r1, r2, r3 = rates[0, k], rates[1, k], rates[2, k]
        slope = slopes[2, k]
        exposure = _A31 * r1 + _A32 * r2 + _A33 * r3
        exposure += t1 * slopes[0, k] + t2 * slopes[1, k] + t3 * slope
        kept[k] = _exp(-seconds * exposure if exposure > 0.0 else 0.0)
        shares_left[k] = shares[k] * kept[k]
        end_rates[k] = r3 - side * x3 * slope
        moved += shares[k] - shares_left[k]
        moving += shares_left[k] * end_rates[k]
        steepening += shares_left[k] * slope
        dying += shares_left[k] * end_rates[k] * end_rates[k]
        missed_rate += shares_left[k] * (begin.rates[k] - (_W1 * r1 + _W2 * r2 + _W3 * r3))
    amperes, siemens, emf_siemens = currents[2]
    end = point_of(
        equations,
        v3,
        side,
        shares_left,
        end_rates,
        (moving, steepening, dying),
        (amperes - siemens * x3, siemens, emf_siemens),
        emf_slope,
    )
    error_volts = embedded_error(equations, begin, seconds, currents, missed_rate, steepening)
    missed_fraction = EMBEDDED * seconds * abs(missed_rate)
    return Trial(True, seconds, (v1, v2, v3), end, kept, moved, error_volts, missed_fraction)


def _switched(up: Any, kept: Any, side: int) -> Any:
    changed = np.empty(len(up))
    for k in range(len(up)):
        changed[k] = 1 - (1 - up[k]) * kept[k] if side > 0 else up[k] * kept[k]
    return changed


def _up_fraction(weights: Any, up: Any) -> float:
    total = 0.0
    for k in range(len(up)):
        total += weights[k] * up[k]
    return total


def _draw_step(
    quintic: Quintic,
    seconds: float,
    begin_seconds: float,
    count: int,
    place: int,
    times: Any,
    volts: Any,
) -> None:
    for k in range(count):
        share = 1.0 if k == count - 1 else (k + 1) * (1 / count)
        times[place + k] = begin_seconds + seconds * share
        volts[place + k] = value(quintic, share)


def _with_room(numbers: Any, filled: int, more: int) -> Any:
    if filled + more <= len(numbers):
        return numbers
    longer = np.empty(2 * (filled + more))
    for k in range(filled):
        longer[k] = numbers[k]
    return longer


# Written anew: what is to stand for what.
LOOPS = (
    (collocation.switching_rate, _switching_rate),
    (collocation.point_at, _point_at),
    (collocation.try_step, _try_step),
    (march.switched, _switched),
    (march.up_fraction, _up_fraction),
    (march.with_room, _with_room),
    (trajectory.draw_step, _draw_step),
)


def _stand_for(shown: Any, loop: Any) -> None:
    # Not strict: the answer is the same for all types of arguments.
    overload(shown, strict=False)(lambda *arguments: loop)


for _shown, _loop in LOOPS:
    _stand_for(_shown, _loop)


CompileErrors = (NumbaError, RuntimeError, OSError)


def compile_march(folder: Path) -> Any:
    """Load the march from a folder, or compile it and keep it there; one of CompileErrors."""
    example = Cell(CellDescription(regions=1), seed=1)
    equations = equations_of(example, Circuit(example.description, Wiring()))
    state = State(example.up, 0.0, 1, False)
    # numba is told the types once, and compiles for no others.
    arguments = (equations, state, FIRST_STRIDE, 0.0, 0.0, 1.0, True, NEVER)
    types = tuple(typeof(argument) for argument in arguments)
    with kept_in(folder):
        return njit(types, cache=True, nogil=True)(march.march)


@contextmanager
def kept_in(folder: Path) -> Iterator[None]:
    """Have numba keep what it compiles in a folder, and look there first."""
    before, config.CACHE_DIR = config.CACHE_DIR, str(folder)
    try:
        yield
    finally:
        config.CACHE_DIR = before
