"""Turn a table file's plain values into the dataclasses of the simulated bench, by their words.

Nothing here knows a single setting: the words do. The dataclasses check their own values;
what they refuse becomes a mistake with a place, and reading goes on with a value that is
allowed, so that every mistake of a file is told.
"""

import re
from collections.abc import Mapping
from dataclasses import MISSING, Field, fields
from typing import Any

from pulsetally.simulators.table_file_quantities import QuantityError, parse_quantity
from pulsetally.simulators.table_file_words import NOTHING, WORDS, Word
from pulsetally.simulators.table_file_yaml import Path, PlacedTable, nearest, spell_path

# A name stands for a word or for a group of names.
Tree = dict[str, "str | Tree"]


def words_of(kind: type) -> dict[str, Word]:
    """Return the words of a class, by its fields, in the order in which a file has them."""
    return WORDS[kind]


def tree_of(words: Mapping[str, Word], depth: int = 0) -> Tree:
    """Return settings as a file nests them: names -> field or further names."""
    tree: Tree = {}
    for name, word in words.items():
        head = word.path[depth]
        if len(word.path) == depth + 1:
            tree[head] = name
        elif head not in tree:
            inside = {
                other: each
                for other, each in words.items()
                if len(each.path) > depth + 1 and each.path[depth] == head
            }
            tree[head] = tree_of(inside, depth + 1)
    return tree


def leader_of(branch: "str | Tree", words: Mapping[str, Word]) -> str | None:
    """Return the field that is None where a file says 'none' instead of this group."""
    if isinstance(branch, str):
        return None
    names = [name for name in branch.values() if isinstance(name, str)]
    return next((name for name in names if words[name].leads), None)


def build(kind: type, data: object, path: Path, placed: PlacedTable) -> Any:
    """Build a dataclass from a group of settings; mistakes go to placed.

    data: what stands in the file at path. Returns a valid object even where there are
    mistakes, so that what holds it can be checked too, or NOTHING where there is none.
    """
    return _Group(kind, path, placed).build(data)


