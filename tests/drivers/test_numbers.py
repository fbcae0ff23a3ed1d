"""Numbers against IEEE Std 488.2-1992, 8.7.2 to 8.7.4, and SCPI-99's special values."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.drivers.numbers import (
    NumberError,
    parse_error_entry,
    parse_finite,
    parse_number,
    parse_whole,
)


# Examples of NR1, NR2 and NR3 from public manuals that quote the standard.
@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("146", 146.0),
        ("+146", 146.0),
        ("-12345", -12345.0),
        ("0273", 273.0),
        ("12.3", 12.3),
        ("+1.2345", 1.2345),
        ("-0.123", -0.123),
        ("273.", 273.0),
        (".0273", 0.0273),
        ("2.73E+2", 273.0),
        ("273.0E-2", 2.73),
        (" 4.3E-3 ", 4.3e-3),
    ],
)
def test_every_written_form(text: str, value: float) -> None:
    assert parse_number(text) == value


def test_infinity_is_infinite_and_not_a_number_is_refused() -> None:
    assert parse_number("9.9E+37") == math.inf
    assert parse_number("-9.9E37") == -math.inf
    with pytest.raises(NumberError, match="not a number"):
        parse_number("9.91E37")
    with pytest.raises(NumberError, match="infinity"):
        parse_finite("9.9E37")


@pytest.mark.parametrize("text", ["", "OK", "1,2", "0x10", "nan", "inf", "1_000", "1 V", "--1"])
def test_what_is_no_number_is_refused(text: str) -> None:
    with pytest.raises(NumberError):
        parse_number(text)


@given(st.floats(min_value=-1e30, max_value=1e30))
def test_a_number_survives_writing_and_reading(value: float) -> None:
    assert parse_number(repr(value)) == value


def test_whole_numbers() -> None:
    assert parse_whole("32") == 32
    assert parse_whole("+3.2E1") == 32
    with pytest.raises(NumberError, match="whole"):
        parse_whole("1.5")


# SCPI-99 volume 2, 21.8: number, then text in double quotes.
def test_entries_of_an_error_queue() -> None:
    assert parse_error_entry('0,"No error"') == (0, "No error")
    assert parse_error_entry('+0,"No error"') == (0, "No error")
    assert parse_error_entry('-113,"Undefined header;FOO"') == (-113, "Undefined header;FOO")
    with pytest.raises(NumberError, match="entry"):
        parse_error_entry("No error")
