"""What a recipe does, as a small tree of sentences: repeats, sweeps, tunings, cyclings, steps.

It is read off the recipe as written, not off its rounds, so that ten thousand of them stay a few
lines.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from pulsetally.sequencer.models import Declared, Model, Name, kind_of
from pulsetally.sequencer.quantities import (
    NUMBER,
    SHARE,
    TIME,
    VOLTAGE,
    Kind,
    parse_quantity,
    show_duration,
    show_quantity,
)
from pulsetally.sequencer.ranges import axis_values
from pulsetally.sequencer.recipe import Recipe, axis_kind
from pulsetally.sequencer.steps import (
    AskStep,
    ContactStep,
    CycleStep,
    LoopStep,
    PresetStep,
    PulseModel,
    PundStep,
    ReadStep,
    RepeatStep,
    StepStep,
    SweepStep,
    TuneStep,
    WaitStep,
)
from pulsetally.sequencer.unfold import pauses_of

# Of a sweep's values so many are shown, first ones and the last.
_SHOWN_VALUES = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """What a sweep changes: a setting's name, its SI unit, and its values in the order written."""

    name: str
    unit: str
    values: tuple[float, ...]

    @property
    def words(self) -> str:
        """Return it in one line: up.width: 80 us, 100 us, ... 1 ms (11 values)."""
        return f"{self.name}: {_few(self.values, self.unit)}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Branch:
    """One step of a recipe, with the steps that it holds.

    verb: as in a recipe. words: the step in words. times: how often its steps are done, at most;
    None for a step that holds none, or where a sweep says how often. axes: of a sweep. seed: of
    the order of a shuffled sweep, else None.
    """

    verb: str
    words: str
    times: int | None = None
    axes: tuple[Axis, ...] = ()
    seed: int | None = None
    steps: tuple["Branch", ...] = ()

    def as_object(self) -> dict[str, object]:
        """Return it as an object for JSON, values in SI units."""
        found: dict[str, object] = {"verb": self.verb, "words": self.words}
        if self.times is not None:
            found["times"] = self.times
        if self.axes:
            found["axes"] = [
                {"name": each.name, "unit": each.unit, "values": list(each.values)}
                for each in self.axes
            ]
        if self.seed is not None:
            found["seed"] = self.seed
        if self.steps:
            found["steps"] = [each.as_object() for each in self.steps]
        return found


def outline_of(recipe: Recipe) -> tuple[Branch, ...]:
    """Return what a recipe does, step by step."""
    return _Outliner(recipe).branches(recipe.model.steps, frozenset())


