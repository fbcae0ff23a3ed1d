"""Shared ground of the recipe's and the bench file's models: values with places in their errors.

Pydantic does the walking and collects every error; this module makes its errors ours: file,
line, column, what was found, what is allowed, what to write.
"""

import inspect
import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Annotated, Any

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    GetCoreSchemaHandler,
    GetJsonSchemaHandler,
    ValidationError,
    ValidationInfo,
    WithJsonSchema,
)
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails, PydanticCustomError, core_schema

from pulsetally.sequencer.errors import Mistake
from pulsetally.sequencer.quantities import (
    KINDS,
    Kind,
    QuantityError,
    format_quantity,
    is_quantity,
    parse_quantity,
    plain_quantity,
    quantity_pattern,
    show_quantity,
)
from pulsetally.sequencer.yaml_places import Path, PlacedData, nearest

# What pulses and parameters may be called.
WORD = "[A-Za-z][A-Za-z0-9_-]*"


class Model(BaseModel):
    """A group of settings: frozen, and nothing but what is declared."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)

    @classmethod
    def __get_pydantic_json_schema__(
        cls, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        """Describe the group for editors: each setting in the docstring's words."""
        described = handler(schema)
        group = handler.resolve_ref_schema(described)
        group["description"] = summary(cls)
        told = field_descriptions(cls)
        for name, field in cls.model_fields.items():
            setting = group["properties"][field.alias or name]
            words = [told.get(name, ""), setting.get("description", "")]
            setting["description"] = "; ".join(filter(None, words))
            default = written_value(field.default, quantified(field))
            if isinstance(default, (str, int, float)):
                setting["default"] = default
            else:
                # There is none, or it can't be written.
                setting.pop("default", None)
        return described


def summary(model: type[BaseModel]) -> str:
    """Return the first sentence of a model's docstring."""
    return inspect.cleandoc(model.__doc__ or "").partition("\n\n")[0]


def field_descriptions(model: type[BaseModel]) -> dict[str, str]:
    """Return what a model's docstring says of its fields: 'name, other: words. third: words.'."""
    text = " ".join(inspect.cleandoc(model.__doc__ or "").partition("\n\n")[2].split())
    names = "|".join(model.model_fields)
    parts = re.split(rf"(?:^|(?<=\. ))((?:{names})(?:, (?:{names}))*): ", text)
    return {
        name: words.strip().removesuffix(".")
        for listed, words in zip(parts[1::2], parts[2::2], strict=True)
        for name in listed.split(", ")
    }


def quantified(field: FieldInfo) -> "Quantified | None":
    """Return how a field reads its quantity; None if it holds none."""
    return next((each for each in field.metadata if isinstance(each, Quantified)), None)


def written_value(value: object, read: "Quantified | None") -> object:
    """Write a field's value as a file has it, so that it is read back as the same value.

    read: how the field reads a quantity. What can't be written is given back as it is.
    """
    if isinstance(value, Name):
        return value.word
    if isinstance(value, bool):
        return "yes" if value else "no"
    if not isinstance(value, (int, float)):
        return value
    if not math.isfinite(value):
        return None
    if read is not None and read.kind.unit:
        return format_quantity(value, read.kind)
    # Larger floats are whole as well, and would be written with all their digits.
    return int(value) if value == int(value) and abs(value) <= 2**53 else value


def fault(problem: str, remedy: str) -> PydanticCustomError:
    """Build an error that carries a problem and a remedy through pydantic."""
    return PydanticCustomError("fault", "{problem}", {"problem": problem, "remedy": remedy})


@dataclass(frozen=True, slots=True)
class Name:
    """Stand for a parameter, to be looked up when the plan is made."""

    word: str


