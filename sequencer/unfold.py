"""Unfold a recipe: repeats, sweeps, tunings and cyclings written out as rounds.

Walks the steps with the settings that are in force at each, works out names, sweeps and
voltages across the cell, and cuts the result into rounds. Every problem is collected.
"""

import itertools
import math
import random
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

from pulsetally.sequencer.bench import Bench, CellVoltsUnreachable
from pulsetally.sequencer.models import Declared, Model, Name, kind_of, quantified
from pulsetally.sequencer.quantities import QuantityError, parse_quantity, show_quantity
from pulsetally.sequencer.ranges import axis_values
from pulsetally.sequencer.recipe import Recipe, axis_kind
from pulsetally.sequencer.rounds import (
    Action,
    Ask,
    Contact,
    Cycle,
    Cycling,
    Loop,
    Preset,
    Pulse,
    Pund,
    Read,
    Round,
    Step,
    Tune,
    Wait,
    kept_before,
    triangle,
)
from pulsetally.sequencer.step_rules import stop_faults, swept_names, tune_fault, tuned_faults
from pulsetally.sequencer.steps import (
    LONGEST_WAIT,
    MOST_PAIRS,
    MOST_TUNING_ROUNDS,
    PULSE_KINDS,
    AskStep,
    ContactStep,
    CycleStep,
    LoopStep,
    PresetStep,
    PundStep,
    ReadStep,
    RepeatStep,
    StepStep,
    SweepStep,
    TuneStep,
    WaitStep,
)

# A night has room for some ten thousand rounds; a million is a mistake in a sweep.
MOST_ROUNDS = 100_000
_MOST_ACTIONS = 1_000_000
# So many turns of repeats and sweeps in which nothing could be done.
_MOST_IDLE_TURNS = 1000
# Whoever reads so many problems has seen what is wrong.
_MOST_PROBLEMS = 100

Settings = dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Part:
    """One action with the settings in force at it, and what its round belongs to."""

    action: Action
    settings: Settings
    cycling: Cycling | None = None
    tune: Tune | None = None
    begins: bool = False


class _Overrun(Exception):
    """There is no sense in unfolding further; the problems say why."""


