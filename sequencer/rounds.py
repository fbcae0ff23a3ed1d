"""What a plan is made of: pulses, what is done with them, and rounds.

Everything is in SI units and at the generator's panel; what a recipe says by name, by sweep or
across the cell has been worked out.
"""

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

# The share of a ramp that lies between 10 % and 90 %.
_RAMP_SHARE = 0.8


@dataclass(frozen=True, slots=True, kw_only=True)
class Pulse:
    """A trapezoid as a recipe means it, in SI units.

    level, base: volts at the panel. width: between the 50 % points. edge: from 10 % to 90 %.
    rest: least time at base after it.
    """

    name: str
    level: float
    width: float
    base: float
    edge: float
    rest: float

    @property
    def ramp(self) -> float:
        """Return the time of one whole edge from 0 to 100 %, in seconds."""
        return self.edge / _RAMP_SHARE

    @property
    def duration(self) -> float:
        """Return the time from leaving base to being back at it, in seconds."""
        return self.width + self.ramp

    @property
    def rising(self) -> bool:
        """Say whether the pulse goes up from its base."""
        return self.level > self.base

    def mirrored(self) -> "Pulse":
        """Return the same pulse with both voltages turned round."""
        return replace(self, level=-self.level, base=-self.base)


def triangle(name: str, volts: float, period: float) -> Pulse:
    """Return a triangle from minus volts to plus volts and back, period seconds long.

    It is a trapezoid without a flat top, so that every generator of pulses can send it.
    """
    half = period / 2
    return Pulse(name=name, level=volts, base=-volts, width=half, edge=_RAMP_SHARE * half, rest=0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Preset:
    """Drive the cell fully down."""

    pulse: Pulse


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """Deliver count pulses; train: so many of them a trigger, 1 where each has its own."""

    pulse: Pulse
    count: int
    train: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Read:
    """Deliver pulses until the end voltage passes the threshold, in volts.

    settings: what is in force at this read; a sweep may stand inside a round. train: so many
    pulses a trigger.
    """

    pulse: Pulse
    threshold: float
    at_most: int
    settings: dict[str, float]
    train: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Wait:
    """Leave the cell alone for so many seconds."""

    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Contact:
    """Look with a small pulse whether a cell is there."""

    pulse: Pulse


@dataclass(frozen=True, slots=True, kw_only=True)
class Pund:
    """Measure the switched charge with a pulse and its mirror image.

    settings: what is in force.
    """

    pulse: Pulse
    settings: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Loop:
    """Measure a hysteresis loop with a triangle. settings: what is in force."""

    pulse: Pulse
    settings: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Ask:
    """Wait for a person, so many seconds at most; go_on: what then, if nobody answers."""

    message: str
    seconds: float
    go_on: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Cycle:
    """Swing between the levels of two pulses, pairs times; each lasts as long as its width.

    done: pairs that went before in the same cycling.
    """

    down: Pulse
    up: Pulse
    pairs: int
    done: int

    @property
    def period(self) -> float:
        """Return the time of one pair, in seconds."""
        return self.down.width + self.up.width

    @property
    def pulse(self) -> Pulse:
        """Return one pair as a trapezoid whose base is the lower level."""
        return replace(
            self.up,
            name=f"{self.down.name}/{self.up.name}",
            base=self.down.level,
            edge=max(self.down.edge, self.up.edge),
            rest=0.0,
        )


Action = Preset | Step | Read | Wait | Contact | Pund | Loop | Ask | Cycle


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Cycling:
    """A cycling that several rounds belong to, and what ends it early.

    least_charge: share of the first switched charge. most_off: share by which a full count may
    differ from the first. contact: an open or shorted cell ends it (and not the run).
    pairs: planned.
    """

    pairs: int
    least_charge: float | None
    most_off: float | None
    contact: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tune:
    """A search that several rounds belong to: the value of a setting that gives a full count.

    low, high: in SI units. target, within: pulses. at_most: rounds. actions: what to do at a
    value, with the settings then in force.
    """

    name: str
    low: float
    high: float
    target: float
    within: float
    at_most: int
    actions: Callable[[float], tuple[tuple["Action", ...], dict[str, float]]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Round:
    """The smallest piece of a run that starts from a known state and can be repeated.

    number: from 1. settings: every pulse setting and parameter in force at its beginning, in SI
    units. cycling, tune: what it belongs to. A round of a tune gets its value, and with it its
    true actions, only when its turn has come; until then they are those at the lower end.
    """

    number: int
    settings: dict[str, float]
    actions: tuple[Action, ...]
    cycling: Cycling | None = None
    tune: Tune | None = None

    @property
    def repeatable(self) -> bool:
        """Say whether it begins from a known state, so that it can start again."""
        if any(isinstance(each, Ask) for each in self.actions):
            # A person has done something to the cell that no preset brings back.
            return False
        # What comes before the preset must leave the cell as it is.
        harmless = itertools.dropwhile(lambda each: isinstance(each, Contact | Wait), self.actions)
        # A loop begins with a triangle that is not looked at, from its lower end.
        return isinstance(next(harmless, None), Preset | Pund | Loop)

    @property
    def fills(self) -> bool:
        """Say whether its first read goes from fully down, so that it may give a full count.

        A switched charge or a loop before it drives down as far as its pulses do, and no further.
        """
        before = itertools.takewhile(lambda each: not isinstance(each, Read), self.actions)
        changes = [each for each in before if not isinstance(each, Contact | Wait | Step)]
        return len(changes) == 1 and isinstance(changes[0], Preset)

    @property
    def most_pulses(self) -> int:
        """Return how many recorded pulses it has if every read goes to its end."""
        return sum(most_pulses(action) for action in self.actions)

    def tuned(self, value: float) -> "Round":
        """Return the round of a tune at a value of what is tuned."""
        if self.tune is None:
            return self
        actions, settings = self.tune.actions(value)
        return replace(self, actions=actions, settings=settings)


class Acting(Protocol):
    """Something that holds an action."""

    @property
    def action(self) -> Action:
        """Return it."""


def kept_before(pending: Sequence[Acting], action: Action) -> int | None:
    """Return how many parts of a round stay in it when a next action begins a new round.

    What comes after them goes with the next action; None where the action belongs to the round.
    """
    match action:
        case Cycle():
            return len(pending)
        case Preset():
            # What only looks leaves the cell as it is, so that a preset may follow it.
            looks = all(isinstance(each.action, Contact | Wait) for each in pending)
            return None if looks else len(pending)
        case Pund() | Loop():
            return _kept_before_charge(pending)
        case _:
            return None


def _kept_before_charge(pending: Sequence[Acting]) -> int | None:
    kept = len(pending)
    while kept and isinstance(pending[kept - 1].action, Contact | Wait | Ask):
        kept -= 1
    if not kept:
        return None
    # These bring the cell to where they need it, so that a wait before them can be repeated with
    # the second one. What else is held through a wait is what its measurement is about.
    if isinstance(pending[kept - 1].action, Pund | Loop):
        return kept
    held = any(isinstance(each.action, Wait | Ask) for each in pending[kept:])
    measured = any(isinstance(each.action, Read | Pund | Loop) for each in pending)
    return kept if measured and not held else None


def most_pulses(action: Action) -> int:
    """Return how many recorded pulses an action has at most; a cycling's pairs have none."""
    match action:
        case Preset() | Contact():
            return 1
        case Step():
            return action.count
        case Read():
            return action.at_most
        case Pund():
            return 5
        case Loop():
            return 2
        case Wait() | Ask() | Cycle():
            return 0


def pulses_of(action: Action) -> tuple[Pulse, ...]:
    """Return the pulses that an action sends."""
    match action:
        case Wait() | Ask():
            return ()
        case Pund():
            return action.pulse, action.pulse.mirrored()
        case Cycle():
            return (action.pulse,)
        case _:
            return (action.pulse,)
