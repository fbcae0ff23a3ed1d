"""Recipe and bench -> rounds, and what they will ask of cell, instruments, disk and night.

Everything here happens before power: a plan that stands keeps every limit.
"""

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.models import Name, kind_of
from pulsetally.sequencer.quantities import parse_quantity, show_quantity
from pulsetally.sequencer.recipe import (
    PULSE_KINDS,
    ContactStep,
    PresetStep,
    ReadStep,
    Recipe,
    RepeatStep,
    StepStep,
    SweepStep,
    WaitStep,
)

# A night has room for some ten thousand rounds; a million is a mistake in a sweep.
MOST_ROUNDS = 100_000
_MOST_ACTIONS = 1_000_000
# Ten years: nobody waits longer, and a sweep that says so has lost its unit.
_LONGEST_WAIT = 3.2e8
# The share of a ramp that lies between 10 % and 90 %.
_RAMP_SHARE = 0.8
_POINTS = 2000
_BYTES_PER_SHOT = 2 * 2 * _POINTS + 600
# Common practice: a handful of exchanges a pulse, a few milliseconds each on a real line.
_SECONDS_PER_SHOT, _SECONDS_PER_SETUP = 0.04, 0.15


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


@dataclass(frozen=True, slots=True, kw_only=True)
class Preset:
    """Drive the cell fully down."""

    pulse: Pulse


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """Deliver count pulses."""

    pulse: Pulse
    count: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Read:
    """Deliver pulses until the end voltage passes the threshold, in volts.

    settings: what is in force at this read; a sweep may stand inside a round.
    """

    pulse: Pulse
    threshold: float
    at_most: int
    settings: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Wait:
    """Leave the cell alone for so many seconds."""

    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Contact:
    """Look with a small pulse whether a cell is there."""

    pulse: Pulse


Action = Preset | Step | Read | Wait | Contact


@dataclass(frozen=True, slots=True, kw_only=True)
class Round:
    """The smallest piece of a run that starts from a known state and can be repeated.

    number: from 1. settings: every pulse setting and parameter in force at its beginning, in SI
    units.
    """

    number: int
    settings: dict[str, float]
    actions: tuple[Action, ...]

    @property
    def repeatable(self) -> bool:
        """Say whether it begins with a preset, so that it can start again."""
        # What comes before the preset must leave the cell as it is.
        harmless = itertools.dropwhile(lambda each: isinstance(each, Contact | Wait), self.actions)
        return isinstance(next(harmless, None), Preset)

    @property
    def most_pulses(self) -> int:
        """Return how many pulses it delivers if every read goes to its end."""
        return sum(_most_pulses(action) for action in self.actions)


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseVolts:
    """What one pulse means along the way to the cell, in volts."""

    name: str
    panel: float
    terminal: float
    cell: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """All rounds of a run, and what they ask for.

    swept: names of what the recipe changes. most_pulses: if every read goes to its end.
    seconds, disk_bytes: estimates for that case. volts: by pulse, largest of each.
    """

    recipe: Recipe
    rounds: tuple[Round, ...]
    swept: tuple[str, ...]
    most_pulses: int
    seconds: float
    disk_bytes: int
    volts: tuple[PulseVolts, ...]
    warnings: tuple[str, ...] = field(default=())


def make_plan(recipe: Recipe, bench: Bench) -> Plan:
    """Turn a recipe into rounds for a bench. Raises PlanError with every reason against it."""
    builder = _Builder(recipe, bench)
    rounds = builder.rounds()
    problems = list(dict.fromkeys(builder.problems))
    pulses = {
        action.pulse: None
        for each in rounds
        for action in each.actions
        if not isinstance(action, Wait)
    }
    volts = _volts(list(pulses), bench)
    problems += _limit_problems(volts, bench)
    problems += _panel_problems(list(pulses), bench)
    if problems:
        raise PlanError(problems)
    most = sum(each.most_pulses for each in rounds)
    return Plan(
        recipe=recipe,
        rounds=rounds,
        swept=tuple(builder.swept),
        most_pulses=most,
        seconds=sum(_seconds(action) for each in rounds for action in each.actions),
        disk_bytes=most * _BYTES_PER_SHOT + 100_000,
        volts=tuple(volts),
        warnings=(*_warnings(rounds, volts, bench), *_contact_warnings(rounds, bench)),
    )


def window_points() -> int:
    """Return how many samples a record has."""
    return _POINTS


