"""Cutting a stream into messages, units and elements: IEEE 488.2 section 7."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_message import (
    BlockElement,
    Element,
    ExpressionElement,
    MessageReader,
    NumberElement,
    StringElement,
    WordElement,
    read_elements,
    split_header,
    split_units,
)

STREAM = (
    b"*IDN?\r\n\n:VOLT 5\n:DATA #13A\nC,#210\n\n\n\n\n\n\n\n\n\n,2\n"
    b":TEXT 'a;\nb''c', \"d#15\"\n:DATA #0x;\"y\nA#15\n:BITS #HFF\n'late"
)
MESSAGES = [
    b"*IDN?\r",
    b"",
    b":VOLT 5",
    b":DATA #13A\nC,#210\n\n\n\n\n\n\n\n\n\n,2",
    b":TEXT 'a;\nb''c', \"d#15\"",
    b':DATA #0x;"y',
    b"A#15",
    b":BITS #HFF",
    b"'late",
]


def fed(pieces: list[bytes], limit: int = 65_536) -> list[bytes | int]:
    reader = MessageReader(limit)
    found = [message for piece in pieces for message in reader.feed(piece)]
    return [m.number if isinstance(m, ScpiError) else m for m in found]


def test_messages_end_at_newlines_outside_strings_and_blocks() -> None:
    assert fed([STREAM + b"\n"]) == MESSAGES


def test_byte_by_byte_gives_the_same_messages() -> None:
    whole = STREAM + b"\n"
    assert fed([whole[i : i + 1] for i in range(len(whole))]) == MESSAGES


@given(st.lists(st.integers(0, len(STREAM) + 1)))
def test_any_cut_gives_the_same_messages(cuts: list[int]) -> None:
    whole = STREAM + b"\n"
    edges = [0, *sorted(cuts), len(whole)]
    assert fed([whole[a:b] for a, b in pairwise(edges)]) == MESSAGES


@given(
    st.lists(st.sampled_from([b"#", b"1", b"2", b"0", b" ", b",", b"'", b'"', b"\n", b"A", b";"])),
    st.integers(1, 6),
    st.integers(2, 12),
)
def test_any_rubbish_is_cut_alike_whole_and_in_pieces(
    letters: list[bytes], step: int, limit: int
) -> None:
    whole = b"".join(letters)
    pieces = [whole[i : i + step] for i in range(0, len(whole), step)]
    assert fed(pieces, limit) == fed([whole], limit)


@given(st.text("';\"\n ", max_size=30).map(str.encode), st.data())
def test_strings_are_cut_alike_however_they_come(tail: bytes, drawn: st.DataObject) -> None:
    whole = b"T '" + tail
    cuts = drawn.draw(st.lists(st.integers(0, len(whole)), max_size=6))
    pieces = [whole[a:b] for a, b in pairwise([0, *sorted(cuts), len(whole)])]
    assert fed(pieces) == fed([whole])


def test_a_string_of_quotes_that_comes_byte_by_byte_is_looked_through_once() -> None:
    # Each byte again from the string's begin would be a thousand million looks.
    reader = MessageReader()
    assert reader.feed(b"T '") == []
    for _ in range(60_000):
        assert reader.feed(b"'") == []
    assert reader.feed(b"'\n") == [b"T '" + b"'" * 60_001]


def test_a_message_of_exactly_the_limit_is_read() -> None:
    assert fed([b"A" * 16 + b"\nB\n"], limit=16) == [b"A" * 16, b"B"]


def test_a_longer_message_is_given_up_and_reading_starts_behind_the_next_newline() -> None:
    assert fed([b"A" * 17 + b"\nB\n"], limit=16) == [-363, b"B"]
    assert fed([b":D #3100" + b"\n" * 100 + b"\nB\n"], limit=16)[0] == -363


def test_an_endless_line_never_fills_the_memory() -> None:
    reader = MessageReader(limit=64)
    for _ in range(1000):
        reader.feed(b"x" * 64)
    assert len(reader._buffer) <= 128
    assert reader.feed(b"\n*IDN?\n") == [b"*IDN?"]


@pytest.mark.parametrize(
    ("message", "units"),
    [
        (b"A;B;C", [b"A", b"B", b"C"]),
        (b"A 'x;y';B", [b"A 'x;y'", b"B"]),
        (b"A #13;;;;B", [b"A #13;;;", b"B"]),
        (b'A "x"";"" y";B', [b'A "x"";"" y"', b"B"]),
        (b"A #0;B", [b"A #0;B"]),
        (b"A 'open;B", [b"A 'open;B"]),
        (b"", [b""]),
    ],
)
def test_units_are_cut_at_semicolons_outside_data(message: bytes, units: list[bytes]) -> None:
    assert list(split_units(message)) == units


@pytest.mark.parametrize(
    ("unit", "header", "rest"),
    [
        (b"*IDN?", "*IDN?", b""),
        (b" \t:SOUR1:VOLT 5", ":SOUR1:VOLT", b" 5"),
        (b"VOLT? MAX", "VOLT?", b" MAX"),
        (b"", "", b""),
        (b"  \r", "", b""),
    ],
)
def test_headers(unit: bytes, header: str, rest: bytes) -> None:
    assert split_header(unit) == (header, rest)


@pytest.mark.parametrize(
    ("unit", "number"),
    [
        (b"SETUP&", -101),
        (b"V\xf6LT 5", -101),
        (b'*GMC"MACRO"', -111),
        (b"VOLT,5", -111),
        (b"VOLT?5", -101),
        (b"VOLT#15", -111),
        (b"::VOLT", -102),
        (b"VOLT:", -102),
        (b"VOLT::HIGH", -102),
        (b"1VOLT", -102),
        (b"*", -102),
        (b"A*B", -102),
        (b"VOLT??", -101),
        (b'"VOLT"', -101),
    ],
)
def test_faulty_headers(unit: bytes, number: int) -> None:
    with pytest.raises(ScpiError) as caught:
        split_header(unit)
    assert caught.value.number == number


@pytest.mark.parametrize(
    ("data", "elements"),
    [
        (b"", []),
        (b" \r", []),
        (b" 5", [NumberElement(5.0, "")]),
        (b" 5 MV , 1.5E 3us", [NumberElement(5.0, "MV"), NumberElement(1500.0, "us")]),
        (b" 28E-3K", [NumberElement(0.028, "K")]),
        (b" 5EX", [NumberElement(5.0, "EX")]),
        (b" #HA2F,#Q62 ,#B01011", [NumberElement(float(n), "") for n in (2607, 50, 11)]),
        (b" ON,channel1", [WordElement("ON"), WordElement("channel1")]),
        (b' \'it\'\'s\', "say ""a"""', [StringElement("it's"), StringElement('say "a"')]),
        (b" #14 , \n,#0 \x00;", [BlockElement(b" , \n"), BlockElement(b" \x00;")]),
        (b" (@1,(2:3))", [ExpressionElement("(@1,(2:3))")]),
    ],
)
def test_elements(data: bytes, elements: list[Element]) -> None:
    assert read_elements(data) == elements


