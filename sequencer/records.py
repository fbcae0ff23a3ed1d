"""How long a record must be, and where its pulses lie, for every kind of burst."""

from dataclasses import dataclass, replace

from pulsetally.sequencer.rounds import Pulse

# Samples of a record that holds one pulse.
POINTS = 2000
# Of a record whose current is integrated over edges that are far shorter than a sample.
CHARGE_POINTS = 10_000
# The share of a record that lies before the trigger, and what is seen of the base beside that.
BEFORE = 0.1
# A train's flat tops have so many samples each; the end voltage is fitted to a fifth of them.
_TOP_SAMPLES, _LEAST_TOP_SAMPLES = 200, 80
# More than that in one record, and fetching it takes longer than it saves.
MOST_POINTS = 1_000_000


class RecordTooLong(ValueError):
    """A train doesn't fit into a record."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Window:
    """The part of time that a record shows.

    seconds: its length. before: share of it that lies before the trigger, which is where the
    first leading edge passes 50 %. points: samples.
    """

    seconds: float
    before: float
    points: int


def fitted(window: Window, most_points: int | None) -> Window:
    """Return a window that asks for no more samples than an oscilloscope has, if that is known."""
    most = window.points if most_points is None else most_points
    return replace(window, points=min(window.points, most))


def window_of(pulse: Pulse) -> Window:
    """Return what to record of one pulse, from well before it to well after.

    Afterwards as long as it lasts: there the cell gives back what it didn't keep.
    """
    # What lies before the trigger is half the leading edge, and the base before that.
    seconds = pulse.duration * 2 / (1 - BEFORE)
    before = BEFORE * seconds + pulse.ramp / 2
    seconds += pulse.ramp / 2
    return Window(seconds=seconds, before=before / seconds, points=POINTS)


def charge_window(pulse: Pulse) -> Window:
    """Return what to record of a pulse whose current is integrated: the same, more densely."""
    return replace(window_of(pulse), points=CHARGE_POINTS)


def loop_window(pulse: Pulse) -> Window:
    """Return what to record of a triangle: all of it, and some base at both ends."""
    lead = BEFORE * pulse.duration + pulse.ramp / 2
    seconds = (1 + 2 * BEFORE) * pulse.duration
    return Window(seconds=seconds, before=lead / seconds, points=CHARGE_POINTS)


def train_window(pulse: Pulse, count: int) -> Window:
    """Return what to record of a train of pulses. Raises RecordTooLong."""
    period = train_period(pulse)
    lead = BEFORE * pulse.duration + pulse.ramp / 2
    seconds = lead + count * period
    return Window(seconds=seconds, before=lead / seconds, points=train_points(pulse, count))


def train_period(pulse: Pulse) -> float:
    """Return the time from one pulse of a train to the next, in seconds."""
    # Not quite pulse and rest where the rest is 0: a generator needs some base to tell them apart.
    return pulse.duration * 1.01 + pulse.rest


def train_points(pulse: Pulse, count: int) -> int:
    """Return how many samples the record of a train has. Raises RecordTooLong."""
    top = pulse.width - pulse.ramp
    if top <= 0:
        raise RecordTooLong("a pulse without a flat top has no end voltage; use capture: each")
    span = count * train_period(pulse)
    wanted = span / top * _TOP_SAMPLES
    least = span / top * _LEAST_TOP_SAMPLES
    if least > MOST_POINTS:
        raise RecordTooLong(
            f"a train of {count} needs {least:.3g} samples to show its flat tops, and a record has"
            f" {MOST_POINTS} at most. To fix it, make 'train of' smaller or the rest shorter"
        )
    return max(POINTS, int(min(wanted, MOST_POINTS)))
