"""Say what a command's parameters may be, and turn data elements into values."""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cache
from typing import Protocol

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_headers import short_form
from pulsetally.simulators.scpi_message import (
    BlockElement,
    Element,
    ExpressionElement,
    NumberElement,
    StringElement,
    WordElement,
)
from pulsetally.simulators.scpi_numbers import suffix_factor

Value = float | str | bool | bytes

_REFUSALS: tuple[tuple[type[Element], int], ...] = (
    (NumberElement, -128),
    (WordElement, -148),
    (StringElement, -158),
    (BlockElement, -168),
    (ExpressionElement, -178),
)


def refusal(element: Element) -> ScpiError:
    """Return the error for an element of a kind that may not stand here."""
    return ScpiError(next(number for kind, number in _REFUSALS if isinstance(element, kind)))


class Parameter(Protocol):
    """Anything that turns a data element into a value, or raises ScpiError."""

    def accept(self, element: Element) -> Value:
        """Return the value of the element."""


@dataclass(frozen=True, slots=True)
class Limits:
    """What MINimum, MAXimum and DEFault stand for, in the base unit."""

    lowest: float
    highest: float
    default: float


@cache
def spellings(words: tuple[str, ...]) -> dict[str, str]:
    """Return every accepted spelling, in capitals, with the short form it stands for."""
    return {form: short_form(word) for word in words for form in (word.upper(), short_form(word))}


_LIMIT_WORDS = spellings(("MINimum", "MAXimum", "DEFault"))


@dataclass(frozen=True, slots=True, kw_only=True)
class Number:
    """A number with a range.

    unit: upper-case base unit, '' for none but with multipliers, None for no suffix.
    limits: called each time, because a range may depend on other settings.
    whole: round to the nearest integer first, as IEEE 488.2 wants it.
    words: further words and their values, such as {'INFinity': math.inf}; they are
    outside the range on purpose.
    """

    limits: Callable[[], Limits]
    unit: str | None = None
    whole: bool = False
    words: dict[str, float] = field(default_factory=dict)

    def accept(self, element: Element) -> float:
        """Return the value in the base unit; -222 out of range, -141 for an unknown word."""
        if isinstance(element, WordElement):
            return self._accept_word(element.text)
        if not isinstance(element, NumberElement):
            raise refusal(element)
        value = element.value * suffix_factor(element.suffix, self.unit)
        if self.words and value >= 9.9e37:
            value = math.inf
        if math.isinf(value) and value in self.words.values():
            return value
        limits = self.limits()
        # The slack is for 20 NS, which in binary is not quite 20e-9; a count needs none.
        slack = 0.0 if self.whole else 1e-12
        below, above = slack * abs(limits.lowest), slack * abs(limits.highest)
        if self.whole:
            value = round(value) if math.isfinite(value) else value
        if not limits.lowest - below <= value <= limits.highest + above:
            raise ScpiError(-222)
        return min(max(value, limits.lowest), limits.highest)

    def _accept_word(self, text: str) -> float:
        for word, value in self.words.items():
            if text.upper() in (word.upper(), short_form(word)):
                return value
        return self.limit(text)

    def limit(self, text: str) -> float:
        """Return what MIN, MAX or DEF stands for."""
        limits = self.limits()
        match _LIMIT_WORDS.get(text.upper()):
            case "MIN":
                return limits.lowest
            case "MAX":
                return limits.highest
            case "DEF":
                return limits.default
        raise ScpiError(-141, text)


def number(
    lowest: float,
    highest: float,
    default: float,
    *,
    unit: str | None = None,
    whole: bool = False,
) -> Number:
    """Return a number parameter whose range never changes."""
    limits = Limits(lowest, highest, default)
    return Number(limits=lambda: limits, unit=unit, whole=whole)


@dataclass(frozen=True, slots=True)
class Word:
    """One word of a list, each written with its short form in capitals; -224 for others."""

    words: tuple[str, ...]

    def accept(self, element: Element) -> str:
        """Return the short form."""
        if not isinstance(element, WordElement):
            raise refusal(element)
        found = spellings(self.words).get(element.text.upper())
        if found is None:
            raise ScpiError(-224, element.text)
        return found


@dataclass(frozen=True, slots=True)
class Switch:
    """ON, OFF or a number, which is on when it rounds to anything but 0."""

    def accept(self, element: Element) -> bool:
        """Return whether it is on."""
        if isinstance(element, NumberElement):
            value = element.value * suffix_factor(element.suffix, None)
            return math.isinf(value) or round(value) != 0
        if not isinstance(element, WordElement):
            raise refusal(element)
        if element.text.upper() not in ("ON", "OFF"):
            raise ScpiError(-224, element.text)
        return element.text.upper() == "ON"


@dataclass(frozen=True, slots=True)
class Text:
    """A quoted string."""

    def accept(self, element: Element) -> str:
        """Return the characters without the quotes."""
        if not isinstance(element, StringElement):
            raise refusal(element)
        return element.text


@dataclass(frozen=True, slots=True)
class Block:
    """An arbitrary block."""

    def accept(self, element: Element) -> bytes:
        """Return the payload."""
        if not isinstance(element, BlockElement):
            raise refusal(element)
        return element.payload
