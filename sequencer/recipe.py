"""The recipe language: what a recipe may say, and how it is read.

A recipe is data. Its models are the language's definition; every mistake comes back with its
place, and all mistakes of a file at once.
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path as FilePath
from typing import Annotated, Any

from pydantic import BeforeValidator, Discriminator, Field, Tag, ValidationInfo

from pulsetally.sequencer.errors import Mistake, RecipeError
from pulsetally.sequencer.models import (
    Declared,
    Model,
    Name,
    fault,
    field_names,
    is_tag,
    kind_of,
    quantity,
    validate,
)
from pulsetally.sequencer.quantities import NUMBER, TIME, VOLTAGE, Kind
from pulsetally.sequencer.yaml_places import (
    Path,
    PlacedData,
    load_yaml,
    nearest,
    plain_number,
    read_text,
)

_WORD = re.compile(r"[A-Za-z][A-Za-z0-9_-]*")

Value = float | Name


def _pulse_name(written: object, info: ValidationInfo) -> str:
    declared: Declared = info.context or Declared()
    if not isinstance(written, str) or written not in declared.pulses:
        raise fault(
            f"{written!r} is not a pulse of this recipe",
            nearest(str(written), [*declared.pulses]) + ", or declare it under pulses",
        )
    return written


PulseName = Annotated[str, BeforeValidator(_pulse_name)]
Count = Annotated[Value, quantity(NUMBER, least=1, most=1_000_000, whole=True, names=True)]
# 0 is a count too: step 0 pulses, then read, is how a full count is taken in a sweep.
StepCount = Annotated[Value, quantity(NUMBER, least=0, most=1_000_000, whole=True, names=True)]


class PulseModel(Model):
    """A trapezoid from base to level and back.

    level, base: volts at the generator's panel. width: seconds between the 50 % points.
    edge: seconds from 10 % to 90 %. rest: least time at base after it, in seconds.
    """

    level: Annotated[Value, quantity(VOLTAGE, names=True)]
    width: Annotated[Value, quantity(TIME, above=0, most=1000, names=True)]
    base: Annotated[Value, quantity(VOLTAGE, names=True)] = 0.0
    edge: Annotated[Value, quantity(TIME, above=0, most=100, names=True)] = 100e-9
    rest: Annotated[Value, quantity(TIME, least=0, names=True)] = 1e-3


PULSE_KINDS: dict[str, Kind] = {
    "level": VOLTAGE,
    "width": TIME,
    "base": VOLTAGE,
    "edge": TIME,
    "rest": TIME,
}


class PresetStep(Model):
    """Drive the cell fully down with one pulse; a new round begins here."""

    preset: PulseName


class StepStep(Model):
    """Deliver a stated number of pulses."""

    step: PulseName
    count: StepCount = 1.0


class ReadStep(Model):
    """Deliver pulses until the end voltage passes the threshold, counting them."""

    read: PulseName
    until: Annotated[Value, quantity(VOLTAGE, names=True)]
    at_most: Annotated[Count, Field(alias="at most")]


class WaitStep(Model):
    """Leave the cell alone, with the output on at its base."""

    wait: Annotated[Value, quantity(TIME, least=0, names=True)]


class ContactStep(Model):
    """Look with a small pulse whether a cell is there; the run ends if it is open or short."""

    contact: PulseName


class RepeatStep(Model):
    """Do the steps a stated number of times."""

    repeat: Count
    steps: Annotated[list["Step"], Field(min_length=1)]


def _sweep_axes(written: object, info: ValidationInfo) -> object:
    if not isinstance(written, dict) or not written:
        raise fault(
            "a sweep names what it changes", "write 'sweep: {up.width: [80 us, 100 us, 125 us]}'"
        )
    return written


class SweepStep(Model):
    """Do the steps for each combination of the stated values of the stated settings."""

    sweep: Annotated[dict[str, list[Any]], BeforeValidator(_sweep_axes)]
    steps: Annotated[list["Step"], Field(min_length=1)]


STEP_MODELS: dict[str, type[Model]] = {
    "preset": PresetStep,
    "step": StepStep,
    "read": ReadStep,
    "wait": WaitStep,
    "contact": ContactStep,
    "repeat": RepeatStep,
    "sweep": SweepStep,
}


def _verb(written: object) -> str | None:
    if isinstance(written, Model):
        return next(f"<{verb}>" for verb, model in STEP_MODELS.items() if type(written) is model)
    if isinstance(written, dict):
        # Some verbs are settings of none, so at most one of them is here.
        return next((f"<{verb}>" for verb in STEP_MODELS if verb in written), None)
    return None


def _known_step(written: object) -> object:
    if isinstance(written, Model) or _verb(written):
        return written
    verbs = [*STEP_MODELS]
    if isinstance(written, dict) and written:
        word = str(next(iter(written)))
        raise fault(f"there is no step {word!r}", nearest(word, verbs))
    if isinstance(written, str):
        raise fault(f"{written!r} is not a step", f"write it as '{verbs[0]}: down'")
    raise fault("this is not a step", f"begin it with one of {', '.join(verbs)}")


Step = Annotated[
    Annotated[PresetStep, Tag("<preset>")]
    | Annotated[StepStep, Tag("<step>")]
    | Annotated[ReadStep, Tag("<read>")]
    | Annotated[WaitStep, Tag("<wait>")]
    | Annotated[ContactStep, Tag("<contact>")]
    | Annotated[RepeatStep, Tag("<repeat>")]
    | Annotated[SweepStep, Tag("<sweep>")],
    Discriminator(_verb),
    BeforeValidator(_known_step),
]


def _title(written: object) -> object:
    if not isinstance(written, str) or not written.strip():
        raise fault("a recipe has a title", "write 'recipe: what it finds out'")
    return written


class RecipeModel(Model):
    """A whole recipe: its title, what it declares, and its steps."""

    recipe: Annotated[str, BeforeValidator(_title)]
    purpose: str = ""
    parameters: Annotated[dict[str, Any], Field(default_factory=dict)]
    pulses: Annotated[dict[str, PulseModel], Field(default_factory=dict)]
    steps: Annotated[list[Step], Field(min_length=1)]


RepeatStep.model_rebuild()
SweepStep.model_rebuild()
RecipeModel.model_rebuild()


@dataclass(frozen=True, slots=True, kw_only=True)
class Recipe:
    """A recipe that was read without a mistake.

    file: its name in messages. text: as written. overrides: settings given by option.
    """

    file: str
    text: str
    overrides: dict[str, str]
    model: RecipeModel

    @property
    def title(self) -> str:
        """Return the recipe's title."""
        return self.model.recipe


