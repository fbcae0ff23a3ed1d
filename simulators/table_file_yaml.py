"""Read the YAML of a table file into plain values that know their line and column.

Only what a page of settings needs is accepted: no anchors and aliases (they can grow without
bound), no tags, no name twice. All such mistakes of a file are collected, not only the first.
"""

from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path as FilePath
from typing import Any

MOST_BYTES = 1_000_000
_MOST_DEPTH = 20

Path = tuple[str | int, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class TableMistake:
    """Say what is wrong at one place of a table file.

    line, column: counted from 1; line 0 where there is no line. path: the place in words.
    problem: what was found and what is allowed. remedy: what to write instead.
    """

    file: str
    line: int
    column: int
    path: str
    problem: str
    remedy: str

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}:{self.column}" if self.line else self.file
        path = f" {self.path}" if self.path else ""
        return f"{place}{path}: {self.problem}. To fix it, {self.remedy}."


class TableFileError(ValueError):
    """A table file can't be used as written. Holds every mistake that was found."""

    def __init__(self, mistakes: list[TableMistake]) -> None:
        super().__init__("\n".join(str(mistake) for mistake in mistakes))
        self.mistakes = mistakes


@dataclass(slots=True)
class PlacedTable:
    """Hold a file's values with the places of its parts.

    data: dicts, lists, text (numbers too: as written), True, False and None.
    values, keys: path -> (line, column). mistakes: what was found on the way.
    """

    file: str
    data: Any = None
    values: dict[Path, tuple[int, int]] = field(default_factory=dict)
    keys: dict[Path, tuple[int, int]] = field(default_factory=dict)
    # Each once; a dict, since a file may hold thousands of them.
    mistakes: dict[TableMistake, None] = field(default_factory=dict)

    def add(self, path: Path, problem: str, remedy: str, *, at_key: bool = False) -> None:
        """Keep a mistake at a path; its place is the nearest one that is known."""
        at = (1, 1)
        for length in range(len(path), -1, -1):
            part = path[:length]
            found = (self.keys if at_key else self.values).get(part) or self.values.get(part)
            if found:
                at = found
                break
        self.add_at(at, path, problem, remedy)

    def add_at(self, at: tuple[int, int], path: Path, problem: str, remedy: str) -> None:
        """Keep a mistake at a line and column."""
        mistake = TableMistake(
            file=self.file,
            line=at[0],
            column=at[1],
            path=spell_path(path),
            problem=problem,
            remedy=remedy,
        )
        self.mistakes[mistake] = None

    def refuse(self) -> None:
        """Raise TableFileError with every mistake, in the order of the file, if there is one."""
        if self.mistakes:
            raise TableFileError(sorted(self.mistakes, key=lambda each: (each.line, each.column)))


def spell_path(path: Path) -> str:
    """Write a path as a person would: faults[2].instrument."""
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text


def nearest(word: str, known: list[str]) -> str:
    """Name the known word that is closest, or all of them."""
    close = get_close_matches(word, known, n=1)
    return f"write {close[0]!r}" if close else f"write one of {', '.join(known)}"


def read_text(path: FilePath) -> str:
    """Read a table file's text. Raises TableFileError where that can't be done."""
    remedy = "name a table file; README.md shows one"
    try:
        # Read once and bounded: a pipe has no size, and a device no end.
        with path.open("rb") as stream:
            content = stream.read(MOST_BYTES + 1)
        if len(content) <= MOST_BYTES:
            return content.decode("utf-8-sig")
        problem = f"the table file has over {MOST_BYTES} bytes"
    except UnicodeDecodeError as error:
        problem = f"the table file is not UTF-8 text (byte {error.start})"
    except (OSError, ValueError) as error:
        why = error.strerror if isinstance(error, OSError) else str(error)
        problem = f"the table file can't be read: {why}"
    raise TableFileError(
        [TableMistake(file=str(path), line=0, column=0, path="", problem=problem, remedy=remedy)]
    )