@pytest.mark.parametrize(
    ("data", "number"),
    [
        (b" 1:CH1:VOLTS 5", -103),
        (b" 1 2", -103),
        (b" ON OFF", -103),
        (b" 'a' 'b'", -103),
        (b" 1,", -109),
        (b" ,1", -109),
        (b" 1.2.3", -121),
        (b" +", -121),
        (b" 1E+", -121),
        (b" #HG", -121),
        (b" 1E99999", -123),
        (b" " + b"9" * 300, -124),
        (b" O&N", -141),
        (b" ABCDEFGHIJKLM", -144),
        (b" 'open", -151),
        (b" '\xff'", -151),
        (b" #15ABC", -161),
        (b" #", -102),
        (b" (@1", -171),
        (b" @1", -101),
        (b" \xb5", -101),
    ],
)
def test_faulty_elements(data: bytes, number: int) -> None:
    with pytest.raises(ScpiError) as caught:
        read_elements(data)
    assert caught.value.number == number


@given(st.binary(max_size=60))
def test_any_bytes_give_elements_or_a_standard_error(data: bytes) -> None:
    message = data.replace(b"\n", b" ")
    numbers = []
    for unit in split_units(message):
        try:
            _, rest = split_header(unit)
            read_elements(rest)
        except ScpiError as error:
            numbers.append(error.number)
    assert set(numbers) <= set(range(-199, -99))


# IEEE 488.2 section 7.5: END alone ends a message too, whatever is open in it.
@pytest.mark.parametrize("left", [b":VOLT 5", b":TEXT 'late\n", b":DATA #15A\nC", b":TEXT 'a'"])
def test_an_end_without_a_newline_ends_what_has_come(left: bytes) -> None:
    reader = MessageReader()
    assert reader.feed(b"*CLS\n" + left) == [b"*CLS"]
    assert reader.amid_message
    assert reader.end() == left
    assert not reader.amid_message
    assert reader.end() is None
    assert reader.feed(b"*IDN?\n") == [b"*IDN?"]


def test_an_end_ends_a_message_that_was_given_up_too() -> None:
    reader = MessageReader(4)
    (fault,) = reader.feed(b"*OPC;*OPC")
    assert isinstance(fault, ScpiError)
    assert reader.end() is None
    assert reader.feed(b"*CL\n") == [b"*CL"]