@dataclass(frozen=True, slots=True)
class Declared:
    """What a recipe declares, known before its steps are read.

    pulses: the names of its pulses. parameters: name -> value as written.
    """

    pulses: tuple[str, ...] = ()
    parameters: dict[str, Any] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantified:
    """Read a quantity of one kind, or the name of a parameter, in a model's field.

    least, most, above: bounds in SI units. whole: only whole numbers. names: a parameter's
    name is allowed; the value it was declared with is checked like a written one.
    """

    kind: Kind
    least: float | None = None
    most: float | None = None
    above: float | None = None
    whole: bool = False
    names: bool = False

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> core_schema.CoreSchema:
        """Tell pydantic to read what is written before it looks at the type."""
        return core_schema.with_info_before_validator_function(self._read, handler(source))

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        """Describe what may be written, for editors."""
        return self.schema()

    def schema(self) -> dict[str, Any]:
        """Return the JSON schema of what may be written.

        Bounds of a quantity with a unit are told in words: a pattern can say only its sign.
        """
        pattern = quantity_pattern(self.kind, least=self.least, above=self.above)
        ways: list[dict[str, Any]] = [{"type": "string", "pattern": pattern}]
        if not self.kind.unit:
            bounds = (("minimum", self.least), ("maximum", self.most),
                      ("exclusiveMinimum", self.above))  # fmt: skip
            number = {"type": "integer" if self.whole else "number"}
            ways.append(number | {word: value for word, value in bounds if value is not None})
        elif (self.least is None or self.least <= 0) and (self.above is None or self.above < 0):
            ways.append({"const": 0})
        text = "a whole number" if self.whole else self.kind.name
        if self.least is not None and self.most is not None:
            text += f" from {self._shown(self.least)} to {self._shown(self.most)}"
        elif self.least is not None:
            text += f" of {self._shown(self.least)} or more"
        elif self.above is not None:
            text += f" above {self._shown(self.above)}"
            text += f" and to {self._shown(self.most)}" if self.most is not None else ""
        if self.names:
            ways.append({"type": "string", "pattern": f"^{WORD}$"})
            text += ", or the name of a parameter"
        example = self.kind.example if self.kind.unit else self._example()
        return {"anyOf": ways, "description": text, "examples": [example]}

    def _shown(self, value: float) -> str:
        return show_quantity(value, self.kind.unit) if self.kind.unit != "%" else f"{value:.0%}"

    def _example(self) -> float:
        example = float(self.kind.example)
        least, most = self.least or -math.inf, math.inf if self.most is None else self.most
        return int(min(max(example, least), most))

    def _read(self, written: object, info: ValidationInfo) -> float | Name:
        if isinstance(written, Name):
            return written
        try:
            if self.names and isinstance(written, str) and not is_quantity(written):
                return self._named(written, info)
            return self._checked(parse_quantity(written, self.kind))
        except QuantityError as error:
            raise fault(error.problem, error.remedy) from error

    def check(self, value: float) -> None:
        """Look whether a value in SI units keeps the bounds. Raises QuantityError."""
        try:
            self._checked(value)
        except PydanticCustomError as error:
            told = error.context or {}
            raise QuantityError(told["problem"], told["remedy"]) from error

    def _checked(self, value: float) -> float:
        # Bounds are told as a file has them: without its unit a value would be refused again.
        shown = plain_quantity(value, self.kind)
        if self.least is not None and value < self.least:
            least = plain_quantity(self.least, self.kind)
            raise fault(f"{shown} is below {least}", f"write {least} or more")
        if self.above is not None and value <= self.above:
            above = plain_quantity(self.above, self.kind)
            raise fault(f"{shown} is not above {above}", f"write more than {above}")
        if self.most is not None and value > self.most:
            most = plain_quantity(self.most, self.kind)
            raise fault(f"{shown} is above {most}", f"write {most} or less")
        if self.whole and value != int(value):
            whole = math.floor(value)
            raise fault(f"{shown} is not a whole number", f"write {whole} or {whole + 1}")
        return value

    def _named(self, written: str, info: ValidationInfo) -> Name:
        declared: Declared = info.context or Declared()
        parameters = declared.parameters or {}
        if written not in parameters:
            raise fault(
                f"{written[:60]!r} is neither {self.kind.name} nor a declared parameter",
                f"{nearest(written, [*parameters])}, or a value such as '{self.kind.example}'"
                if parameters
                else f"write a value such as '{self.kind.example}', or declare the parameter",
            )
        try:
            self._checked(parse_quantity(parameters[written], self.kind))
        except QuantityError as error:
            problem, remedy = error.problem, error.remedy
        except PydanticCustomError as error:
            told = error.context or {}
            problem, remedy = told["problem"], told["remedy"]
        else:
            return Name(written)
        raise PydanticCustomError(
            "fault",
            "{problem}",
            {
                "problem": f"parameter {written!r} does not fit: {problem}",
                "remedy": remedy,
                "parameter": written,
            },
        )


def quantity(
    kind: Kind,
    *,
    least: float | None = None,
    most: float | None = None,
    above: float | None = None,
    whole: bool = False,
    names: bool = False,
) -> Quantified:
    """Return what reads a quantity of one kind; see Quantified."""
    return Quantified(kind=kind, least=least, most=most, above=above, whole=whole, names=names)


@dataclass(frozen=True, slots=True)
class OneOf:
    """Read one of a few words in a model's field."""

    words: tuple[str, ...]

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> core_schema.CoreSchema:
        """Tell pydantic to look at the word first."""
        return core_schema.no_info_before_validator_function(self._read, handler(source))

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        """Describe what may be written, for editors."""
        return {"enum": [*self.words]}

    def _read(self, written: object) -> str:
        if isinstance(written, str) and written in self.words:
            return written
        raise fault(
            f"{str(written)[:60]!r} is not known here", nearest(str(written), [*self.words])
        )


def _yes_or_no(written: object) -> bool:
    # YAML 1.2 knows only true and false; people write yes and no.
    known = {"yes": True, "no": False, True: True, False: False}
    if isinstance(written, (str, bool)) and written in known:
        return known[written]
    raise fault(f"{str(written)[:60]!r} is neither yes nor no", "write 'yes' or 'no'")


