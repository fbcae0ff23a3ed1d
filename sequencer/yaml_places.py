"""Read YAML 1.2 into plain data, and remember the line and column of every key and value.

Only what a data file needs is accepted: no anchors and aliases (they can grow without bound),
no tags, no duplicate keys. All such mistakes of a file are collected, not only the first.
"""

from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path as FilePath
from typing import Any

from pulsetally.sequencer.errors import Mistake

# A recipe is a page or two; a larger file is something else that was named by mistake.
MOST_BYTES = 200_000
_MOST_DEPTH = 50
# Keys, values and brackets together; long lists of values are written as ranges.
_MOST_PARTS = 20_000
# Among more names than this, looking for the closest takes long and listing them helps nobody.
_MOST_KNOWN = 100

Path = tuple[str | int, ...]


@dataclass(slots=True)
class PlacedData:
    """Hold a file's data with the places of its parts.

    data: dicts, lists, strings, numbers, booleans and None.
    values, keys: path -> (line, column), counted from 1. mistakes: what was found on the way.
    origins: paths whose value came from an option -> how that option was written.
    """

    file: str
    data: Any = None
    values: dict[Path, tuple[int, int]] = field(default_factory=dict)
    keys: dict[Path, tuple[int, int]] = field(default_factory=dict)
    mistakes: list[Mistake] = field(default_factory=list)
    origins: dict[Path, str] = field(default_factory=dict)

    def mistake(self, path: Path, problem: str, remedy: str, *, at_key: bool = False) -> Mistake:
        """Build a mistake at a path; its place is the nearest one that is known."""
        for length in range(len(path), -1, -1):
            part = path[:length]
            if part in self.origins:
                return Mistake(
                    file=self.origins[part],
                    line=0,
                    column=0,
                    path=spell_path(path),
                    problem=problem,
                    remedy=remedy,
                )
            found = (self.keys if at_key else self.values).get(part) or self.values.get(part)
            if found:
                return self._placed(found, path, problem, remedy)
        return self._placed((1, 1), path, problem, remedy)

    def _placed(self, at: tuple[int, int], path: Path, problem: str, remedy: str) -> Mistake:
        return Mistake(
            file=self.file,
            line=at[0],
            column=at[1],
            path=spell_path(path),
            problem=problem,
            remedy=remedy,
        )


def spell_path(path: Path) -> str:
    """Write a path as a person would: steps[2].read."""
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text


def nearest(word: str, known: list[str], use: str = "write") -> str:
    """Name the known word that is closest, or all of them."""
    if not known:
        return "declare it first"
    if len(known) > _MOST_KNOWN:
        return f"{use} one of the {len(known)} that are declared, such as {known[0][:60]!r}"
    close = get_close_matches(word[:60], known, n=1)
    if close:
        return f"{use} {close[0]!r}"
    return f"{use} one of {', '.join(known)}"


def read_text(path: FilePath, noun: str, remedy: str) -> tuple[str, list[Mistake]]:
    """Read a file; return its text and, where it can't be read, one mistake that says why."""
    try:
        if path.stat().st_size > MOST_BYTES:
            problem = f"the {noun} has over {MOST_BYTES} bytes"
        else:
            return path.read_text(encoding="utf-8-sig"), []
    except UnicodeDecodeError:
        problem = f"the {noun} is not UTF-8 text"
    except OSError as error:
        problem = f"the {noun} can't be read: {error.strerror}"
    mistake = Mistake(file=str(path), line=0, column=0, path="", problem=problem, remedy=remedy)
    return "", [mistake]


