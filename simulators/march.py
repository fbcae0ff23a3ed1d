"""Choose the steps along a straight line of the EMF, and draw what they find.

Everything here is a function of plain numbers and arrays. The solver calls march() as it
stands, or compiled with everything it calls (pulsetally.simulators.kernel): both take the
same steps.
"""

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.cell import FULLY_DOWN_FRACTION, USED_FRACTION, softest_rate
from pulsetally.simulators.circuit import node_current
from pulsetally.simulators.collocation import (
    NODES,
    Equations,
    Point,
    Trial,
    Triple,
    point_at,
    switching_rate,
    try_step,
    unsolved,
)
from pulsetally.simulators.trajectory import Quintic, curve_of, draw_step, extrapolate, samples_of

Array = NDArray[np.float64]

# Largest embedded error of a step, V. The embedded formula is of order 3 and the result
# of order 5, so what is really lost in a step is far less.
STEP_TOLERANCE_VOLTS = 2e-3
# Largest embedded error of the part that switches: where the source holds the node, or little
# charge moves it, its voltage tells nothing of that.
STEP_TOLERANCE_FRACTION = 1e-3
# Largest distance between the dense output and the step's inner nodes, V.
DENSE_TOLERANCE_VOLTS = 1e-4
# A diode that begins to conduct bends the course more sharply than its nodes tell.
DIODE_CAUTION = 0.3
# Right after a kink a fast transient may still run, which hides from that measure.
KINK_CAUTION = 0.25
LARGEST_GROWTH, LARGEST_SHRINK, SAFETY = 12.0, 0.15, 0.85
FIRST_MOVE_VOLTS = 0.3
LEAST_SECONDS = 1e-24
# A stretch over which less than this part of the cell could switch is left unswitched.
QUIET_FRACTION = 1e-12
_FIRST_ROOM = 256


class State(NamedTuple):
    """What a march changes.

    up: part of each region that is up. volts: of the node. side: to which the cell was
    driven last, 1 up or -1 down. used: whether it has been up since domains were dealt.
    """

    up: Array
    volts: float
    side: int
    used: bool


class Stride(NamedTuple):
    """How the steps have been, for the next one on the same line.

    next_seconds: how long to try; 0 for the first. quintic, seconds, side: of the last step;
    0 seconds for none.
    """

    next_seconds: float
    quintic: Quintic
    seconds: float
    side: int


FIRST_STRIDE = Stride(0.0, (0.0, 0.0, 0.0, 0.0, 0.0, 0.0), 0.0, 1)


class Stop(NamedTuple):
    """Where to stop early: once the node, times side, is below volts times side; side 0: never."""

    side: int
    volts: float


NEVER = Stop(0, 0.0)


class Course(NamedTuple):
    """How far a march has come.

    times: s after its begin, rising; volts: of the node there. quiet: from here on nothing
    switches. stopped: by Stop. failed: no step, however short, satisfies the equations. None
    of these: it came to the end, or to where domains are to be dealt.
    """

    times: Array
    volts: Array
    state: State
    stride: Stride
    seconds: float
    quiet: bool
    stopped: bool
    failed: bool


