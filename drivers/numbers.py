"""Read the numbers and error entries that instruments send, without I/O."""

import math
import re

# SCPI-99 volume 1, 7.2.1 (clause from memory): values that stand for infinity and not a number.
_INFINITY, _NOT_A_NUMBER = 9.9e37, 9.91e37
_DECIMAL = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_ENTRY = re.compile(r'\s*([+-]?\d{1,6})(?:\s*,\s*(?:"(.*)"|([^"]*)))?\s*', re.DOTALL)


class NumberError(ValueError):
    """The text is not a number, or stands for 'not a number'."""


def parse_number(text: str) -> float:
    """Read an NR1, NR2 or NR3 number (IEEE Std 488.2-1992, 8.7.2 to 8.7.4).

    9.9E37 comes back as infinity, with its sign. 9.91E37 and everything else that is not a
    number raises NumberError: a measurement that failed must never pass for a value.
    """
    stripped = text.strip()
    if not _DECIMAL.fullmatch(stripped):
        raise NumberError(f"{text[:60]!r} is not a number")
    value = float(stripped)
    if math.isclose(value, _NOT_A_NUMBER, rel_tol=1e-6):
        raise NumberError(f"{stripped} stands for 'not a number'")
    if math.isclose(abs(value), _INFINITY, rel_tol=1e-6):
        return math.copysign(math.inf, value)
    if not math.isfinite(value):
        raise NumberError(f"{stripped} is beyond every range")
    return value


def parse_finite(text: str) -> float:
    """Read a number that may not be infinite."""
    value = parse_number(text)
    if not math.isfinite(value):
        raise NumberError(f"{text.strip()} stands for infinity")
    return value


def parse_whole(text: str) -> int:
    """Read a whole number, written as NR1 or with a fraction of zero."""
    value = parse_finite(text)
    if value != int(value):
        raise NumberError(f"{text.strip()} is not a whole number")
    return int(value)


def parse_error_entry(text: str) -> tuple[int, str]:
    """Read one entry of an error queue: its number and its words (SCPI-99 volume 2, 21.8).

    Some instruments leave out the quotes around the words, or the words.
    """
    found = _ENTRY.fullmatch(text)
    if not found:
        raise NumberError(f"{text[:60]!r} is not an entry of an error queue")
    return int(found[1]), found[2] or (found[3] or "").strip()
