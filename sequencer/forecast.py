"""How long a run will take, when it will end, and how much disk it needs: estimates."""

import shutil
from datetime import datetime, timedelta
from pathlib import Path

from pulsetally.sequencer.records import CHARGE_POINTS, POINTS, train_points
from pulsetally.sequencer.rounds import (
    Action,
    Ask,
    Cycle,
    Loop,
    Pund,
    Read,
    Step,
    Wait,
    most_pulses,
)

# Two channels of two bytes a sample, and what else a pulse leaves in the logbook.
_BYTES_PER_POINT, _BYTES_PER_SHOT = 4, 600
# Tables and indexes of a new logbook.
EMPTY_BYTES = 100_000
# Common practice: a handful of exchanges a pulse, a few milliseconds each on a real line.
_SECONDS_PER_SHOT, _SECONDS_PER_SETUP = 0.04, 0.15


def seconds_of(action: Action) -> float:
    """Return how long an action takes at most, in seconds, without the time of a person."""
    match action:
        case Wait():
            return action.seconds
        case Ask():
            return 0.0
        case Cycle():
            return _SECONDS_PER_SETUP + action.pairs * action.period
        case Step(train=train) | Read(train=train) if train > 1:
            trains = -(-most_pulses(action) // train)
            each = (action.pulse.duration + action.pulse.rest) * train * 2 + _SECONDS_PER_SHOT
            return _SECONDS_PER_SETUP + trains * each
        case _:
            # A record takes up to five times its pulse, since time bases go in steps of 1, 2, 5.
            each = 4 * action.pulse.duration + action.pulse.rest + _SECONDS_PER_SHOT
            return _SECONDS_PER_SETUP + each * most_pulses(action)


def disk_bytes_of(action: Action, most_points: int | None) -> int:
    """Return how many bytes an action leaves in the logbook at most.

    most_points: samples of the oscilloscope's longest record; None where nobody has said.
    """
    shots, points = most_pulses(action), POINTS
    if isinstance(action, Step | Read) and action.train > 1:
        shots, points = -(-shots // action.train), train_points(action.pulse, action.train)
    elif isinstance(action, Pund | Loop):
        points = CHARGE_POINTS
    if most_points is not None:
        points = min(points, most_points)
    return shots * (points * _BYTES_PER_POINT + _BYTES_PER_SHOT)


def end_of(seconds: float, now: datetime) -> datetime | None:
    """Return when a run of so many seconds ends that starts now; None beyond the calendar."""
    try:
        return now + timedelta(seconds=seconds)
    except OverflowError:
        return None


def free_bytes(path: Path) -> int | None:
    """Return what is free on a file's disk, whether it exists or not; None where nobody knows."""
    for folder in path.absolute().parents:
        if folder.is_dir():
            try:
                return shutil.disk_usage(folder).free
            except OSError:
                return None
    return None
