"""Read and write SCPI numbers, their suffixes and their special values.

Formats after IEEE Std 488.2 (7.7.2 to 7.7.4 listening, 8.7.2 to 8.7.4 talking) and
SCPI-99 Vol. 1 section 7.
"""

import math
import re

from pulsetally.simulators.scpi_errors import ScpiError

MULTIPLIERS: dict[str, float] = {
    "EX": 1e18,
    "PE": 1e15,
    "T": 1e12,
    "G": 1e9,
    "MA": 1e6,
    "K": 1e3,
    "M": 1e-3,
    "U": 1e-6,
    "N": 1e-9,
    "P": 1e-12,
    "F": 1e-15,
    "A": 1e-18,
}
# The two units that break the rule "M is milli".
MEGA_UNITS = ("MHZ", "MOHM")

INFINITY_TEXT = "9.9E+37"
NOT_A_NUMBER_TEXT = "9.91E+37"

LARGEST_EXPONENT = 32_000
MOST_DIGITS = 255
LONGEST_SUFFIX = 12

_BASES = {"H": 16, "Q": 8, "B": 2}
_PARTS = re.compile(r"[+-]?([0-9]*)\.?([0-9]*)(?:E([+-]?[0-9]+))?\Z")


def read_decimal(text: str) -> float:
    """Return the value of an NRf number written without blanks, such as '-1.5E-3'.

    Raises -123 for an exponent beyond 32000, -124 for more than 255 digits, -121 for
    what is no number.
    """
    parts = _PARTS.match(text.upper())
    if parts is None or not (parts[1] or parts[2]):
        raise ScpiError(-121, text[:40])
    if len((parts[1] + parts[2]).lstrip("0")) > MOST_DIGITS:
        raise ScpiError(-124)
    # The length is looked at first: int() refuses very long digit strings.
    exponent = (parts[3] or "0").lstrip("+-").lstrip("0")
    if len(exponent) > 5 or int(exponent or "0") > LARGEST_EXPONENT:
        raise ScpiError(-123)
    return float(text)


def read_non_decimal(text: str) -> float:
    """Return the value of '#HA2F', '#Q62' or '#B01011' (either case)."""
    base = _BASES.get(text[1:2].upper())
    digits = text[2:]
    if base is None or not digits.isalnum() or not digits.isascii():
        raise ScpiError(-121, text[:40])
    if len(digits.lstrip("0")) > MOST_DIGITS:
        raise ScpiError(-124)
    try:
        return float(int(digits, base))
    except ValueError:
        raise ScpiError(-121, text[:40]) from None


def suffix_factor(suffix: str, unit: str | None) -> float:
    """Return what a number with this suffix is multiplied by to get the base unit.

    unit: upper-case base unit ('V', 'HZ'), '' for a plain number that may carry a
    multiplier alone, None where no suffix may stand (-138). Raises -134 and -131 too.
    """
    if not suffix:
        return 1.0
    if len(suffix) > LONGEST_SUFFIX:
        raise ScpiError(-134, suffix)
    if unit is None:
        raise ScpiError(-138, suffix)
    text = suffix.upper()
    if text == unit:
        return 1.0
    if text in MEGA_UNITS and text[1:] == unit:
        return 1e6
    # The unit is looked for first: with amperes, MA is the milliampere, not mega.
    if unit and text.endswith(unit) and text.removesuffix(unit) in MULTIPLIERS:
        return MULTIPLIERS[text.removesuffix(unit)]
    if text in MULTIPLIERS:
        return MULTIPLIERS[text]
    raise ScpiError(-131, suffix)


def format_integer(value: int) -> str:
    """Write an NR1 number."""
    return str(int(value))


def format_real(value: float, digits: int = 12) -> str:
    """Write an NR3 number with this many significant digits; infinity and NaN as SCPI has them."""
    if math.isnan(value):
        return NOT_A_NUMBER_TEXT
    if math.isinf(value):
        return INFINITY_TEXT if value > 0 else f"-{INFINITY_TEXT}"
    return f"{value:.{digits - 1}E}"