class Unfolding:
    """Walk a recipe's steps for a bench; rounds() does it, problems and swept tell the rest."""

    def __init__(self, recipe: Recipe, bench: Bench) -> None:
        self._recipe, self._bench = recipe, bench
        self._actions = self._turns = 0
        self._made: dict[int, tuple[Settings, Action, Settings]] = {}
        # What is swept or tuned at the step that is looked at, and anywhere, of parameters.
        self._inside: list[str] = []
        self._elsewhere = {*swept_names(recipe.model.steps)}.intersection(recipe.model.parameters)
        self._settings: Settings = {}
        self._names: dict[str, Name] = {}
        self.problems: dict[str, None] = {}
        self.swept: dict[str, None] = {}
        model = recipe.model
        self._declared = Declared(tuple(model.pulses), model.parameters)
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
        """Return all rounds, in order."""
        finished: list[Round] = []
        pending: list[_Part] = []

        def finish() -> None:
            if pending:
                first = pending[0]
                finished.append(
                    Round(
                        number=len(finished) + 1,
                        settings=first.settings,
                        actions=tuple(each.action for each in pending),
                        cycling=first.cycling,
                        tune=first.tune,
                    )
                )
            pending.clear()

        if self._least_rounds(self._recipe.model.steps) > MOST_ROUNDS:
            # Told without writing them out, which would take long.
            self._too_many_rounds()
            return ()
        try:
            for part in self._walk(self._recipe.model.steps, self._settings):
                if pending and (kept := self._kept(pending, part)) is not None:
                    goes_with_it = pending[kept:]
                    del pending[kept:]
                    finish()
                    pending += goes_with_it
                if len(finished) >= MOST_ROUNDS:
                    self._too_many_rounds()
                    raise _Overrun
                self._actions += 1
                self._turns = 0
                if self._actions > _MOST_ACTIONS:
                    self._problem(
                        f"the recipe has over {_MOST_ACTIONS} steps when its repeats are written"
                        " out",
                        "repeat less often",
                    )
                    raise _Overrun
                pending.append(part)
                if isinstance(part.action, Cycle):
                    finish()
        except _Overrun:
            # A part of the rounds is no plan, and looking at it would take long.
            return ()
        finish()
        return tuple(finished)

    def _kept(self, pending: list[_Part], part: _Part) -> int | None:
        """Return how many parts stay in their round where this one begins a new one, or None."""
        before = pending[0]
        if part.begins or (before.cycling, before.tune) != (part.cycling, part.tune):
            return len(pending)
        if isinstance(part.action, Preset | Pund | Loop | Cycle):
            return kept_before(pending, part.action)
        return None

    def _problem(self, problem: str, remedy: str) -> None:
        self.problems[f"{self._recipe.file}: {problem}. To fix it, {remedy}."] = None

    def _too_many_rounds(self) -> None:
        self._problem(
            f"the recipe has over {MOST_ROUNDS} rounds", "sweep fewer values or repeat less often"
        )

    def _least_rounds(self, steps: list[Any]) -> int:
        """Return a number of rounds that there are at least; each preset begins one."""
        total = 0
        for step in steps:
            match step:
                case PresetStep():
                    total += 1
                case RepeatStep():
                    total += _least(step.repeat) * self._least_rounds(step.steps)
                case SweepStep():
                    counts = [len(self._axis(*each)) for each in step.sweep.items()]
                    turns = counts[0] if step.together else math.prod(counts)
                    total += turns * self._least_rounds(step.steps)
                case CycleStep():
                    bursts = len(pauses_of(step, _least(step.pairs)))
                    total += bursts * (1 + self._least_rounds(step.steps))
        return total

    def _turn(self) -> None:
        """Look at each turn of a repeat or sweep whether there is sense in another one.

        Steps that can't be done make no actions, so that nothing else would end it.
        """
        self._turns += 1
        if self._turns > _MOST_IDLE_TURNS and self.problems:
            raise _Overrun
        if len(self.problems) >= _MOST_PROBLEMS:
            raise _Overrun

    # Steps that hold steps.

    def _walk(
        self, steps: list[Any], settings: Settings, cycling: Cycling | None = None
    ) -> Iterator[_Part]:
        for step in steps:
            match step:
                case RepeatStep():
                    for _ in range(self._whole("repeat", step.repeat, settings, least=1)):
                        self._turn()
                        yield from self._walk(step.steps, settings, cycling)
                case SweepStep():
                    if not self._enter([*step.sweep]):
                        continue
                    for changed in self._combinations(step, settings):
                        self._turn()
                        yield from self._walk(step.steps, changed, cycling)
                    del self._inside[-len(step.sweep) :]
                case TuneStep():
                    if cycling is not None:
                        self._problem(
                            "a tune stands inside a cycle", "tune before or after cycling"
                        )
                        return
                    if self._enter([step.tune]):
                        yield from self._tune(step, settings)
                        del self._inside[-1:]
                case CycleStep():
                    if cycling is not None:
                        self._problem("a cycle stands inside a cycle", "write one after the other")
                        return
                    yield from self._cycle(step, settings)
                case _:
                    # Repeated under the same settings, it is the same action again.
                    made = self._made.get(id(step))
                    if made is None or made[0] is not settings:
                        made = settings, self._action(step, settings), self._all(settings)
                        self._made[id(step)] = made
                    yield _Part(action=made[1], settings=made[2], cycling=cycling)

    def _enter(self, names: list[str]) -> bool:
        """Note that these are swept or tuned from here on; say whether they may be."""
        for name in names:
            if name in self._inside:
                self._problem(
                    f"{name!r} is swept inside its own sweep or tune, which would undo that",
                    "sweep it once",
                )
                return False
        self._inside += names
        return True

    def _combinations(self, step: SweepStep, settings: Settings) -> Iterator[Settings]:
        names = list(step.sweep)
        self.swept.update(dict.fromkeys(names))
        axes = [self._axis(name, written) for name, written in step.sweep.items()]
        chosen: Iterator[tuple[float, ...]]
        chosen = zip(*axes, strict=True) if step.together else itertools.product(*axes)
        if step.order == "shuffled":
            few = list(itertools.islice(chosen, MOST_ROUNDS + 1))
            random.Random(int(step.seed)).shuffle(few)
            chosen = iter(few)
        for values in chosen:
            yield settings | dict(zip(names, values, strict=True))

    def _axis(self, name: str, written: object) -> list[float]:
        kind = axis_kind(name, self._declared)
        if kind is None:
            raise ValueError(f"{name!r} passed as an axis")
        return axis_values(name, written, kind)

    def _tune(self, step: TuneStep, settings: Settings) -> Iterator[_Part]:
        low, high = self._axis(step.tune, step.between)
        self.swept[step.tune] = None

        inside = tuple(self._inside)

        def actions(value: float) -> tuple[tuple[Action, ...], Settings]:
            changed = settings | {step.tune: value}
            # Called again when the round's turn has come, long after this walk.
            before, self._inside = self._inside, [*inside]
            try:
                parts = tuple(self._action(each, changed) for each in step.steps)
                return parts, self._all(changed)
            finally:
                self._inside = before

        if (fault := tune_fault(step)) is not None:
            self._problem(*fault)
            return
        most = self._whole("at most", step.at_most, settings, least=3, most=MOST_TUNING_ROUNDS)
        tune = Tune(
            name=step.tune,
            low=low,
            high=high,
            target=self._bounded(step, "full_count", settings),
            within=self._bounded(step, "within", settings),
            at_most=most,
            actions=actions,
        )
        # Both ends are looked at now, so that no value between them can break a limit.
        lowest, highest = actions(low)[0], actions(high)[0]
        for told in tuned_faults(step, lowest, highest):
            self._problem(*told)
        for _ in range(most):
            for place, action in enumerate(lowest):
                yield _Part(
                    action=action,
                    settings=self._all(settings | {step.tune: low}),
                    tune=tune,
                    begins=place == 0,
                )

    def _cycle(self, step: CycleStep, settings: Settings) -> Iterator[_Part]:
        pairs = self._whole("pairs", step.pairs, settings, least=1, most=MOST_PAIRS)
        if not pairs:
            return
        stop = step.stop_when
        cycling = Cycling(
            pairs=pairs,
            least_charge=self._optional(stop, "switched_charge_below", settings),
            most_off=self._optional(stop, "full_count_off_by", settings),
            contact=stop.contact_is_lost,
        )
        for told in stop_faults(step):
            self._problem(*told)
        if step.steps:
            self.swept["cycles"] = None
        down, up = (self._pulse(each, settings) for each in (step.cycle.down, step.cycle.up))
        if not down.level < up.level:
            self._problem(
                f"cycling from {show_quantity(down.level, 'V')} to {show_quantity(up.level, 'V')}"
                " does not go up",
                "write the lower level as down",
            )
        ramp = max(down.ramp, up.ramp)
        if min(down.width, up.width) < ramp:
            self._problem(
                f"cycling with edges of {show_quantity(max(down.edge, up.edge), 's')}, the longer"
                f" of its two, leaves no flat top in a width of"
                f" {show_quantity(min(down.width, up.width), 's')}",
                "write shorter edges or longer widths",
            )
        done = 0
        yield from self._pause(step, settings, cycling, done)
        for stop_at in pauses_of(step, pairs):
            yield _Part(
                action=Cycle(down=down, up=up, pairs=stop_at - done, done=done),
                settings=self._all(settings | {"cycles": float(done)}),
                cycling=cycling,
                begins=True,
            )
            done = stop_at
            yield from self._pause(step, settings, cycling, done)

    def _pause(
        self, step: CycleStep, settings: Settings, cycling: Cycling, done: int
    ) -> Iterator[_Part]:
        parts = self._walk(step.steps, settings | {"cycles": float(done)}, cycling)
        for place, part in enumerate(parts):
            yield replace(part, begins=True) if place == 0 else part

    # Steps that do something.

    def _action(self, step: Model, settings: Settings) -> Action:
        match step:
            case WaitStep():
                seconds = self._value(step.wait, settings)
                if not 0 <= seconds <= LONGEST_WAIT:
                    self._problem(
                        f"a wait of {seconds:g} s is swept",
                        f"sweep waits from 0 s to {LONGEST_WAIT:g} s",
                    )
                return Wait(seconds=seconds)
            case PresetStep():
                return Preset(pulse=self._pulse(step.preset, settings))
            case ContactStep():
                return Contact(pulse=self._pulse(step.contact, settings))
            case StepStep():
                count = self._whole("count", step.count, settings, least=0)
                return Step(
                    pulse=self._pulse(step.step, settings),
                    count=count,
                    train=self._train(step, settings),
                )
            case ReadStep():
                return self._read(step, settings)
            case PundStep():
                pulse = self._pulse(step.pund, settings)
                if pulse.base != 0 or pulse.level < 0:
                    self._problem(
                        f"pund with pulse {pulse.name!r} needs a pulse up from 0 V",
                        "write a level above 0 V and no base",
                    )
                return Pund(pulse=pulse, settings=self._all(settings))
            case LoopStep():
                return self._loop(step, settings)
            case AskStep():
                return Ask(
                    message=step.ask,
                    seconds=self._bounded(step, "within", settings),
                    go_on=step.otherwise == "go on",
                )
            case _:
                raise TypeError(f"{type(step).__name__} is no action")

    def _read(self, step: ReadStep, settings: Settings) -> Read:
        pulse = self._pulse(step.read, settings)
        threshold = self._value(step.until, settings)
        # What counts is where the node can get, not what the panel shows.
        base, level = (self._bench.cell_volts(volts) for volts in (pulse.base, pulse.level))
        low, high = sorted((base, level))
        if not low < threshold < high:
            self._problem(
                f"reading with pulse {pulse.name!r} until {show_quantity(threshold, 'V')} can't"
                f" end, since the cell goes from {show_quantity(base, 'V')} to"
                f" {show_quantity(level, 'V')} at most",
                "choose a threshold between the two",
            )
        return Read(
            pulse=pulse,
            threshold=threshold,
            at_most=self._whole("at most", step.at_most, settings, least=1),
            settings=self._all(settings),
            train=self._train(step, settings),
        )

    def _loop(self, step: LoopStep, settings: Settings) -> Loop:
        volts = self._value(step.loop, settings)
        period = self._value(step.period, settings)
        if not (volts > 0 and 0 < period <= 1000):
            self._problem(
                f"a loop of {volts:g} V and {period:g} s is swept",
                "sweep amplitudes above 0 V and periods to 1000 s",
            )
            volts, period = 1.0, 1e-3
        if step.at == "cell":
            # Both ends must arrive at the cell; behind a diode they can't.
            low, high = (
                self._panel_for(f"a loop of {show_quantity(volts, 'V')}", each)
                for each in (-volts, volts)
            )
            volts = max(-low, high)
        return Loop(pulse=triangle("loop", volts, period), settings=self._all(settings))

    def _train(self, step: StepStep | ReadStep, settings: Settings) -> int:
        if step.capture == "each":
            if "train_of" in step.model_fields_set:
                self._problem(
                    "'train of' stands at a step or read that captures each pulse by itself",
                    "add 'capture: train', or leave it out",
                )
            return 1
        return self._whole("train of", step.train_of, settings, least=1)

    # Values.

    def _all(self, settings: Settings) -> Settings:
        """Return settings with those that are declared as parameters resolved.

        A parameter that is swept somewhere else is not among them: its value as declared means
        nothing here, and would be taken for one of the sweep's.
        """
        absent = self._elsewhere.difference(self._inside)
        kept = {name: value for name, value in settings.items() if name not in absent}
        return {key: settings[name.word] for key, name in self._names.items()} | kept

    def _value(self, value: float | Name, settings: Settings) -> float:
        return settings[value.word] if isinstance(value, Name) else value

    def _optional(self, held: Model, name: str, settings: Settings) -> float | None:
        return None if getattr(held, name) is None else self._bounded(held, name, settings)

    def _bounded(self, held: Model, name: str, settings: Settings) -> float:
        """Return the value of a model's setting, which where it is swept keeps the same bounds."""
        value = self._value(getattr(held, name), settings)
        field = type(held).model_fields[name]
        if (read := quantified(field)) is not None:
            try:
                read.check(value)
            except QuantityError as error:
                self._problem(
                    f"a value swept as {field.alias or name!r} does not fit: {error.problem}",
                    error.remedy,
                )
        return value

    def _whole(
        self,
        what: str,
        value: float | Name,
        settings: Settings,
        *,
        least: int,
        most: int = _MOST_ACTIONS,
    ) -> int:
        number = self._value(value, settings)
        if not least <= number <= most or number != int(number):
            self._problem(
                f"{what} is {number:g} in a sweep",
                f"sweep it over whole numbers from {least} to {most}",
            )
            return 0
        return int(number)

    def _pulse(self, name: str, settings: Settings) -> Pulse:
        values = {}
        for setting in PULSE_KINDS:
            key = f"{name}.{setting}"
            # A sweep of the setting itself wins over the parameter it was declared with.
            if key not in settings and key in self._names:
                values[setting] = settings[self._names[key].word]
            else:
                values[setting] = settings[key]
        if self._recipe.model.pulses[name].at == "cell":
            for setting in ("level", "base"):
                values[setting] = self._panel_for(f"the {setting} of {name!r}", values[setting])
        pulse = Pulse(name=name, **values)
        self._check_pulse(pulse)
        return pulse

    def _panel_for(self, what: str, cell_volts: float) -> float:
        try:
            return self._bench.panel_volts_for_cell(cell_volts)
        except CellVoltsUnreachable as error:
            self._problem(
                f"{what} shall be {show_quantity(cell_volts, 'V')} across the cell, and {error}",
                "write what the wiring lets through, or give it at the panel",
            )
            return 0.0

    def _check_pulse(self, pulse: Pulse) -> None:
        if pulse.level == pulse.base:
            self._problem(f"pulse {pulse.name!r}: its level is its base", "make them differ")
        if (
            not 0 < pulse.width <= 1000
            or not 0 < pulse.edge <= 100
            or not (0 <= pulse.rest <= LONGEST_WAIT)
        ):
            self._problem(
                f"pulse {pulse.name!r}: a time in it is out of bounds",
                "use widths to 1000 s, edges to 100 s, and rests of 0 s or more",
            )
        elif pulse.width < pulse.ramp:
            self._problem(
                f"pulse {pulse.name!r}: its edges of {show_quantity(pulse.edge, 's')} leave no"
                f" flat top in a width of {show_quantity(pulse.width, 's')}",
                "write a shorter edge or a longer width",
            )


def _least(count: float | Name) -> int:
    """Return what a count is at least; what is named may be swept."""
    return 1 if isinstance(count, Name) else int(count)


def _written(written: object) -> float:
    kind = kind_of(written)
    if kind is None:
        raise ValueError(f"{written!r} passed as a quantity")
    return parse_quantity(written, kind)


def pauses_of(step: CycleStep, pairs: int) -> list[int]:
    """Return after how many pairs a cycling pauses, the last pair among them."""
    stops = {int(each) for each in step.pause_at}
    if each_decade := int(step.per_decade):
        place = 0
        while (stop := round(10 ** (place / each_decade))) < pairs:
            stops.add(stop)
            place += 1
    return sorted({each for each in stops if each < pairs} | {pairs})
