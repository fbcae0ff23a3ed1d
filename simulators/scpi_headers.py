"""Match program headers against patterns such as '[:SOURce<1>]:VOLTage:HIGH'.

A pattern names its nodes with the short form in capitals, optional nodes in brackets,
and the numeric suffixes a node takes in angle brackets ('<1>', '<1-2>'). SCPI-99
Vol. 1 section 6.2: only the exact short and the exact long form match, in either case;
a suffix left out is 1.
"""

import re
from dataclasses import dataclass
from itertools import product
from typing import Generic, TypeVar

from pulsetally.simulators.scpi_errors import ScpiError

LONGEST_MNEMONIC = 12

_PATTERN = re.compile(r"(?:\[?:[A-Za-z]+(?:<[0-9]+(?:-[0-9]+)?>)?\]?)+|\*[A-Z]+")
_NODE = re.compile(r"(\[?):?(\*?[A-Za-z]+)(?:<([0-9]+)(?:-([0-9]+))?>)?(\]?)")
_MNEMONIC = re.compile(r"(\*?[A-Z_]+(?:[0-9]+[A-Z_]+)*)([0-9]*)\Z")

T = TypeVar("T")


@dataclass(frozen=True, slots=True, kw_only=True)
class Node:
    """One node of a pattern; suffixes is the range it takes, or None for no suffix."""

    long: str
    short: str
    suffixes: tuple[int, int] | None
    optional: bool


def short_form(word: str) -> str:
    """Return the short form of a word written with it in capitals: 'VOLTage' gives 'VOLT'."""
    return "".join(letter for letter in word if not letter.islower())


def read_pattern(pattern: str) -> tuple[Node, ...]:
    """Return the nodes of a pattern; ValueError when it is not written as it should be."""
    if not _PATTERN.fullmatch(pattern):
        raise ValueError(f"no header pattern: {pattern}")
    nodes = []
    for opening, word, lowest, highest, closing in _NODE.findall(pattern):
        if bool(opening) != bool(closing) or not short_form(word):
            raise ValueError(f"no header pattern: {pattern}")
        suffixes = (int(lowest), int(highest or lowest)) if lowest else None
        nodes.append(
            Node(
                long=word.upper(),
                short=short_form(word),
                suffixes=suffixes,
                optional=bool(opening),
            )
        )
    if all(node.optional for node in nodes):
        raise ValueError(f"every node of {pattern} is optional")
    return tuple(nodes)


@dataclass(frozen=True, slots=True)
class _Form(Generic[T]):
    target: T
    # One entry a node that was written: where its suffix goes, and its range.
    places: tuple[tuple[int, int, int] | None, ...]
    suffix_count: int


class HeaderTable(Generic[T]):
    """Find what belongs to a header among all declared patterns.

    Every legal spelling is laid out when a pattern is declared, so that finding one is a
    single look-up, and two patterns that share a spelling are refused at once.
    """

    def __init__(self) -> None:
        self._forms: dict[tuple[str, ...], _Form[T]] = {}

    def declare(self, pattern: str, target: T) -> None:
        """Add a pattern; ValueError when a spelling of it is taken."""
        nodes = read_pattern(pattern)
        order = [index for index, node in enumerate(nodes) if node.suffixes is not None]
        choices = [{node.long, node.short} | ({None} if node.optional else set()) for node in nodes]
        for spelling in product(*choices):
            written = [(word, index) for index, word in enumerate(spelling) if word is not None]
            places = tuple(
                (order.index(index), *suffixes)
                if (suffixes := nodes[index].suffixes) is not None
                else None
                for _, index in written
            )
            key = tuple(word for word, _ in written)
            if key in self._forms:
                raise ValueError(f"{pattern} shares {':'.join(key)} with another pattern")
            self._forms[key] = _Form(target, places, len(order))

    def find(self, mnemonics: tuple[str, ...]) -> tuple[T, tuple[int, ...]]:
        """Return what was declared for these mnemonics, and the pattern's suffixes in order.

        Raises -112 (mnemonic longer than 12), -113 (no such header), -114 (suffix).
        """
        words, suffixes = [], []
        for mnemonic in mnemonics:
            if len(mnemonic) > LONGEST_MNEMONIC:
                raise ScpiError(-112, mnemonic)
            match = _MNEMONIC.match(mnemonic.upper())
            if match is None:
                raise ScpiError(-113, ":".join(mnemonics))
            words.append(match[1])
            suffixes.append(match[2])
        form = self._forms.get(tuple(words))
        if form is None:
            raise ScpiError(-113, ":".join(mnemonics))
        values = [1] * form.suffix_count
        for place, suffix in zip(form.places, suffixes, strict=True):
            if place is None:
                if suffix:
                    raise ScpiError(-114, ":".join(mnemonics))
                continue
            index, lowest, highest = place
            value = int(suffix) if suffix else 1
            if not lowest <= value <= highest:
                raise ScpiError(-114, ":".join(mnemonics))
            values[index] = value
        return form.target, tuple(values)
