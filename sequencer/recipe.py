"""Read a recipe: its text becomes models, and every mistake comes back with its place.

All mistakes of a file are told at once, whether they are in the YAML, in a model or between
several parts of the recipe.
"""

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path as FilePath
from typing import Any

from pulsetally.sequencer.errors import Mistake, RecipeError
from pulsetally.sequencer.models import (
    WORD,
    Declared,
    Model,
    Name,
    field_names,
    is_tag,
    kind_of,
    quantified,
    validate,
)
from pulsetally.sequencer.quantities import NUMBER, Kind
from pulsetally.sequencer.ranges import RangeFault, axis_values
from pulsetally.sequencer.steps import (
    PULSE_KINDS,
    STEP_MODELS,
    CyclePair,
    PulseModel,
    RecipeModel,
    StopWhen,
)
from pulsetally.sequencer.yaml_places import (
    Path,
    PlacedData,
    load_yaml,
    nearest,
    plain_number,
    read_text,
)

_WORD = re.compile(WORD)
# A name of the program's own in what rounds are listed by.
_TAKEN = ("cycles",)


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
    hidden = _hidden(placed, overrides or {})
    mistakes = _apply_overrides(placed, overrides or {})
    declared = _declared(placed)
    mistakes += _check_parameters(placed, declared)
    model, found = validate(RecipeModel, placed, known=_known, context=declared)
    mistakes += found
    given = dict.fromkeys(overrides or {}, "--set") | hidden
    mistakes += _check_sweeps(placed, declared, given, _uses(model))
    if mistakes:
        raise RecipeError(sorted(mistakes, key=lambda each: (each.line, each.column)))
    return Recipe(file=file, text=text, overrides=dict(overrides or {}), model=model)


def _known(path: Path) -> list[str]:
    if path and path[-1] in _GROUPS:
        return field_names(_GROUPS[str(path[-1])])
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


def _hidden(placed: PlacedData, overrides: Mapping[str, str]) -> dict[str, str]:
    """Return parameter -> option that puts a value where a pulse setting names the parameter."""
    pulses, hidden = _group(placed, "pulses"), {}
    for name in overrides:
        pulse, _, setting = name.partition(".")
        written = pulses[pulse].get(setting) if isinstance(pulses.get(pulse), dict) else None
        if isinstance(written, str) and written in _group(placed, "parameters"):
            hidden[written] = f"--set {name}"
    return hidden


def _uses(held: object) -> dict[str, Kind]:
    """Return parameter -> kind of quantity that it is used as, one with a unit before a number."""
    uses: dict[str, Kind] = {}
    if isinstance(held, Model):
        for name, field in type(held).model_fields.items():
            value, read = getattr(held, name), quantified(field)
            if isinstance(value, Name) and read is not None:
                uses |= {value.word: read.kind} if read.kind.unit else {}
            else:
                uses |= _uses(value)
    elif isinstance(held, list | dict):
        for each in held.values() if isinstance(held, dict) else held:
            uses |= _uses(each)
    return uses


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
            if name in _TAKEN:
                problem = f"{name!r} is a word of the program's own"
                remedy = "call it something else"
                mistakes.append(placed.mistake((group, name), problem, remedy, at_key=True))
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


_GROUPS: dict[str, Any] = {"cycle": CyclePair, "stop when": StopWhen}


def _steps(steps: object, path: Path) -> Iterator[tuple[dict[str, Any], Path]]:
    """Yield every step of a recipe as written, however deep, with its place."""
    for index, step in enumerate(steps if isinstance(steps, list) else []):
        if isinstance(step, dict):
            yield step, (*path, index)
            yield from _steps(step.get("steps"), (*path, index, "steps"))


