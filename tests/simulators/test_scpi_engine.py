"""The SCPI engine on bytes: the published rows, and what they leave open."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine
from tests.simulators.notebook import Note, Notebook
from tests.simulators.scpi_rows_published import ROWS, Device, Ends, Row


def talk(stream: bytes, device: ScpiDevice | None = None) -> bytes:
    """Return the answers to a stream."""
    device = device or Notebook()
    return ScpiEngine(device).receive(stream)


def errors_of(stream: bytes) -> list[int]:
    """Return the numbers in the error queue after a stream."""
    device = Notebook()
    engine = ScpiEngine(device)
    engine.receive(stream)
    numbers = []
    while entry := int(engine.receive(b":SYST:ERR?\n").split(b",")[0]):
        numbers.append(entry)
    return numbers


def notes_of(stream: bytes) -> list[Note]:
    device = Notebook()
    ScpiEngine(device).receive(stream)
    assert len(device.status.errors) == 0
    return device.notes


# Everything below 1.7 is walked three ways: stream, answer, error numbers.
EXCHANGES = [
    (b"*IDN?\n", b"PULSETALLY,NOTEBOOK,0,1\n", []),
    (b"*IDN?\r\n", b"PULSETALLY,NOTEBOOK,0,1\n", []),
    (b"\n\r\n;;\n", b"", []),
    (b":SYST:VERS?\n", b"1999.0\n", []),
    (b":SYST:ERR?;ERR:NEXT?;COUN?\n", b'0,"No error";0,"No error";0\n', []),
    (b":BLOC?;:MEAS:VOLT?\n", b"#13A;\n;1\n", []),
    (b"*TST?\n", b"0\n", []),
    (b"MEAS:VOLT?;*OPC?;CURR?\n", b"1;1;2\n", []),
    # The form that does not exist
    (b"*IDN\n", b"", [-113]),
    (b"*RST?\n", b"", [-113]),
    (b":MEAS:VOLT 3\n", b"", [-113]),
    # Kinds of data that don't belong here
    (b":VOLT ABC\n", b"", [-141]),
    (b":VOLT 'a'\n", b"", [-158]),
    (b":VOLT #11A\n", b"", [-168]),
    (b":VOLT (1)\n", b"", [-178]),
    (b":TRIG:SOUR 5\n", b"", [-128]),
    (b":TEXT ABC\n", b"", [-148]),
    # A stream has no end of message inside a block: its newline counts as data
    (b":DATA #15ABC\n*IDN?\n*OPC?\n", b"1\n", [-103]),
    (b":DATA #1xABC\n", b"", [-161]),
    (b":VOLT 1E400\n", b"", [-222]),
    # A query's own parameter, and the limits of a setting
    (b":ECHO? 5\n", b"5.00000000000E+00\n", []),
    (b":ECHO?\n", b"", [-109]),
    (b":TRIG:COUN? MAX;COUN? MINimum;COUN? DEF\n", b"100;1;1\n", []),
    (b":VOLT? MAX\n", b"1.00000000000E+09\n", []),
    (b":VOLT? 5\n", b"", [-108]),
    # After a command error the rest of the message is left out, after another it is not
    (b"*OPC?;BAD;*OPC?\n", b"1\n", [-113]),
    (b"*OPC?;FAIL;*OPC?\n", b"1;1\n", [-200]),
    (b"*IDN?;*OPC?\n", b"PULSETALLY,NOTEBOOK,0,1\n", [-440]),
    (b"*OPC?;*IDN?\n", b"1;PULSETALLY,NOTEBOOK,0,1\n", []),
    # MAV is set while an answer of the same message waits
    (b"*STB?\n", b"0\n", []),
    (b"*OPC?;*STB?\n", b"1;16\n", []),
]


@pytest.mark.parametrize(("stream", "answer", "errors"), EXCHANGES)
def test_exchange(stream: bytes, answer: bytes, errors: list[int]) -> None:
    assert talk(stream) == answer
    assert errors_of(stream) == errors


@pytest.mark.parametrize(("stream", "answer", "errors"), EXCHANGES)
def test_exchange_byte_by_byte(stream: bytes, answer: bytes, errors: list[int]) -> None:
    device = Notebook()
    engine = ScpiEngine(device)
    assert b"".join(engine.receive(stream[i : i + 1]) for i in range(len(stream))) == answer
    assert [device.status.errors.pop().number for _ in errors] == errors
    assert len(device.status.errors) == 0


VOLTAGE = "[:SOURce<1-2>]:VOLTage[:LEVel]"
ALL_AT_ONCE = b"".join(stream for stream, _, _ in EXCHANGES)


@given(st.lists(st.integers(0, len(ALL_AT_ONCE)), max_size=12))
def test_any_cut_gives_the_same_answers(cuts: list[int]) -> None:
    pieces = [ALL_AT_ONCE[a:b] for a, b in pairwise([0, *sorted(cuts), len(ALL_AT_ONCE)])]
    whole, cut = Notebook(), Notebook()
    engine = ScpiEngine(cut)
    assert b"".join(map(engine.receive, pieces)) == talk(ALL_AT_ONCE, whole)
    assert cut.notes == whole.notes


# As new, but for what a power-on leaves.
BLANK = b"*RST;*CLS;*ESE 0;*SRE 0;:STAT:PRES"


def stream_of(row: Row) -> tuple[bytes, bytes]:
    """Return all messages of a row as one stream, and all its answers."""
    messages, answers = zip(*row.exchanges, strict=True)
    stream = b"".join(message + b"\n" for message in (BLANK, *messages))
    return stream, b"".join(answer + b"\n" for answer in answers if answer is not None)


# The rest of the published rows is put to a whole bench, in test_conformance.py.
OF_NOTEBOOK = [
    row for row in ROWS if row.device is not Device.GENERATOR and row.ends is not Ends.MARKED
]


@pytest.mark.parametrize("row", OF_NOTEBOOK, ids=lambda row: row.name)
def test_published_rows_hold_however_the_stream_is_cut(row: Row) -> None:
    stream, answers = stream_of(row)
    device = Notebook()
    for step in (1, 7, len(stream)):
        engine = ScpiEngine(device)
        pieces = [stream[i : i + step] for i in range(0, len(stream), step)]
        assert b"".join(map(engine.receive, pieces)) == answers
        assert [device.status.errors.pop().number for _ in row.errors] == list(row.errors)
        assert len(device.status.errors) == 0


def test_numbers_to_a_single_bit() -> None:
    assert notes_of(b":VOLT 5 MV;:SOUR2:VOLT 5;VOLT:LEV 6;:PLAIN 28E-3K;PLAIN +28.\n") == [
        (VOLTAGE, (1, 0.005)),
        (VOLTAGE, (2, 5.0)),
        (VOLTAGE, (2, 6.0)),
        (":PLAIN", (28.0,)),
        (":PLAIN", (28.0,)),
    ]
    assert notes_of(b":VOLT MAX;VOLT default;:DATA #13;\r \r\n") == [
        (VOLTAGE, (1, 1e9)),
        (VOLTAGE, (1, 1.0)),
        (":DATA", (b";\r ",)),
    ]


@pytest.mark.parametrize("text", ["ON", "on", "1", "2", "-1", "0.6", "1E400"])
def test_a_switch_is_on(text: str) -> None:
    assert notes_of(f":OUTP {text}\n".encode()) == [(":OUTPut", (True,))]


@pytest.mark.parametrize("text", ["OFF", "off", "0", "0.4", "#H0"])
def test_a_switch_is_off(text: str) -> None:
    assert notes_of(f":OUTP {text}\n".encode()) == [(":OUTPut", (False,))]


def test_power_on_is_in_the_event_status_register() -> None:
    assert talk(b"*ESR?;*ESR?\n") == b"128;0\n"


def test_opc_bit_waits_for_the_operation_and_cls_forgets_it() -> None:
    device = Notebook()
    engine = ScpiEngine(device)
    engine.receive(b"*CLS\n")
    device.busy = True
    assert engine.receive(b"*OPC;*ESR?\n") == b"0\n"
    device.busy = False
    assert engine.receive(b"*ESR?\n") == b"1\n"
    device.busy = True
    engine.receive(b"*OPC;*CLS\n")
    device.busy = False
    assert engine.receive(b"*ESR?\n") == b"0\n"


def test_bounds_of_the_enable_registers() -> None:
    assert errors_of(b"*ESE 256\n*ESE -1\n*ESE 254.6\n:STAT:OPER:ENAB 65536\n") == [-222] * 3
    assert talk(b"*ESE 254.4;*ESE?;:STAT:QUES:ENAB #HFFFF;ENAB?\n") == b"254;32767\n"


def test_status_preset_leaves_the_488_registers() -> None:
    stream = b"*ESE 1;*SRE 2;:STAT:OPER:ENAB 3;PTR 0;NTR 5;:STAT:PRES;*ESE?;*SRE?\n"
    assert talk(stream + b":STAT:OPER:ENAB?;PTR?;NTR?\n") == b"1;2\n0;32767;0\n"


def test_an_overlong_message_is_reported_and_the_next_one_is_followed() -> None:
    engine = ScpiEngine(Notebook(), limit=64)
    stream = b":TEXT '" + b"x" * 100 + b"'\n*OPC?\n:SYST:ERR?\n"
    assert engine.receive(stream) == b'1\n-363,"Input buffer overrun"\n'


def test_answers_beyond_what_is_held_are_forgotten_and_commands_are_followed() -> None:
    device = Notebook()
    engine = ScpiEngine(device, answer_limit=5000)
    fits, too_much = b"BLOC:ZER?;ZER?\n", b"BLOC:ZER?;ZER?;ZER?;ECHO? #10;:PLAIN 3;:MEAS:VOLT?\n"
    assert len(engine.receive(fits)) == 2 * 2006 + 2
    assert engine.receive(too_much) == b""
    assert device.notes == [(":PLAIN", (3.0,))]
    assert engine.receive(b"*ESR?;:SYST:ERR?;ERR?\n") == (
        b'132;-430,"Query DEADLOCKED";0,"No error"\n'  # 128: it was never asked for
    )
    assert len(engine.receive(fits)) == 2 * 2006 + 2


def test_engines_share_the_instrument_and_not_the_message() -> None:
    device = Notebook()
    first, second = ScpiEngine(device), ScpiEngine(device)
    first.receive(b":VOLT 'half of a mess")
    assert second.receive(b"*ESE 7;*ESE?\n") == b"7\n"
    assert ScpiEngine(device).receive(b"*ESE?\n") == b"7\n"


def test_each_message_is_followed_when_its_turn_comes() -> None:
    device = Notebook()
    engine = ScpiEngine(device)
    turns = engine.answers(b":VOLT 1;VOLT 2\n:VOLT 3;*OPC?\n:VOLT")
    assert device.notes == []
    assert next(turns) == b""
    assert len(device.notes) == 2
    assert next(turns) == b"1\n"
    assert len(device.notes) == 3
    assert list(turns) == []


@given(st.binary(max_size=80))
def test_no_bytes_break_the_engine(rubbish: bytes) -> None:
    engine = ScpiEngine(Notebook(), limit=256)
    engine.receive(rubbish)
    engine.receive(b"\n" * 2)
    engine.receive(b"'\n" + b"x" * 300 + b"\n\n")
    assert engine.receive(b"*CLS;*OPC?\n") == b"1\n"


def test_a_transport_that_knows_ends_needs_no_newline() -> None:
    device = Notebook()
    engine = ScpiEngine(device)
    assert list(engine.answers(b":MEAS:VOLT?", end=True)) == [b"1\n"]
    assert list(engine.answers(b":MEAS:VOLT?\n", end=True)) == [b"1\n"]
    assert list(engine.answers(b":PLAIN 4;:DATA #15AB", end=True)) == [b""]
    assert not engine.amid_message
    assert device.notes == [(":PLAIN", (4.0,))]
    assert device.status.errors.pop().number == -161
    assert list(engine.answers(b":MEAS:CURR?\n")) == [b"2\n"]