class _Outliner:
    """Put steps into words; changed: names of what sweeps around a step change."""

    def __init__(self, recipe: Recipe) -> None:
        self._pulses = recipe.model.pulses
        self._parameters = recipe.model.parameters
        self._declared = Declared(tuple(self._pulses), self._parameters)

    def branches(self, steps: Sequence[Model], changed: frozenset[str]) -> tuple[Branch, ...]:
        return tuple(self._branch(each, changed) for each in steps)

    def _branch(self, step: Model, changed: frozenset[str]) -> Branch:
        match step:
            case RepeatStep():
                return self._repeat(step, changed)
            case SweepStep():
                return self._sweep(step, changed)
            case TuneStep():
                return self._tune(step, changed)
            case CycleStep():
                return self._cycle(step, changed)
        verb = type(step).__name__.removesuffix("Step").lower()
        return Branch(verb=verb, words=self._leaf(step, changed))

    # Steps that hold steps.

    def _repeat(self, step: RepeatStep, changed: frozenset[str]) -> Branch:
        times = self._number(step.repeat, changed)
        shown = self._show(step.repeat, NUMBER, changed)
        return Branch(
            verb="repeat",
            words="once" if times == 1 else f"{shown} times",
            times=times,
            steps=self.branches(step.steps, changed),
        )

    def _sweep(self, step: SweepStep, changed: frozenset[str]) -> Branch:
        axes = tuple(self._axis(name, written) for name, written in step.sweep.items())
        lengths = [len(each.values) for each in axes]
        times = lengths[0] if step.together else math.prod(lengths)
        words = "; ".join(each.words for each in axes)
        if len(axes) > 1:
            grid = " x ".join(map(str, lengths))
            how = f"moving together, {times} steps" if step.together else f"{grid} = {times}"
            words += f" ({how})"
        shuffled = step.order == "shuffled"
        if shuffled:
            words += f", shuffled with seed {int(step.seed)}"
        return Branch(
            verb="sweep",
            words=words,
            times=times,
            axes=axes,
            seed=int(step.seed) if shuffled else None,
            steps=self.branches(step.steps, changed | set(step.sweep)),
        )

    def _tune(self, step: TuneStep, changed: frozenset[str]) -> Branch:
        ends = self._axis(step.tune, step.between)
        low, high = (show_quantity(each, ends.unit) for each in ends.values)
        wanted, within = (
            self._show(each, NUMBER, changed) for each in (step.full_count, step.within)
        )
        most = self._show(step.at_most, NUMBER, changed)
        return Branch(
            verb="tune",
            words=f"{step.tune} between {low} and {high} for a full count of {wanted} within"
            f" {within}, at most {most} rounds",
            times=self._number(step.at_most, changed),
            axes=(ends,),
            steps=self.branches(step.steps, changed | {step.tune}),
        )

    def _cycle(self, step: CycleStep, changed: frozenset[str]) -> Branch:
        pairs = self._number(step.pairs, changed)
        down, up = step.cycle.down, step.cycle.up
        words = (
            f"between {self._pulse(down, changed)}, and {self._pulse(up, changed)};"
            f" {self._show(step.pairs, NUMBER, changed)} pairs"
        )
        times = None
        if step.steps and pairs is not None:
            stops = [0, *pauses_of(step, pairs)]
            times = len(stops)
            words += f"; steps at {_few(stops, '')} pairs"
        stop = step.stop_when
        reasons = [
            f"{reason} {self._show(value, SHARE, changed)}"
            for reason, value in (
                ("switched charge below", stop.switched_charge_below),
                ("full count off by", stop.full_count_off_by),
            )
            if value is not None
        ]
        if stop.contact_is_lost:
            reasons.append("contact is lost")
        if reasons:
            words += f"; stops when {', or '.join(reasons)}"
        return Branch(
            verb="cycle",
            words=words,
            times=times,
            steps=self.branches(step.steps, changed | {"cycles"}),
        )

    # Steps that do something.

    def _leaf(self, step: Model, changed: frozenset[str]) -> str:
        match step:
            case PresetStep():
                return self._pulse(step.preset, changed)
            case ContactStep():
                return self._pulse(step.contact, changed)
            case PundStep():
                return self._pulse(step.pund, changed)
            case StepStep():
                count = self._show(step.count, NUMBER, changed)
                times = "1 pulse" if count == "1" else f"{count} pulses"
                return f"{self._pulse(step.step, changed)}, {times}{self._train(step, changed)}"
            case ReadStep():
                until = self._show(step.until, VOLTAGE, changed)
                most = self._show(step.at_most, NUMBER, changed)
                return (
                    f"{self._pulse(step.read, changed)}, until {until}, at most {most}"
                    f" pulses{self._train(step, changed)}"
                )
            case WaitStep():
                return self._show(step.wait, TIME, changed)
            case LoopStep():
                volts = self._show(step.loop, VOLTAGE, changed)
                across = " across the cell" if step.at == "cell" else ""
                return f"to {volts}{across}, {self._show(step.period, TIME, changed)} a period"
            case AskStep():
                within = self._show(step.within, TIME, changed)
                return f"{step.ask!r}, {within} at most, otherwise {step.otherwise}"
            case _:
                raise TypeError(f"{type(step).__name__} has no words")

    def _pulse(self, name: str, changed: frozenset[str]) -> str:
        model: PulseModel = self._pulses[name]
        across = " across the cell" if model.at == "cell" else ""
        shown = {
            setting: self._show(getattr(model, setting), kind, changed, f"{name}.{setting}")
            for setting, kind in (("level", VOLTAGE), ("width", TIME))
        }
        return f"{name}, {shown['level']}{across} for {shown['width']}"

    def _train(self, step: StepStep | ReadStep, changed: frozenset[str]) -> str:
        if step.capture == "each":
            return ""
        return f" in trains of {self._show(step.train_of, NUMBER, changed)}"

    # Values.

    def _axis(self, name: str, written: object) -> Axis:
        kind = axis_kind(name, self._declared)
        if kind is None:
            raise ValueError(f"{name!r} passed as an axis")
        return Axis(name=name, unit=kind.unit, values=tuple(axis_values(name, written, kind)))

    def _value(self, value: Any, changed: frozenset[str]) -> float | str:
        """Return a value in SI units, or the name of what a sweep around it changes."""
        if not isinstance(value, Name):
            return float(value)
        if value.word in changed:
            return value.word
        written = self._parameters[value.word]
        kind = kind_of(written)
        if kind is None:
            raise ValueError(f"{written!r} passed as a quantity")
        return parse_quantity(written, kind)

    def _number(self, value: float | Name, changed: frozenset[str]) -> int | None:
        found = self._value(value, changed)
        return None if isinstance(found, str) else int(found)

    def _show(
        self, value: float | Name, kind: Kind, changed: frozenset[str], setting: str = ""
    ) -> str:
        if setting in changed:
            return setting
        found = self._value(value, changed)
        if isinstance(found, str):
            return found
        return f"{100 * found:.4g} %" if kind is SHARE else _spell(found, kind.unit)


def _few(values: Sequence[float], unit: str) -> str:
    shown = [_spell(each, unit) for each in values]
    if len(shown) <= _SHOWN_VALUES:
        return ", ".join(shown)
    first = ", ".join(shown[: _SHOWN_VALUES - 2])
    return f"{first}, ... {shown[-1]} ({len(shown)} values)"


def _spell(value: float, unit: str) -> str:
    """Write a value for reading; a count with all its digits, unless it is as round as 1e6."""
    if unit == "s" and value >= 1000:
        # Nobody thinks in kiloseconds; 10000 s stays, and 7200 s are 2 h.
        whole = value % 60 == 0 or value >= 1e5
        return show_duration(value) if whole else f"{value:.6g} s"
    if unit or value != int(value):
        return show_quantity(value, unit)
    short = f"{value:.4g}".replace("e+0", "e").replace("e+", "e")
    return short if abs(value) >= 1e6 and float(short) == value else f"{value:.0f}"
