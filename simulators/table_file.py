"""The table file: one YAML file that says which cell, wiring and instruments are simulated.

    table: a worn cell
    purpose: Show what fatigue does to a full count.
    cell: {remanent polarization: 15.5 uC/cm2, imprint: 0.3 V, domains: 168}
    wiring: {series resistance: 220 kohm}
    instruments: {family: scpi99}
    seed: 1

What is not said is as in a rehearsal without a table file. table_text writes what
parse_table reads.
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass, fields
from importlib.resources import files
from pathlib import Path as FilePath
from typing import Any

from pulsetally.simulators.settings import SimulationSettings
from pulsetally.simulators.table_file_quantities import Kind, format_quantity, is_finite
from pulsetally.simulators.table_file_reading import Tree, build, leader_of, tree_of, words_of
from pulsetally.simulators.table_file_words import NOTHING, Word
from pulsetally.simulators.table_file_yaml import (
    PlacedTable,
    TableFileError,
    TableMistake,
    load_yaml,
    nearest,
    read_text,
)

_PLAIN_TEXT = re.compile(r"[A-Za-z][A-Za-z0-9 ._/-]*[A-Za-z0-9]")
_YAML_WORDS = ("null", "true", "false", "yes", "no", "on", "off", "none")


@dataclass(frozen=True, slots=True, kw_only=True)
class TableFile:
    """A table file that was read without a mistake.

    title: what a person calls it. purpose: one sentence, or "".
    """

    title: str
    purpose: str
    settings: SimulationSettings


def shipped_tables() -> list[str]:
    """Return the names of the table files that ship with the program."""
    folder = files("pulsetally.simulators") / "tables"
    return sorted(
        each.name.removesuffix(".yaml") for each in folder.iterdir() if each.name.endswith(".yaml")
    )


def find_table(named: str) -> TableFile:
    """Read a table file, given its path or the name of a shipped one. Raises TableFileError."""
    if named in shipped_tables():
        file = f"{named}.yaml"
        source = files("pulsetally.simulators") / "tables" / file
        return parse_table(source.read_text(encoding="utf-8"), file=file)
    path = FilePath(named)
    if path.suffix or path.exists() or len(path.parts) > 1:
        return parse_table(read_text(path), file=named)
    problem = f"there is no table file {named!r}, shipped or here"
    remedy = f"{nearest(named, shipped_tables())}, or the path of your own"
    raise TableFileError(
        [TableMistake(file=named, line=0, column=0, path="", problem=problem, remedy=remedy)]
    )


def parse_table(text: str, *, file: str) -> TableFile:
    """Read a table file's text; file is its name in messages.

    Raises TableFileError with every mistake and its place.
    """
    placed = load_yaml(text, file)
    if not isinstance(placed.data, dict):
        placed.add((), "this is not a group of settings", "write 'table: what a person calls it'")
        placed.refuse()
    if "table" not in placed.data:
        for other in ("recipe", "bench", "dialect"):
            if other in placed.data:
                placed.add((), f"this is a {other} file", "name a table file here")
                placed.refuse()
    data = dict(placed.data)
    title, purpose = _sentence(data, "table", placed), _sentence(data, "purpose", placed)
    settings = build(SimulationSettings, data, (), placed)
    placed.refuse()
    return TableFile(title=title, purpose=purpose, settings=settings)


def _sentence(data: dict[str, Any], name: str, placed: PlacedTable) -> str:
    """Take a line of text out of the data; what is needed and missing is a mistake."""
    required = name == "table"
    if name not in data:
        if required:
            placed.add((), "the table has no name", "add 'table: what a person calls it'")
        return ""
    value = data.pop(name)
    if not isinstance(value, str) or not value.strip():
        placed.add((name,), "this is not a line of text", "write a few words")
        return ""
    return value


def table_text(settings: SimulationSettings, *, title: str, purpose: str = "") -> str:
    """Write a table file that parse_table reads back as the same settings.

    Everything is written out, but the options that are off: a later version's defaults change
    nothing. Not written is what belongs to the process (ports, transport), and the emission of
    a diode that isn't there. Raises ValueError for a title that is blank.
    """
    if not title.strip():
        raise ValueError("title is blank; a table has a name")
    lines = [f"table: {_text(title)}"]
    if purpose.strip():
        lines.append(f"purpose: {_text(purpose)}")
    return "\n".join([*lines, *_group_lines(settings, 0)]) + "\n"


def _group_lines(value: Any, depth: int, *, all_of_it: bool = True) -> list[str]:
    """Write a group's settings; not all_of_it: only those that differ from their defaults."""
    words = words_of(type(value))
    if not all_of_it:
        defaults = {each.name: each.default for each in fields(value)}
        words = {
            name: word for name, word in words.items() if getattr(value, name) != defaults[name]
        }
    return _branch_lines(tree_of(words), value, words, depth)


def _branch_lines(tree: Tree, value: Any, words: Mapping[str, Word], depth: int) -> list[str]:
    lines, indent = [], "  " * depth
    for name, branch in tree.items():
        leader = leader_of(branch, words)
        if leader is not None and getattr(value, leader) is None:
            lines.append(f"{indent}{name}: none")
        elif not isinstance(branch, str):
            lines += [f"{indent}{name}:", *_branch_lines(branch, value, words, depth + 1)]
        else:
            lines += _field_lines(name, getattr(value, branch), words[branch], depth)
    return lines


def _field_lines(name: str, value: Any, word: Word, depth: int) -> list[str]:
    indent = "  " * depth
    if word.listed:
        lines = [f"{indent}{name}:"] if value else []
        for each in value:
            # Most of what a fault can have is of no use to its kind.
            first, *rest = _group_lines(each, depth + 2, all_of_it=False)
            lines += [f"{indent}  - {first.lstrip()}", *rest]
        return lines
    if word.group and value is not None:
        return [f"{indent}{name}:", *_group_lines(value, depth + 1)]
    if word.group:
        return []
    return [f"{indent}{name}: {_value(value, word)}"]


def _value(value: Any, word: Word) -> str:
    if word.none is not NOTHING and value == word.none and not word.leads:
        return "none"
    if word.choices:
        return next(spoken for spoken, meant in word.choices.items() if meant == value)
    if word.kind is None:
        return _text(value)
    if word.many:
        return "[" + ", ".join(_quantity(each, word.kind) for each in value) + "]"
    return _quantity(value, word.kind)


def _quantity(value: object, kind: Kind) -> str:
    if not isinstance(value, (int, float)) or not is_finite(value):
        raise ValueError(f"{value!r} is not {kind.name}; a table file can't hold it")
    return format_quantity(value, kind)


def _text(text: str) -> str:
    if _PLAIN_TEXT.fullmatch(text) and text.lower() not in _YAML_WORDS:
        return text
    return '"' + "".join(_escaped(each) for each in text) + '"'


def _escaped(character: str) -> str:
    if character in '"\\':
        return f"\\{character}"
    if " " <= character <= "~":
        return character
    return f"\\U{ord(character):08x}"