class _Builder:
    """Walk a recipe's steps and cut them into rounds at each preset."""

    def __init__(self, recipe: Recipe, bench: Bench) -> None:
        self._recipe, self._bench = recipe, bench
        self._actions = 0
        self._settings: dict[str, float] = {}
        self._names: dict[str, Name] = {}
        self.problems: list[str] = []
        self.swept: dict[str, None] = {}
        model = recipe.model
        for name, written in model.parameters.items():
            self._settings[name] = _written(written)
        for pulse, settings in model.pulses.items():
            for setting in PULSE_KINDS:
                value = getattr(settings, setting)
                if isinstance(value, Name):
                    self._names[f"{pulse}.{setting}"] = value
                else:
                    self._settings[f"{pulse}.{setting}"] = value

    def rounds(self) -> tuple[Round, ...]:
        finished: list[Round] = []
        pending: list[Action] = []
        settings: dict[str, float] = {}
        for action, in_force in self._walk(self._recipe.model.steps, self._settings):
            if isinstance(action, Preset) and not _only_looks(pending):
                finished.append(
                    Round(
                        number=len(finished) + 1,
                        settings=self._all(settings),
                        actions=tuple(pending),
                    )
                )
                pending = []
                if len(finished) >= MOST_ROUNDS:
                    self.problems.append(
                        f"{self._recipe.file}: the recipe has over {MOST_ROUNDS} rounds."
                        " To fix it, sweep fewer values or repeat less often."
                    )
                    break
            self._actions += 1
            if self._actions > _MOST_ACTIONS:
                self.problems.append(
                    f"{self._recipe.file}: the recipe has over {_MOST_ACTIONS} steps when its"
                    " repeats are written out. To fix it, repeat less often."
                )
                break
            if not pending:
                settings = in_force
            pending.append(action)
        if pending:
            finished.append(
                Round(
                    number=len(finished) + 1, settings=self._all(settings), actions=tuple(pending)
                )
            )
        return tuple(finished)

    def _walk(
        self, steps: list[Any], settings: dict[str, float]
    ) -> Iterator[tuple[Action, dict[str, float]]]:
        for step in steps:
            match step:
                case RepeatStep():
                    for _ in range(self._whole("repeat", step.repeat, settings, least=1)):
                        yield from self._walk(step.steps, settings)
                case SweepStep():
                    names = list(step.sweep)
                    self.swept.update(dict.fromkeys(names))
                    axes = [[_written(each) for each in values] for values in step.sweep.values()]
                    for values in itertools.product(*axes):
                        changed = settings | dict(zip(names, values, strict=True))
                        yield from self._walk(step.steps, changed)
                case WaitStep():
                    seconds = self._value(step.wait, settings)
                    if not 0 <= seconds <= _LONGEST_WAIT:
                        self.problems.append(
                            f"{self._recipe.file}: a wait of {seconds:g} s is swept. To fix it,"
                            f" sweep waits from 0 s to {_LONGEST_WAIT:g} s."
                        )
                    yield Wait(seconds=seconds), settings
                case PresetStep():
                    yield Preset(pulse=self._pulse(step.preset, settings)), settings
                case ContactStep():
                    yield Contact(pulse=self._pulse(step.contact, settings)), settings
                case StepStep():
                    count = self._whole("count", step.count, settings, least=0)
                    yield Step(pulse=self._pulse(step.step, settings), count=count), settings
                case ReadStep():
                    yield self._read(step, settings), settings

    def _read(self, step: ReadStep, settings: dict[str, float]) -> Read:
        pulse = self._pulse(step.read, settings)
        threshold = self._value(step.until, settings)
        # What counts is where the node can get, not what the panel shows.
        base, level = (self._bench.cell_volts(volts) for volts in (pulse.base, pulse.level))
        low, high = sorted((base, level))
        if not low < threshold < high:
            self.problems.append(
                f"{self._recipe.file}: reading with pulse {pulse.name!r} until"
                f" {show_quantity(threshold, 'V')} can't end, since the cell goes from"
                f" {show_quantity(base, 'V')} to {show_quantity(level, 'V')} at most."
                " To fix it, choose a threshold between the two."
            )
        at_most = self._whole("at most", step.at_most, settings, least=1)
        return Read(pulse=pulse, threshold=threshold, at_most=at_most, settings=self._all(settings))

    def _all(self, settings: dict[str, float]) -> dict[str, float]:
        """Return settings with those that are declared as parameters resolved."""
        return {key: settings[name.word] for key, name in self._names.items()} | settings

    def _value(self, value: float | Name, settings: dict[str, float]) -> float:
        return settings[value.word] if isinstance(value, Name) else value

    def _whole(
        self, what: str, value: float | Name, settings: dict[str, float], *, least: int
    ) -> int:
        number = self._value(value, settings)
        if not least <= number <= _MOST_ACTIONS or number != int(number):
            self.problems.append(
                f"{self._recipe.file}: {what} is {number:g} in a sweep."
                f" To fix it, sweep it over whole numbers from {least} to {_MOST_ACTIONS}."
            )
            return 0
        return int(number)

    def _pulse(self, name: str, settings: dict[str, float]) -> Pulse:
        values = {}
        for setting in PULSE_KINDS:
            key = f"{name}.{setting}"
            # A sweep of the setting itself wins over the parameter it was declared with.
            if key not in settings and key in self._names:
                values[setting] = settings[self._names[key].word]
            else:
                values[setting] = settings[key]
        pulse = Pulse(name=name, **values)
        self._check_pulse(pulse)
        return pulse

    def _check_pulse(self, pulse: Pulse) -> None:
        reasons = []
        if pulse.level == pulse.base:
            reasons.append(("its level is its base", "make them differ"))
        if not 0 < pulse.width <= 1000 or not 0 < pulse.edge <= 100 or pulse.rest < 0:
            reasons.append(
                (
                    "a time in it is out of bounds",
                    "use widths to 1000 s, edges to 100 s, and rests of 0 s or more",
                )
            )
        elif pulse.width < pulse.ramp:
            reasons.append(
                (
                    f"its edges of {show_quantity(pulse.edge, 's')} leave no flat top in a width"
                    f" of {show_quantity(pulse.width, 's')}",
                    "write a shorter edge or a longer width",
                )
            )
        for problem, remedy in reasons:
            self.problems.append(
                f"{self._recipe.file}: pulse {pulse.name!r}: {problem}. To fix it, {remedy}."
            )


