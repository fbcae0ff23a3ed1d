"""Numbers, suffixes and special values: IEEE 488.2 7.7 and 8.7, SCPI-99 Vol. 1 section 7."""

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import (
    MULTIPLIERS,
    format_integer,
    format_real,
    read_decimal,
    read_non_decimal,
    suffix_factor,
)

# NUM-1 to NUM-4, public manuals quoting IEEE 488.2: all of NR1, NR2 and NR3 is heard.
HEARD = [
    ("146", 146),
    ("+146", 146),
    ("-12345", -12345),
    ("0273", 273),
    ("12.3", 12.3),
    ("+1.2345", 1.2345),
    ("-0.123", -0.123),
    ("273.", 273),
    (".0273", 0.0273),
    ("2.73E+2", 273),
    ("273.0E-2", 2.73),
    ("4.3e-3", 0.0043),
]

# NUM-6.
NON_DECIMAL = [("#HA2F", 2607), ("#ha2f", 2607), ("#Q62", 50), ("#B01011", 11)]

# SUF-1 to SUF-7: text, unit, value in the base unit.
SUFFIXES = [
    (5, "MV", "V", 0.005),
    (5, "MAV", "V", 5e6),
    (3, "MA", "A", 0.003),
    (2, "MHZ", "HZ", 2e6),
    (2, "MAHZ", "HZ", 2e6),
    (10, "MOHM", "OHM", 1e7),
    (1, "MS", "S", 0.001),
    (5, "UV", "V", 5e-6),
    (20, "NS", "S", 2e-8),
    (100, "PF", "F", 1e-10),
    (5, "mv", "V", 0.005),
    (28000, "m", "", 28),
    (0.028, "K", "", 28),
    (28e-3, "K", "", 28),
    (2, "KOHM", "OHM", 2000),
    (2, "M", "OHM", 0.002),
    (3, "V", "V", 3),
]

# Public manuals (IEEE 488.2 table 7-2), typed once more.
TABLE_7_2 = {
    "EX": 18, "PE": 15, "T": 12, "G": 9, "MA": 6, "K": 3,
    "M": -3, "U": -6, "N": -9, "P": -12, "F": -15, "A": -18,
}  # fmt: skip

# Strict response formats, IEEE 488.2 8.7.2 and 8.7.4 (from memory for the signed exponent).
NR1 = re.compile(r"[+-]?\d+")
NR3 = re.compile(r"[+-]?\d+\.\d+E[+-]\d+")


@pytest.mark.parametrize(("text", "value"), HEARD)
def test_every_decimal_form_is_heard(text: str, value: float) -> None:
    assert read_decimal(text) == value


@pytest.mark.parametrize("text", ["", "+", ".", "E5", "1E", "1.2.3", "0x10", "nan", "inf", "1_0"])
def test_what_is_no_number_is_refused(text: str) -> None:
    with pytest.raises(ScpiError) as caught:
        read_decimal(text)
    assert caught.value.number == -121


@pytest.mark.parametrize(
    ("text", "number"),
    [
        ("1E32001", -123),
        ("1E-32001", -123),
        ("1E" + "9" * 5000, -123),
        ("1" * 256, -124),
        ("1." + "1" * 255, -124),
    ],
)
def test_limits_of_exponent_and_digits(text: str, number: int) -> None:
    with pytest.raises(ScpiError) as caught:
        read_decimal(text)
    assert caught.value.number == number


def test_numbers_within_the_limits_are_heard() -> None:
    assert read_decimal("0" * 300 + "7") == 7  # leading zeros are not counted
    assert read_decimal("1E-32000") == 0
    assert read_decimal("1E00000000003") == 1000
    assert read_decimal("1" * 255) == pytest.approx(1.1111111111e254)


@pytest.mark.parametrize(("text", "value"), NON_DECIMAL)
def test_non_decimal_numbers(text: str, value: float) -> None:
    assert read_non_decimal(text) == value


@pytest.mark.parametrize("text", ["#H", "#HG", "#Q8", "#B2", "#X12", "#H-1", "#H1_0"])
def test_faulty_non_decimal_numbers_are_refused(text: str) -> None:
    with pytest.raises(ScpiError) as caught:
        read_non_decimal(text)
    assert caught.value.number == -121


@pytest.mark.parametrize(("written", "suffix", "unit", "value"), SUFFIXES)
def test_suffixes(written: float, suffix: str, unit: str, value: float) -> None:
    assert written * suffix_factor(suffix, unit) == pytest.approx(value, rel=1e-14)


def test_multipliers_are_those_of_the_standard() -> None:
    assert {word: math.log10(factor) for word, factor in MULTIPLIERS.items()} == pytest.approx(
        TABLE_7_2
    )


# SUF-8.
@pytest.mark.parametrize(
    ("suffix", "unit", "number"),
    [("V", None, -138), ("VOLTVOLTVOLTV", "V", -134), ("HZ", "V", -131), ("QV", "V", -131)],
)
def test_wrong_suffixes_are_refused(suffix: str, unit: str | None, number: int) -> None:
    with pytest.raises(ScpiError) as caught:
        suffix_factor(suffix, unit)
    assert caught.value.number == number


# NUM-5, four public manuals.
@pytest.mark.parametrize(
    ("value", "text"),
    [(math.inf, "9.9E+37"), (-math.inf, "-9.9E+37"), (math.nan, "9.91E+37")],
)
def test_special_values(value: float, text: str) -> None:
    assert format_real(value) == text


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_real_number_is_written_as_nr3_and_read_back(value: float) -> None:
    text = format_real(value)
    assert NR3.fullmatch(text)
    assert read_decimal(text) == pytest.approx(value, rel=1e-11)


@given(st.integers(-32768, 65535))
def test_an_integer_is_written_as_nr1_and_read_back(value: int) -> None:
    text = format_integer(value)
    assert NR1.fullmatch(text)
    assert read_decimal(text) == value