def march(
    equations: Equations,
    state: State,
    stride: Stride,
    emf_volts: float,
    emf_slope: float,
    seconds: float,
    sampled: bool,
    stop: Stop,
) -> Course:
    """Take steps along a line of the EMF: emf_volts now, rising by emf_slope (V/s)."""
    up, volts, side, used = state.up, state.volts, state.side, state.used
    times_seen, volts_seen = np.empty(_FIRST_ROOM), np.empty(_FIRST_ROOM)
    seen = 0
    done_seconds = 0.0
    quiet = stopped = failed = False
    if stride.next_seconds == 0 and volts != equations.imprint_volts:
        side = 1 if volts > equations.imprint_volts else -1
    begin = point_at(equations, up, volts, side, emf_volts, emf_slope)
    if stride.next_seconds == 0:
        first_seconds = first_step(equations, begin, emf_volts + emf_slope * seconds, seconds)
        stride = Stride(first_seconds, stride.quintic, 0.0, side)
    while done_seconds < seconds:
        emf_now = emf_volts + emf_slope * done_seconds
        rest_seconds = seconds - done_seconds
        if equations.linear and is_quiet(
            equations, up, begin, emf_now, emf_now + emf_slope * rest_seconds, rest_seconds
        ):
            quiet = True
            break
        trial, stride = find_step(equations, up, begin, stride, emf_now, emf_slope, rest_seconds)
        if not trial.solved:
            failed = True
            break
        last = trial.seconds >= rest_seconds
        before_seconds = done_seconds
        done_seconds = seconds if last else done_seconds + trial.seconds
        count = samples_of(stride.quintic) if sampled else 1
        times_seen = with_room(times_seen, seen, count)
        volts_seen = with_room(volts_seen, seen, count)
        draw_step(
            stride.quintic, trial.seconds, before_seconds, count, seen, times_seen, volts_seen
        )
        seen += count
        times_seen[seen - 1] = done_seconds
        begin, volts, side = trial.end, trial.volts[2], trial.end.side
        if not equations.frozen:
            up = switched(up, trial.kept, side)
        if is_beyond(stop, volts):
            stopped = True
            break
        if equations.deals:
            fraction = up_fraction(equations.weights, up)
            used = used or fraction > USED_FRACTION
            if used and fraction < FULLY_DOWN_FRACTION:
                break
    return Course(
        times_seen[:seen],
        volts_seen[:seen],
        State(up, volts, side, used),
        stride,
        done_seconds,
        quiet,
        stopped,
        failed,
    )


def is_beyond(stop: Stop, volts: float) -> bool:
    """Tell whether a node voltage is beyond where to stop."""
    return stop.side * (volts - stop.volts) < 0


def switched(up: Array, kept: Array, side: int) -> Array:
    """Return what is up once each region kept so much of what could go to a side."""
    return 1 - (1 - up) * kept if side > 0 else up * kept


def up_fraction(weights: Array, up: Array) -> float:
    """Return the part of the cell that is up."""
    return float(weights @ up)


def is_quiet(
    equations: Equations,
    up: Array,
    begin: Point,
    emf_volts: float,
    end_emf_volts: float,
    seconds: float,
) -> bool:
    """Tell whether the cell switches nothing, wherever a linear node can get to."""
    if begin.moving * seconds > QUIET_FRACTION:
        return False
    up_volts, down_volts = reach(equations, begin.volts, emf_volts, end_emf_volts)
    if softest_is_quiet(equations, up_volts, down_volts, seconds):
        return True
    return switching_rate(equations, up, up_volts, down_volts) * seconds < QUIET_FRACTION


def reach(
    equations: Equations, node_volts: float, emf_volts: float, end_emf_volts: float
) -> tuple[float, float]:
    """Return how far up and how far down from imprint a linear node can get, V."""
    one, other = equations.gain * emf_volts, equations.gain * end_emf_volts
    imprint_volts = equations.imprint_volts
    up_volts = max(node_volts, one, other) - imprint_volts
    return up_volts, imprint_volts - min(node_volts, one, other)


def softest_is_quiet(
    equations: Equations, up_volts: float, down_volts: float, seconds: float
) -> bool:
    """Tell whether not even the softest region moves: cheap, and enough in most idle times."""
    rate = softest_rate(equations.law, max(up_volts, down_volts))
    return equations.frozen or rate * seconds < QUIET_FRACTION


def first_step(equations: Equations, begin: Point, end_emf_volts: float, seconds: float) -> float:
    """Return a step over which the node moves by about FIRST_MOVE_VOLTS."""
    amperes, _, _ = node_current(equations.branches, end_emf_volts, begin.volts)
    slope = max(abs(begin.slope), abs(amperes) / equations.farads)
    return min(seconds, FIRST_MOVE_VOLTS / slope) if slope > 0 else seconds