def _check_sweeps(
    placed: PlacedData,
    declared: Declared,
    given: Mapping[str, str],
    uses: Mapping[str, Kind],
) -> list[Mistake]:
    """Look at every sweep and tune. given: parameter or setting -> option that would cancel it."""
    mistakes: list[Mistake] = []
    steps = placed.data.get("steps") if isinstance(placed.data, dict) else None
    for step, path in _steps(steps, ("steps",)):
        axes = step.get("sweep")
        if isinstance(axes, dict):
            lengths = set()
            for name, written in axes.items():
                here = (*path, "sweep", name)
                found, more = _check_axis(placed, declared, name, written, here)
                mistakes += more or _check_unit(declared, name, found, placed, here, uses)
                mistakes += _check_override(placed, name, here, given)
                lengths.add(len(found))
            if step.get("together") in ("yes", True) and len(lengths) > 1 and 0 not in lengths:
                problem = f"axes that move together have {_list(sorted(lengths))} values"
                remedy = "give all of them as many values"
                mistakes.append(placed.mistake((*path, "sweep"), problem, remedy))
        if isinstance(step.get("tune"), str) and isinstance(step.get("between"), list):
            mistakes += _check_tune(placed, declared, step, path, given, uses)
    return mistakes


def _list(numbers: list[int]) -> str:
    return " and ".join(str(each) for each in numbers)


def _check_override(
    placed: PlacedData, name: str, path: Path, given: Mapping[str, str]
) -> list[Mistake]:
    if name not in given:
        return []
    verb = "tuned" if path[-1] == "tune" else "swept"
    problem = f"{name!r} is {verb} here, so --set would change nothing"
    if given[name] != "--set":
        problem = f"{name!r} is {verb} here, and {given[name]} takes its place in a pulse"
    remedy = f"change the {'tune' if verb == 'tuned' else 'sweep'}, or leave that --set out"
    return [placed.mistake(path, problem, remedy, at_key=verb == "swept")]


def _check_unit(
    declared: Declared,
    name: str,
    values: list[float],
    placed: PlacedData,
    path: Path,
    uses: Mapping[str, Kind],
) -> list[Mistake]:
    """Refuse numbers without a unit for what was declared as 0, which needs none, and is a time."""
    kind = uses.get(name)
    if kind is None or axis_kind(name, declared) is not NUMBER or not any(values):
        return []
    problem = (
        f"{name!r} is used as {kind.name} and declared without a unit, so that these have none"
    )
    return [
        placed.mistake(
            path, problem, f"declare it as '{name}: 0 {kind.unit}', and write units here"
        )
    ]


def _check_axis(
    placed: PlacedData, declared: Declared, name: str, written: object, path: Path
) -> tuple[list[float], list[Mistake]]:
    kind = axis_kind(name, declared)
    if kind is None:
        return [], [_unknown_setting(placed, declared, name, path, at_key=True)]
    try:
        return axis_values(name, written, kind), []
    except RangeFault as error:
        where = path if error.place is None else (*path, error.place)
        return [], [placed.mistake(where, error.problem, error.remedy)]


def _check_tune(
    placed: PlacedData,
    declared: Declared,
    step: dict[str, Any],
    path: Path,
    given: Mapping[str, str],
    uses: Mapping[str, Kind],
) -> list[Mistake]:
    name = step["tune"]
    if axis_kind(name, declared) is None:
        return [_unknown_setting(placed, declared, name, (*path, "tune"))]
    ends, mistakes = _check_axis(placed, declared, name, step["between"], (*path, "between"))
    if len(ends) == 2 and ends[0] >= ends[1]:
        problem, remedy = "the first value is not the smaller one", "write [smaller, larger]"
        mistakes.append(placed.mistake((*path, "between"), problem, remedy))
    if not mistakes:
        mistakes += _check_unit(declared, name, ends, placed, (*path, "between"), uses)
    return mistakes + _check_override(placed, name, (*path, "tune"), given)


def _unknown_setting(
    placed: PlacedData, declared: Declared, name: str, path: Path, *, at_key: bool = False
) -> Mistake:
    known = _settable({pulse: {} for pulse in declared.pulses}, declared.parameters or {})
    return placed.mistake(
        path,
        f"{name!r} is not a parameter or pulse setting of this recipe",
        nearest(name, known),
        at_key=at_key,
    )


def axis_kind(name: str, declared: Declared) -> Kind | None:
    """Return the kind of what a sweep's axis changes; None if the recipe has no such thing."""
    parameters = declared.parameters or {}
    if name in parameters:
        return kind_of(parameters[name])
    pulse, _, setting = name.partition(".")
    return PULSE_KINDS.get(setting) if pulse in declared.pulses else None