def schema_of_quantities(*kinds: Kind) -> dict[str, Any]:
    """Return the JSON schema of a quantity of any of these kinds."""
    ways: list[dict[str, Any]] = [
        {"type": "string", "pattern": "|".join(map(quantity_pattern, kinds))},
        {"const": 0} if all(kind.unit for kind in kinds) else {"type": "number"},
    ]
    return {"anyOf": ways, "examples": [kinds[0].example]}


YesNo = Annotated[
    bool,
    BeforeValidator(_yes_or_no),
    WithJsonSchema({"enum": ["yes", "no", True, False]}),
]


def kind_of(written: object) -> Kind | None:
    """Find the kind of a quantity from its unit; None if it is not a quantity."""
    for kind in reversed(KINDS):
        try:
            parse_quantity(written, kind)
        except QuantityError:
            continue
        return kind
    return None


def units_of(parameters: Mapping[str, Any]) -> dict[str, str]:
    """Return the SI unit of each parameter that has one, from its value as written."""
    kinds = {name: kind_of(written) for name, written in parameters.items()}
    return {name: kind.unit for name, kind in kinds.items() if kind is not None and kind.unit}


def field_names(model: type[BaseModel]) -> list[str]:
    """Return the names a model's settings have in a file."""
    return [field.alias or name for name, field in model.model_fields.items()]


def validate(
    model: type[BaseModel],
    placed: PlacedData,
    *,
    known: Callable[[Path], list[str]],
    context: Declared | None = None,
) -> tuple[Any, list[Mistake]]:
    """Build a model from placed data; return it, or None, and every mistake.

    known: for the path of a group, the names of the settings it may have.
    """
    try:
        return model.model_validate(placed.data, context=context), []
    except ValidationError as error:
        return None, [_mistake(entry, placed, known) for entry in error.errors()]


def _mistake(
    entry: ErrorDetails, placed: PlacedData, known: Callable[[Path], list[str]]
) -> Mistake:
    # A tag such as <read> says which kind of step was tried; it is no part of the file.
    path: Path = tuple(part for part in entry["loc"] if not is_tag(part))
    kind, context = entry["type"], entry.get("ctx", {})
    if kind == "fault":
        given = ("parameters", context.get("parameter", ""))
        if given in placed.origins:
            # The value came from an option: that is the place to mend.
            path = given
        return placed.mistake(path, context["problem"], context["remedy"])
    if kind == "extra_forbidden":
        names = known(entry["loc"][:-1])
        return placed.mistake(
            path,
            f"there is no setting {str(path[-1])[:60]!r} here",
            nearest(str(path[-1]), names),
            at_key=True,
        )
    if kind == "missing":
        return placed.mistake(
            path[:-1], f"the setting {path[-1]!r} is missing", f"add '{path[-1]}: ...'"
        )
    found = entry["input"]
    if kind in ("dict_type", "model_type", "model_attributes_type"):
        names = known(entry["loc"])
        remedy = (
            f"write settings such as '{names[0]}: ...'" if names else "write 'name: value' lines"
        )
        return placed.mistake(path, f"{_shown(found)} is not a group of settings", remedy)
    if kind in ("too_short", "too_long"):
        return placed.mistake(path, *_wrong_length(context))
    if kind in ("string_too_short", "string_too_long"):
        problem = f"the text has {len(found)} characters"
        least, most = context.get("min_length", 1), context.get("max_length")
        remedy = f"write {most} or fewer" if most else f"write {least} or more"
        return placed.mistake(path, problem, remedy)
    if kind == "list_type":
        return placed.mistake(path, f"{_shown(found)} is not a list", "write '- ' before each item")
    if kind == "string_type":
        return placed.mistake(path, f"{_shown(found)} is not text", "write a word or a sentence")
    return placed.mistake(path, f"{_shown(found)}: {entry['msg']}", "write what is allowed")


def _wrong_length(context: dict[str, Any]) -> tuple[str, str]:
    """Return problem and remedy for a list of the wrong length."""
    length = context["actual_length"]
    wanted: int = context["min_length" if "min_length" in context else "max_length"]
    if not length:
        return "the list is empty", f"write at least {_items(wanted)}"
    return f"the list has {_items(length)}", f"write {_items(wanted)}"


def _items(count: int) -> str:
    return "one item" if count == 1 else f"{count} items"


def is_tag(part: str | int) -> bool:
    """Say whether a part of an error's path names the kind of a step."""
    return isinstance(part, str) and part.startswith("<")


def _shown(found: object) -> str:
    if found is None:
        return "a blank"
    if isinstance(found, (dict, list)):
        return "a list" if isinstance(found, list) else "a group of settings"
    return f"{str(found)[:60]!r}"