def load_yaml(text: str, file: str) -> PlacedTable:
    """Read a YAML text; file is its name in messages. Raises TableFileError."""
    placed = PlacedTable(file)
    if len(text.encode(errors="surrogatepass")) > MOST_BYTES:
        placed.add((), f"the table file has over {MOST_BYTES} bytes", "name a table file")
        placed.refuse()
    node = _compose(text, placed)
    placed.refuse()
    placed.data = _construct(node, (), placed)
    placed.refuse()
    return placed


def _compose(text: str, placed: PlacedTable) -> Any:
    from ruamel.yaml import YAML
    from ruamel.yaml.error import MarkedYAMLError, YAMLError
    from ruamel.yaml.events import AliasEvent

    try:
        depth = 0
        for event in YAML(typ="safe", pure=True).parse(text):
            depth += type(event).__name__.endswith("StartEvent")
            depth -= type(event).__name__.endswith("EndEvent")
            at = event.start_mark.line + 1, event.start_mark.column + 1
            if isinstance(event, AliasEvent) or getattr(event, "anchor", None):
                placed.add_at(at, (), "anchors and aliases are not allowed", "write it out")
            if depth > _MOST_DEPTH:
                placed.add_at(at, (), f"it is nested over {_MOST_DEPTH} deep", "nest less")
                return None
        if placed.mistakes:
            return None
        node = YAML(typ="safe", pure=True).compose(text)
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        at = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        problem = " ".join(part for part in (error.context, error.problem) if part)
        _add_syntax(placed, at, problem, text)
        return None
    except (YAMLError, ValueError, RecursionError) as error:
        first = str(error).splitlines()[0] if str(error) else type(error).__name__
        placed.add((), f"this is not YAML: {first}", "remove what can't be printed")
        return None
    if node is None:
        placed.add((), "the file is empty", "write 'table: what a person calls it'")
    return node


def _add_syntax(placed: PlacedTable, at: tuple[int, int], problem: str, text: str) -> None:
    lines = text.splitlines()
    line = lines[at[0] - 1] if at[0] <= len(lines) else ""
    if "\t" in line[: len(line) - len(line.lstrip())] or "'\\t'" in problem:
        placed.add_at(at, (), "a tab indents this line", "use spaces")
    elif "mapping values" in problem and ":" in line:
        placed.add_at(at, (), problem, "put text that contains ': ' between quotes")
    else:
        placed.add_at(at, (), problem, "mend the indentation, quotes or brackets here")


def _construct(node: Any, path: Path, placed: PlacedTable) -> Any:
    from ruamel.yaml.nodes import MappingNode, SequenceNode

    placed.values[path] = node.start_mark.line + 1, node.start_mark.column + 1
    if isinstance(node, SequenceNode):
        return [_construct(child, (*path, index), placed) for index, child in enumerate(node.value)]
    if not isinstance(node, MappingNode):
        return _scalar(node, path, placed)
    group: dict[str, Any] = {}
    for key_node, value_node in node.value:
        at = key_node.start_mark.line + 1, key_node.start_mark.column + 1
        key = key_node.value
        if not isinstance(key, str):
            placed.add_at(at, path, "a setting's name is a word", "write a plain word")
        elif key in group:
            first = placed.keys[(*path, key)][0]
            problem = f"{key!r} stands twice here, first in line {first}"
            placed.add_at(at, (*path, key), problem, "keep one")
        else:
            placed.keys[(*path, key)] = at
            group[key] = _construct(value_node, (*path, key), placed)
            if value_node.start_mark.index == value_node.end_mark.index:
                # A blank has no place of its own, but where the next line begins.
                placed.values[(*path, key)] = at
    return group


def _scalar(node: Any, path: Path, placed: PlacedTable) -> Any:
    kind = str(node.tag).rpartition(":")[2]
    if kind == "null":
        return None
    if kind == "bool":
        return str(node.value).lower() in ("true", "yes", "on")
    if kind not in ("str", "int", "float", "timestamp"):
        placed.add(path, f"the tag {node.tag} is not allowed", "write a plain value")
    # A number stays as written: 1e-3 and 0.10 are read by kind, and exactly.
    return str(node.value)