def load_recipe(path: FilePath, overrides: Mapping[str, str] | None = None) -> Recipe:
    """Read a recipe file. Raises RecipeError with every mistake."""
    text, mistakes = read_text(path, "recipe", _other_name(path))
    if mistakes:
        raise RecipeError(mistakes)
    return parse_recipe(text, file=str(path), overrides=overrides)


def _other_name(path: FilePath) -> str:
    known = shipped_recipes()
    return nearest(path.name.removesuffix(".yaml"), known, "name a file that is there, or")


def shipped_recipes() -> list[str]:
    """Return the names of the recipes that ship with the program."""
    names = (each.name for each in files("pulsetally.recipes").iterdir())
    return sorted(
        name.removesuffix(".yaml")
        for name in names
        if name.endswith(".yaml") and not name.endswith("_bench.yaml")
    )


def find_recipe(written: str, overrides: Mapping[str, str] | None = None) -> Recipe:
    """Read a recipe by the name of a shipped one, or by its path. Raises RecipeError."""
    if written not in shipped_recipes():
        return load_recipe(FilePath(written), overrides)
    file = f"{written}.yaml"
    text = (files("pulsetally.recipes") / file).read_text(encoding="utf-8")
    return parse_recipe(text, file=file, overrides=overrides)


def parse_recipe(text: str, *, file: str, overrides: Mapping[str, str] | None = None) -> Recipe:
    """Read a recipe's text. overrides: 'up.width' or 'hold' -> value as a person writes it."""
    placed = load_yaml(text, file)
    if placed.mistakes:
        raise RecipeError(placed.mistakes)
    if isinstance(placed.data, dict) and "bench" in placed.data and "recipe" not in placed.data:
        problem, remedy = "this is a bench file, not a recipe", "name a recipe here"
        raise RecipeError([placed.mistake((), problem, remedy)])
    mistakes = _apply_overrides(placed, overrides or {})
    declared = _declared(placed)
    mistakes += _check_parameters(placed, declared)
    model, found = validate(RecipeModel, placed, known=_known, context=declared)
    mistakes += found
    mistakes += _check_sweeps(placed, declared, overrides or {})
    if mistakes:
        raise RecipeError(sorted(mistakes, key=lambda each: (each.line, each.column)))
    return Recipe(file=file, text=text, overrides=dict(overrides or {}), model=model)


def _known(path: Path) -> list[str]:
    tags = [part for part in path if is_tag(part)]
    if tags:
        return field_names(STEP_MODELS[str(tags[-1]).strip("<>")])
    if len(path) == 2 and path[0] == "pulses":
        return field_names(PulseModel)
    return field_names(RecipeModel) if not path else []