def load_yaml(text: str, file: str) -> PlacedData:
    """Read a YAML text; file is its name in messages."""
    from ruamel.yaml import YAML
    from ruamel.yaml.error import MarkedYAMLError, YAMLError
    from ruamel.yaml.events import AliasEvent

    placed = PlacedData(file)
    # A lone surrogate is no text, and is told as such below.
    if len(text.encode(errors="surrogatepass")) > MOST_BYTES:
        placed.mistakes.append(
            placed.mistake((), f"the file has over {MOST_BYTES} bytes", "name a recipe or bench")
        )
        return placed
    yaml = YAML(typ="safe", pure=True)
    try:
        depth = 0
        for parts, event in enumerate(yaml.parse(text)):
            depth += type(event).__name__.endswith("StartEvent")
            depth -= type(event).__name__.endswith("EndEvent")
            if isinstance(event, AliasEvent) or getattr(event, "anchor", None):
                at = event.start_mark.line + 1, event.start_mark.column + 1
                placed.mistakes.append(
                    placed._placed(at, (), "anchors and aliases are not allowed", "write it out")
                )
            if depth > _MOST_DEPTH:
                placed.mistakes.append(
                    placed.mistake((), f"it is nested over {_MOST_DEPTH} deep", "nest less")
                )
                return placed
            if parts > _MOST_PARTS:
                at = event.start_mark.line + 1, event.start_mark.column + 1
                problem = f"it goes on beyond {_MOST_PARTS} keys and values"
                placed.mistakes.append(placed._placed(at, (), problem, "write ranges and repeats"))
                return placed
        if placed.mistakes:
            return placed
        node = YAML(typ="safe", pure=True).compose(text)
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        at = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        problem = " ".join(part for part in (error.context, error.problem) if part)
        placed.mistakes.append(_syntax(placed, at, problem, text))
        return placed
    except (YAMLError, ValueError, RecursionError) as error:
        first = str(error).splitlines()[0] if str(error) else type(error).__name__
        placed.mistakes.append(
            placed.mistake((), f"this is not YAML: {first}", "remove what can't be printed")
        )
        return placed
    if node is None:
        placed.mistakes.append(placed.mistake((), "the file is empty", "write a recipe or bench"))
        return placed
    placed.data = _construct(node, (), placed)
    return placed


def _syntax(placed: PlacedData, at: tuple[int, int], problem: str, text: str) -> Mistake:
    lines = text.splitlines()
    line = lines[at[0] - 1] if at[0] <= len(lines) else ""
    if "\t" in line[: len(line) - len(line.lstrip())] or "'\\t'" in problem:
        return placed._placed(at, (), "a tab indents this line", "use spaces")
    if '"' not in problem and ":" in line and "mapping values" in problem:
        return placed._placed(at, (), problem, "put text that contains ': ' between quotes")
    return placed._placed(at, (), problem, "mend the indentation, quotes or brackets here")


def _construct(node: Any, path: Path, placed: PlacedData) -> Any:
    from ruamel.yaml.nodes import MappingNode, SequenceNode

    placed.values[path] = node.start_mark.line + 1, node.start_mark.column + 1
    if isinstance(node, MappingNode):
        table: dict[str, Any] = {}
        for key_node, value_node in node.value:
            at = key_node.start_mark.line + 1, key_node.start_mark.column + 1
            if not isinstance(key_node.value, str):
                placed.mistakes.append(
                    placed._placed(at, path, "a setting's name is a word", "write a plain word")
                )
                continue
            key = key_node.value
            if key in table:
                first = placed.keys[(*path, key)]
                problem = f"{key!r} stands twice here, first in line {first[0]}"
                placed.mistakes.append(placed._placed(at, (*path, key), problem, "keep one"))
                continue
            placed.keys[(*path, key)] = at
            table[key] = _construct(value_node, (*path, key), placed)
        return table
    if isinstance(node, SequenceNode):
        return [_construct(child, (*path, index), placed) for index, child in enumerate(node.value)]
    return _scalar(node, path, placed)


def _scalar(node: Any, path: Path, placed: PlacedData) -> Any:
    kind = str(node.tag).rpartition(":")[2]
    text: str = node.value
    if kind in ("str", "timestamp"):
        return text
    if kind == "null":
        return None
    if kind == "bool":
        return text.lower() == "true"
    if kind in ("int", "float"):
        return plain_number(text)
    placed.mistakes.append(
        placed.mistake(path, f"the tag {node.tag} is not allowed", "write a plain value")
    )
    return None


def plain_number(text: str) -> int | float | str:
    """Read a plain number as an int or a float; give any other text back as it is."""
    # Not YAML's own rules: 0x10, 1_000 and .inf are not how people write settings.
    for read in (int, float):
        try:
            return read(text) if "_" not in text else text
        except (ValueError, OverflowError):
            continue
    return text