class _Group:
    """Read one group of settings into one dataclass."""

    def __init__(self, kind: type, path: Path, placed: PlacedTable) -> None:
        self._kind, self._path, self._placed = kind, path, placed
        self._words = words_of(kind)
        self._fields: dict[str, Field[Any]] = {each.name: each for each in fields(kind)}
        self._given: dict[str, Any] = {}
        self._places: dict[str, Path] = {}
        # Fields whose mistake has been told; what follows from it is none of its own.
        self._spoiled: set[str] = set()

    def build(self, data: object) -> Any:
        self._walk(tree_of(self._words), data, self._path)
        for name, word in self._words.items():
            if name not in self._given:
                self._fill(name, word)
        return self._checked()

    def _walk(self, tree: Tree, data: object, path: Path) -> None:
        if not isinstance(data, dict):
            names = list(tree)
            remedy = f"write settings such as '{names[0]}: ...' below it"
            if data in ("open", "shorted"):
                remedy = f"write 'socket: {data}' in a line of its own"
            self._placed.add(path, f"{shown(data)} is not a group of settings", remedy)
            return
        for key, value in data.items():
            branch, here = tree.get(key), (*path, key)
            if branch is None:
                self._placed.add(
                    here,
                    f"there is no setting {key!r} here",
                    nearest(key, list(tree)),
                    at_key=True,
                )
            elif isinstance(branch, str):
                self._take(branch, value, here)
            else:
                self._enter(branch, value, here)

    def _enter(self, branch: Tree, value: object, here: Path) -> None:
        leader = leader_of(branch, self._words)
        if leader is None:
            self._walk(branch, value, here)
        elif value == "none":
            self._given[leader] = None
        elif value is None or isinstance(value, str):
            name = self._words[leader]
            self._placed.add(
                here,
                f"{shown(value)} is neither 'none' nor a group of settings",
                f"write 'none', or {{{name.path[-1]}: {name.sample}}}",
            )
        else:
            self._walk(branch, value, here)
            word = self._words[leader]
            if isinstance(value, dict) and word.path[-1] not in value:
                self._missing(word, here)

    def _take(self, name: str, value: object, here: Path) -> None:
        word = self._words[name]
        self._places[name] = here
        found = self._read(word, value, here)
        if found is NOTHING:
            self._spoiled.add(name)
        else:
            self._given[name] = found

    def _read(self, word: Word, value: object, here: Path) -> Any:
        """Read what stands at a place; NOTHING where it is a mistake."""
        if value == "none" and word.none is not NOTHING and not word.leads:
            return word.none
        if word.listed and word.group:
            if isinstance(value, list):
                found = [
                    build(word.group, each, (*here, index), self._placed)
                    for index, each in enumerate(value)
                ]
                return tuple(each for each in found if each is not NOTHING)
            self._placed.add(here, f"{shown(value)} is not a list", "write '- ' before each item")
            return NOTHING
        if word.group:
            return build(word.group, value, here, self._placed)
        if word.many:
            return self._several(word, value, here)
        if word.choices:
            return self._chosen(word, value, here)
        if word.kind is None:
            if isinstance(value, str):
                return value
            self._placed.add(here, f"{shown(value)} is not text", f"write {word.sample!r}")
            return NOTHING
        return self._quantity(word, value, here)

    def _quantity(self, word: Word, value: object, here: Path) -> Any:
        assert word.kind is not None
        none = ", or 'none'" if word.none is not NOTHING and not word.leads else ""
        if not isinstance(value, str):
            self._placed.add(
                here,
                f"{shown(value)} is not {word.kind.name}{word.kind.units}",
                f"write {word.kind.name} such as '{word.sample}'{none}",
            )
            return NOTHING
        try:
            return parse_quantity(value, word.kind)
        except QuantityError as error:
            remedy = error.remedy.replace(f"'{word.kind.example}'", f"'{word.sample}'")
            self._placed.add(here, error.problem, remedy + none)
            return NOTHING

    def _several(self, word: Word, value: object, here: Path) -> Any:
        if not isinstance(value, list) or len(value) != word.many:
            sample = ", ".join([word.sample] * word.many)
            what = f"a list of {len(value)}" if isinstance(value, list) else shown(value)
            self._placed.add(
                here, f"{what} is not a list of {word.many} values", f"write '[{sample}]'"
            )
            return NOTHING
        found = [self._quantity(word, each, (*here, index)) for index, each in enumerate(value)]
        return NOTHING if NOTHING in found else tuple(found)

    def _chosen(self, word: Word, value: object, here: Path) -> Any:
        # YAML takes yes and no for truth values.
        spoken = {True: "yes", False: "no"}.get(value) if isinstance(value, bool) else value
        if isinstance(spoken, str) and spoken in word.choices:
            return word.choices[spoken]
        known = list(word.choices)
        self._placed.add(
            here,
            f"{shown(value)} is not one of {', '.join(known)}",
            nearest(spoken if isinstance(spoken, str) else "", known),
        )
        return NOTHING

    def _fill(self, name: str, word: Word) -> None:
        """Put what a field has where the file doesn't say it."""
        own = self._fields[name]
        if word.default is not NOTHING:
            self._given[name] = word.default
        elif word.group and not word.listed and word.none is NOTHING:
            # Not the field's own default: the words of the group may have others.
            self._given[name] = build(word.group, {}, (*self._path, *word.path), self._placed)
        elif own.default is MISSING and own.default_factory is MISSING:
            if name not in self._places:
                self._missing(word, (*self._path, *word.path[:-1]))
            self._given[name] = self._sample(word)

    def _missing(self, word: Word, group: Path) -> None:
        name = word.path[-1]
        self._placed.add(group, f"the setting {name!r} is missing", f"add '{name}: {word.sample}'")

    def _sample(self, word: Word) -> Any:
        """Return a value that is allowed, to go on with."""
        if word.kind is not None:
            return parse_quantity(word.sample, word.kind)
        return next(iter(word.choices.values()), word.sample)

    def _checked(self) -> Any:
        """Build the object; what it refuses is told, replaced and tried again."""
        while True:
            try:
                return self._kind(**self._given)
            except ValueError as error:
                message = str(error)
            name = self._blamed(message)
            if name is None:
                if not self._spoiled:
                    remedy = "change what is named here"
                    self._placed.add(self._path, self._in_words(message), remedy)
                return self._fallback()
            word = self._words[name]
            self._placed.add(
                self._places[name], self._in_words(message), self._remedy(message, word)
            )
            self._spoiled.add(name)
            del self._given[name]
            self._fill(name, word)

    def _fallback(self) -> Any:
        """Build the object from nothing but what it must have; NOTHING where that won't do."""
        required = {
            name: self._sample(word)
            for name, word in self._words.items()
            if self._fields[name].default is MISSING
            and self._fields[name].default_factory is MISSING
        }
        try:
            return self._kind(**required)
        except ValueError:
            return NOTHING

    def _blamed(self, message: str) -> str | None:
        """Return the field that a refusal names first, of those that the file says."""
        named = [
            (found.start(), name)
            for name in self._places
            if name not in self._spoiled and (found := _find(name, message))
        ]
        return min(named)[1] if named else None

    def _in_words(self, message: str) -> str:
        """Put the words of the file for the names of fields."""
        # Longest first: one name may be a part of another.
        for name in sorted(self._words, key=len, reverse=True):
            message = re.sub(rf"\b{name}\b", spell_path(self._words[name].path), message)
        return message

    def _remedy(self, message: str, word: Word) -> str:
        if word.choices:
            return f"write one of {', '.join(word.choices)}"
        what = word.kind.name if word.kind else "a value"
        return f"write {what} that is allowed, such as '{word.sample}'"


def _find(name: str, message: str) -> re.Match[str] | None:
    return re.search(rf"\b{name}\b", message)


def shown(value: object) -> str:
    """Show what was found, for a message."""
    if value is None:
        return "a blank"
    if isinstance(value, (dict, list)):
        return "a list" if isinstance(value, list) else "a group of settings"
    if isinstance(value, bool):
        return f"'{str(value).lower()}'"
    return f"{str(value)[:60]!r}"