def find_step(
    equations: Equations,
    up: Array,
    begin: Point,
    stride: Stride,
    emf_volts: float,
    emf_slope: float,
    rest_seconds: float,
) -> tuple[Trial, Stride]:
    """Find a step that is accurate enough, and how the one after it should be."""
    seconds = stride.next_seconds
    caution = 1.0 if equations.linear else DIODE_CAUTION
    dense_volts = caution * DENSE_TOLERANCE_VOLTS * (KINK_CAUTION if stride.seconds == 0 else 1.0)
    flipped = False
    while True:
        # A sliver left over would cost a whole step.
        if seconds > 0.9 * rest_seconds:
            seconds = rest_seconds
        guess = first_guess(begin, stride, seconds)
        trial = try_step(equations, begin, seconds, guess, emf_volts, emf_slope)
        if not trial.solved:
            seconds *= 0.25
        elif not is_one_sided(equations, up, begin, trial):
            if flipped or trial.moved > QUIET_FRACTION:
                seconds *= crossing(equations.imprint_volts, begin, trial)
            else:
                flipped = True
                begin = point_at(equations, up, begin.volts, -begin.side, emf_volts, emf_slope)
        else:
            quintic, off_volts = curve_of(begin, trial)
            error = max(
                trial.error_volts / (caution * STEP_TOLERANCE_VOLTS),
                trial.missed_fraction / STEP_TOLERANCE_FRACTION,
                off_volts / dense_volts,
            )
            factor = SAFETY * max(error, 1e-9) ** -0.25
            factor = min(max(factor, LARGEST_SHRINK), LARGEST_GROWTH)
            if error <= 1:
                return trial, Stride(factor * seconds, quintic, seconds, trial.end.side)
            seconds *= factor
        if seconds <= LEAST_SECONDS:
            return unsolved(begin, seconds, guess), stride


def first_guess(begin: Point, stride: Stride, seconds: float) -> Triple:
    """Guess the node at NODES of the next step, V."""
    if stride.seconds > 0 and seconds < 2 * stride.seconds and begin.side == stride.side:
        return extrapolate(stride.quintic, seconds / stride.seconds)
    move = begin.slope * seconds
    return (
        begin.volts + min(max(move * NODES[0], -FIRST_MOVE_VOLTS), FIRST_MOVE_VOLTS),
        begin.volts + min(max(move * NODES[1], -FIRST_MOVE_VOLTS), FIRST_MOVE_VOLTS),
        begin.volts + min(max(move * NODES[2], -FIRST_MOVE_VOLTS), FIRST_MOVE_VOLTS),
    )


def is_one_sided(equations: Equations, up: Array, begin: Point, trial: Trial) -> bool:
    """Tell whether the step neglects no switching to the other side."""
    imprint_volts = equations.imprint_volts
    v1, v2, v3 = trial.volts
    farthest = min(v1, v2, v3) if begin.side > 0 else max(v1, v2, v3)
    other = begin.side * (imprint_volts - farthest)
    if other <= 0 or softest_rate(equations.law, other) * trial.seconds < QUIET_FRACTION:
        return True
    up_volts, down_volts = (0.0, other) if begin.side > 0 else (other, 0.0)
    moving = switching_rate(equations, up, up_volts, down_volts)
    return moving * trial.seconds < QUIET_FRACTION


def crossing(imprint_volts: float, begin: Point, trial: Trial) -> float:
    """Return the part of a step after which the node comes to the imprint voltage."""
    before, place = begin.volts - imprint_volts, 0.0
    for index in range(3):
        node, after = NODES[index], trial.volts[index] - imprint_volts
        if before * after <= 0 and before != after:
            found = place + (node - place) * before / (before - after)
            return min(max(found, 0.05), 0.8)
        before, place = after, node
    return 0.5


def with_room(numbers: Array, filled: int, more: int) -> Array:
    """Return an array that begins as this one and has room for more."""
    if filled + more <= len(numbers):
        return numbers
    longer = np.empty(2 * (filled + more))
    longer[:filled] = numbers[:filled]
    return longer
