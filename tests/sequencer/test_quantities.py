"""Quantities: as people write them, to SI and back."""

import re
from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.sequencer.quantities import (
    AREA,
    CAPACITANCE,
    CURRENT,
    KINDS,
    LENGTH,
    NUMBER,
    RESISTANCE,
    SHARE,
    TIME,
    VOLTAGE,
    Kind,
    QuantityError,
    format_quantity,
    parse_quantity,
    plain_quantity,
    quantity_pattern,
    show_duration,
    show_quantity,
)

# SI prefixes are those of the SI Brochure, 9th edition (2019), table 7.
WRITTEN = [
    ("2.5 V", VOLTAGE, 2.5),
    ("-5V", VOLTAGE, -5.0),
    # An exponent and a prefix both count.
    ("1e3 mV", VOLTAGE, 1.0),
    ("1e-3 kV", VOLTAGE, 1.0),
    ("-2.5E1mV", VOLTAGE, -0.025),
    ("0e99 s", TIME, 0.0),
    ("80us", TIME, 80e-6),
    ("80 µs", TIME, 80e-6),
    ("100 ns", TIME, 100e-9),
    ("2 min", TIME, 120.0),
    ("8 h", TIME, 28800.0),
    ("1 d", TIME, 86400.0),
    ("220 kohm", RESISTANCE, 220e3),
    ("10 Mohm", RESISTANCE, 10e6),
    ("50 Ω", RESISTANCE, 50.0),
    ("12 pF", CAPACITANCE, 12e-12),
    ("1e-12 A", CURRENT, 1e-12),
    ("10000 um2", AREA, 1e-8),
    ("1 mm2", AREA, 1e-6),
    ("150 nm", LENGTH, 150e-9),
    (5, NUMBER, 5.0),
    ("5", NUMBER, 5.0),
    (0, VOLTAGE, 0.0),
]


@pytest.mark.parametrize(("written", "kind", "value"), WRITTEN)
def test_well_written_quantities(written: object, kind: Kind, value: float) -> None:
    assert parse_quantity(written, kind) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("written", "kind", "problem", "remedy"),
    [
        ("3 V", TIME, "'3 V' is not a time", "'100 us'"),
        (3, TIME, "3 has no unit", "'3 us'"),
        ("5 m", TIME, "'5 m' is not a time", "'100 us'"),
        ("2 s", NUMBER, "is not a plain number", "write 5"),
        (True, NUMBER, "yes-or-no", "write 5"),
        (float("nan"), NUMBER, "not a finite number", "write 5"),
        (float("inf"), VOLTAGE, "not a finite number", "'2.5 V'"),
        ("nan V", VOLTAGE, "is not a voltage", "'2.5 V'"),
        ("1e999 V", VOLTAGE, "beyond every range", "'2.5 V'"),
        ("1e300 kV", VOLTAGE, "beyond every range", "'2.5 V'"),
        ("1e299 d", TIME, "beyond every range", "'100 us'"),
        ("٣ mV", VOLTAGE, "is not a voltage", "'2.5 V'"),
        ({}, VOLTAGE, "a group of settings is not", "'2.5 V'"),
        ([], VOLTAGE, "a list is not", "'2.5 V'"),
        (None, VOLTAGE, "a blank is not", "'2.5 V'"),
        ("", VOLTAGE, "is not a voltage", "'2.5 V'"),
        ("2,5 V", VOLTAGE, "is not a voltage", "'2.5 V'"),
    ],
)
def test_mistakes_say_what_was_found_and_what_to_write(
    written: object, kind: Kind, problem: str, remedy: str
) -> None:
    with pytest.raises(QuantityError) as caught:
        parse_quantity(written, kind)
    assert problem in caught.value.problem
    assert remedy in caught.value.remedy


@given(st.sampled_from(KINDS), st.floats(min_value=1e-15, max_value=1e12))
def test_writing_and_reading_gives_the_same_value(kind: Kind, value: float) -> None:
    again = parse_quantity(format_quantity(value, kind), kind)
    # An area is written in um2, whose factor is not a power of two.
    assert again == (pytest.approx(value, rel=1e-15) if kind is AREA else value)
    assert parse_quantity(plain_quantity(value, kind), kind) == again


def test_bounds_are_written_as_people_write_them() -> None:
    written = [(1.0, SHARE), (0.5, SHARE), (1000.0, TIME), (3.2e8, TIME), (1e-4, TIME), (0.0, TIME)]
    assert [plain_quantity(value, kind) for value, kind in written] == [
        "100 %",
        "50 %",
        "1000 s",
        "320000000 s",
        "100 us",
        "0 s",
    ]


@given(st.data(), st.sampled_from(KINDS))
def test_the_pattern_of_a_kind_fits_what_is_read_and_nothing_else(
    data: st.DataObject, kind: Kind
) -> None:
    pattern = re.compile(quantity_pattern(kind))
    text = data.draw(
        st.one_of(st.from_regex(pattern), st.text("0123456789.eE+- umkVs%", max_size=9))
    )
    problem = ""
    try:
        parse_quantity(text, kind)
    except QuantityError as error:
        problem = error.problem
    # A pattern knows no range.
    assert bool(pattern.search(text)) == (not problem or "beyond every range" in problem)


@given(st.text(max_size=30), st.sampled_from(KINDS))
def test_any_text_is_a_quantity_or_a_quantity_error(text: str, kind: Kind) -> None:
    with suppress(QuantityError):
        assert isinstance(parse_quantity(text, kind), float)


def test_what_people_read() -> None:
    assert show_quantity(1e-4, "s") == "100 us"
    assert show_quantity(3.913875, "V") == "3.914 V"
    assert show_quantity(8.0, "") == "8"
    # A share takes no prefix.
    assert show_quantity(0.5, "%") == "50 %"
    assert [show_duration(each) for each in (0.44, 12, 200, 7500, 273_600)] == [
        "0.4 s",
        "12 s",
        "3 min 20 s",
        "2 h 05 min",
        "3 d 04 h",
    ]