def _written(written: object) -> float:
    kind = kind_of(written)
    if kind is None:
        raise ValueError(f"{written!r} passed as a quantity")
    return parse_quantity(written, kind)


def _only_looks(actions: list[Action]) -> bool:
    """Say whether these actions leave the cell as it is, so that a preset may follow them."""
    return all(isinstance(each, Contact | Wait) for each in actions)


def _most_pulses(action: Action) -> int:
    match action:
        case Preset() | Contact():
            return 1
        case Step():
            return action.count
        case Read():
            return action.at_most
        case Wait():
            return 0


def _seconds(action: Action) -> float:
    if isinstance(action, Wait):
        return action.seconds
    # A record takes up to five times its pulse, since time bases go in steps of 1, 2 and 5.
    each = 4 * action.pulse.duration + action.pulse.rest + _SECONDS_PER_SHOT
    return _SECONDS_PER_SETUP + each * _most_pulses(action)


def _volts(pulses: list[Pulse], bench: Bench) -> list[PulseVolts]:
    largest: dict[str, PulseVolts] = {}
    for pulse in pulses:
        panel = max((pulse.level, pulse.base), key=abs)
        found = PulseVolts(
            name=pulse.name,
            panel=panel,
            terminal=bench.terminal_volts(panel),
            cell=bench.cell_volts(panel),
        )
        if pulse.name not in largest or abs(found.panel) > abs(largest[pulse.name].panel):
            largest[pulse.name] = found
    return list(largest.values())


def _limit_problems(volts: list[PulseVolts], bench: Bench) -> list[str]:
    limits = bench.model.limits
    problems = []
    for each in volts:
        for place, value, limit, name in (
            ("at the terminal", each.terminal, limits.source, "source"),
            ("across the cell", each.cell, limits.node, "node"),
        ):
            if not abs(value) <= limit:
                problems.append(
                    f"pulse {each.name!r} of {show_quantity(each.panel, 'V')} at the panel means"
                    f" {show_quantity(value, 'V')} {place}, beyond the {name} limit of"
                    f" {show_quantity(limit, 'V')} in {bench.file}. To fix it, lower the pulse,"
                    " or raise the limit if the cell bears it."
                )
    return problems


def _panel_problems(pulses: list[Pulse], bench: Bench) -> list[str]:
    """Check base and level of every pulse as the driver will, so that it never has to refuse."""
    limit, told = bench.panel_limit(), []
    for pulse in pulses:
        for name, volts in (("base", pulse.base), ("level", pulse.level)):
            if not abs(volts) <= limit:
                told.append(
                    f"the {name} of pulse {pulse.name!r} is {show_quantity(volts, 'V')}, beyond"
                    f" {show_quantity(limit, 'V')} at the panel, which is what keeps both limits of"
                    f" {bench.file} whatever a diode does. To fix it, lower the pulse, or raise the"
                    " limits if the cell bears it."
                )
    return list(dict.fromkeys(told))


# Half of the smallest coercive field of common films, 40 kV/cm (a handbook value for PZT films,
# from memory): a contact pulse shall switch nothing.
_HARMLESS_VOLTS_PER_METRE = 2e6


def _contact_warnings(rounds: tuple[Round, ...], bench: Bench) -> Iterator[str]:
    pulses = {
        each.pulse: None for one in rounds for each in one.actions if isinstance(each, Contact)
    }
    for pulse in pulses:
        volts = abs(bench.cell_volts(pulse.level))
        if volts / bench.model.cell.thickness > _HARMLESS_VOLTS_PER_METRE:
            yield (
                f"contact pulse {pulse.name!r} puts {show_quantity(volts, 'V')} across"
                f" {show_quantity(bench.model.cell.thickness, 'm')}, which may switch something"
            )
    if pulses and bench.model.wiring.series_diode is not None:
        yield "behind a series diode a small pulse hardly conducts, so contact can't be judged well"


def _warnings(rounds: tuple[Round, ...], volts: list[PulseVolts], bench: Bench) -> Iterator[str]:
    for each in volts:
        if abs(each.cell) < 0.05 * abs(each.terminal):
            sent, left = show_quantity(each.terminal, "V"), show_quantity(each.cell, "V")
            yield (
                f"pulse {each.name!r} hardly reaches the cell: of {sent} at the terminal {left}"
                " are left; a series diode blocks one polarity"
            )
    if rounds and not rounds[0].repeatable:
        yield "the recipe begins without a preset: the first round starts from an unknown state"
    yield from bench.notes()