def _group(placed: PlacedData, name: str) -> dict[str, Any]:
    group = placed.data.get(name) if isinstance(placed.data, dict) else None
    return group if isinstance(group, dict) else {}


def _declared(placed: PlacedData) -> Declared:
    return Declared(tuple(_group(placed, "pulses")), _group(placed, "parameters"))


def _apply_overrides(placed: PlacedData, overrides: Mapping[str, str]) -> list[Mistake]:
    mistakes: list[Mistake] = []
    pulses, parameters = _group(placed, "pulses"), _group(placed, "parameters")
    for name, written in overrides.items():
        origin = f"--set {name}={written}"
        pulse, dot, setting = name.partition(".")
        if name in parameters:
            path: Path = ("parameters", name)
            parameters[name] = plain_number(written)
        elif dot and isinstance(pulses.get(pulse), dict) and setting in PULSE_KINDS:
            path = ("pulses", pulse, setting)
            pulses[pulse][setting] = plain_number(written)
        else:
            mistakes.append(
                Mistake(
                    file=origin,
                    line=0,
                    column=0,
                    path="",
                    problem=f"this recipe has no parameter or pulse setting {name!r}",
                    remedy=nearest(name, _settable(pulses, parameters)),
                )
            )
            continue
        placed.origins[path] = origin
    return mistakes


def _settable(pulses: Mapping[str, Any], parameters: Mapping[str, Any]) -> list[str]:
    return [*parameters, *(f"{pulse}.{setting}" for pulse in pulses for setting in PULSE_KINDS)]


def _check_parameters(placed: PlacedData, declared: Declared) -> list[Mistake]:
    mistakes: list[Mistake] = []
    for name, written in (declared.parameters or {}).items():
        if kind_of(written) is None:
            mistakes.append(
                placed.mistake(
                    ("parameters", name),
                    f"{str(written)[:60]!r} is not a quantity",
                    "write a number, or a number with a unit such as '10 s'",
                )
            )
    for group in ("parameters", "pulses"):
        for name in _group(placed, group):
            if not _WORD.fullmatch(name):
                mistakes.append(
                    placed.mistake(
                        (group, name),
                        f"{name!r} can't be a name",
                        "use letters, digits, '_' and '-', beginning with a letter",
                        at_key=True,
                    )
                )
    return mistakes


def _check_sweeps(
    placed: PlacedData, declared: Declared, overrides: Mapping[str, str]
) -> list[Mistake]:
    mistakes: list[Mistake] = []

    def walk(steps: object, path: Path) -> None:
        for index, step in enumerate(steps if isinstance(steps, list) else []):
            if isinstance(step, dict):
                if isinstance(step.get("sweep"), dict):
                    for name, values in step["sweep"].items():
                        here = (*path, index, "sweep", name)
                        if name in overrides:
                            problem = f"{name!r} is swept here, so --set would change nothing"
                            remedy = "change the sweep, or leave that --set out"
                            mistakes.append(placed.mistake(here, problem, remedy, at_key=True))
                        mistakes.extend(_check_axis(placed, declared, name, values, here))
                walk(step.get("steps"), (*path, index, "steps"))

    walk(placed.data.get("steps") if isinstance(placed.data, dict) else None, ("steps",))
    return mistakes


def _check_axis(
    placed: PlacedData, declared: Declared, name: str, values: object, path: Path
) -> list[Mistake]:
    kind = axis_kind(name, declared)
    if kind is None:
        known = _settable({pulse: {} for pulse in declared.pulses}, declared.parameters or {})
        return [
            placed.mistake(
                path,
                f"{name!r} is not a parameter or pulse setting of this recipe",
                nearest(name, known),
                at_key=True,
            )
        ]
    if not isinstance(values, list):
        return []
    if not values:
        return [placed.mistake(path, "a sweep without values does nothing", "write some values")]
    return [
        placed.mistake(
            (*path, index),
            f"{str(written)[:60]!r} is not {kind.name}, which {name} needs",
            f"write one such as '{kind.example}'",
        )
        for index, written in enumerate(values)
        if (found := kind_of(written)) is not kind and not (found and written == 0)
    ]


def axis_kind(name: str, declared: Declared) -> Kind | None:
    """Return the kind of what a sweep's axis changes; None if the recipe has no such thing."""
    parameters = declared.parameters or {}
    if name in parameters:
        return kind_of(parameters[name])
    pulse, _, setting = name.partition(".")
    return PULSE_KINDS.get(setting) if pulse in declared.pulses else None
