"""The SCPI engine on bytes: the rows of sections 1.1 to 1.7 of the reference values."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_real
from pulsetally.simulators.scpi_parameters import Block, Parameter, Switch, Text, Word, number


class Notebook(ScpiDevice):
    """An instrument that writes down what it was told, under the pattern's name."""

    def __init__(self) -> None:
        super().__init__("PULSETALLY,NOTEBOOK,0,1")
        self.notes: list[tuple[str, tuple[object, ...]]] = []
        self.busy = False
        real = number(-1e9, 1e9, 1.0, unit="V")
        self.declare(
            [
                self.noting(":ROUTe:CONNect:RULE", Word(("ALL", "FREE")), Word(("ALL", "FREE"))),
                self.noting(":ROUTe:CONNect:SEQuence", Word(("ALL",)), Word(("BBM",))),
                self.noting(":TRIGger:SOURce", Word(("EXTernal", "BUS"))),
                self.noting(":TRIGger:COUNt", number(1, 100, 1, whole=True)),
                self.noting(":SAMPle:COUNt", number(1, 100, 1, whole=True)),
                self.noting(":FREQuency:STARt", number(1, 1e9, 1e3, unit="HZ")),
                self.noting(":FREQuency:STOP", number(1, 1e9, 1e3, unit="HZ")),
                self.noting("[:SOURce<1-2>]:VOLTage[:LEVel]", real),
                self.noting(":LOAD", number(1, 1e9, 50, unit="OHM")),
                self.noting(":PLAIN", number(-1e9, 1e9, 1.0, unit="")),
                self.noting(":DATA", Block()),
                self.noting(":TEXT", Text()),
                self.noting(":OUTPut", Switch()),
                self.noting("*EMC", number(0, 1, 0)),
                self.noting("*GMC", Text()),
                Command(pattern=":MEASure:VOLTage", answer=lambda _: "1"),
                Command(pattern=":MEASure:CURRent", answer=lambda _: "2"),
                Command(pattern=":CURRent", answer=lambda _: "3"),
                Command(pattern=":BLOCk", answer=lambda _: definite_block(b"A;\n")),
                Command(pattern=":FAIL", execute=self.fail),
                Command(
                    pattern=":ECHO",
                    query_parameters=(number(0, 9, 0, whole=True),),
                    answer=lambda call: format_real(call.number()),
                ),
            ]
        )

    def noting(self, pattern: str, *parameters: Parameter) -> Command:
        return Command(
            pattern=pattern,
            parameters=parameters,
            execute=lambda call: self.notes.append((pattern, call.suffixes + call.values)),
            answer=lambda _: pattern,
        )

    def fail(self, _: Call) -> None:
        raise ScpiError(-200)

    def is_busy(self) -> bool:
        return self.busy

    def wait(self) -> None:
        self.busy = False


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


def notes_of(stream: bytes) -> list[tuple[str, tuple[object, ...]]]:
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
    # TREE-2 to TREE-5, TREE-7, TREE-10
    (b"MEAS:VOLT?;CURR?\n", b"1;2\n", []),
    (b"MEAS:VOLT?;:CURR?\n", b"1;3\n", []),
    (b"STAT:OPER?;PRES\n", b"0\n", []),
    (b"STAT:OPER:COND?;ENAB 16;ENAB?\n", b"0;16\n", []),
    (b"TRIG:COUN MIN;SAMP:COUN MIN\n", b"", [-113]),
    (b"MEAS:VOLT?;*OPC?;CURR?\n", b"1;1;2\n", []),
    # ERR-1 to ERR-6, ERR-8
    (b"*XYZ\n", b"", [-113]),
    (b"SETUP&\n", b"", [-101]),
    (b"*EMC 1:CH1:VOLTS 5\n", b"", [-103]),
    (b"*ESE\n", b"", [-109]),
    (b"*ESE 0,1\n", b"", [-108]),
    (b'*GMC"MACRO"\n', b"", [-111]),
    (b":ABCDEFGHIJKLM\n", b"", [-112]),
    (b":VOLT 2E9\n", b"", [-222]),
    (b":TRIG:SOUR NOON\n", b"", [-224]),
    # MNE-2
    (b"VOL 1\n", b"", [-113]),
    (b"VOLTAG 1\n", b"", [-113]),
    (b"SYSTe:ERR?\n", b"", [-113]),
    (b":SOUR3:VOLT 1\n", b"", [-114]),
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
    # SUF-8
    (b"*ESE 5 V\n", b"", [-138]),
    (b":VOLT 5 HZ\n", b"", [-131]),
    (b":VOLT 5 ABCDEFGHIJKLM\n", b"", [-134]),
    # NUM-7
    (b":VOLT 1E32001\n", b"", [-123]),
    (b":VOLT " + b"1" * 256 + b"\n", b"", [-124]),
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


ALL_AT_ONCE = b"".join(stream for stream, _, _ in EXCHANGES)


@given(st.lists(st.integers(0, len(ALL_AT_ONCE)), max_size=12))
def test_any_cut_gives_the_same_answers(cuts: list[int]) -> None:
    pieces = [ALL_AT_ONCE[a:b] for a, b in pairwise([0, *sorted(cuts), len(ALL_AT_ONCE)])]
    whole, cut = Notebook(), Notebook()
    engine = ScpiEngine(cut)
    assert b"".join(map(engine.receive, pieces)) == talk(ALL_AT_ONCE, whole)
    assert cut.notes == whole.notes


# TREE-1, TREE-6 to TREE-9: message, and the commands it equals.
VOLTAGE = "[:SOURce<1-2>]:VOLTage[:LEVel]"
WALKS = [
    (
        b":ROUT:CONN:RULE ALL,FREE;SEQ ALL,BBM\n",
        [(":ROUTe:CONNect:RULE", ("ALL", "FREE")), (":ROUTe:CONNect:SEQuence", ("ALL", "BBM"))],
    ),
    (b"TRIG:SOUR EXT;COUNT 10\n", [(":TRIGger:SOURce", ("EXT",)), (":TRIGger:COUNt", (10,))]),
    (
        b"TRIG:COUN MIN;:SAMP:COUN MIN\n",
        [(":TRIGger:COUNt", (1,)), (":SAMPle:COUNt", (1,))],
    ),
    (
        b"FREQ:STAR 3E6;*OPC;STOP 5E6\n",
        [(":FREQuency:STARt", (3e6,)), (":FREQuency:STOP", (5e6,))],
    ),
    (b"*RST;VOLT 5\n", [(VOLTAGE, (1, 5.0))]),
    (
        b"SOUR2:VOLT 5;VOLT:LEV 6\n",
        [(VOLTAGE, (2, 5.0)), (VOLTAGE, (2, 6.0))],
    ),
]  # fmt: skip


@pytest.mark.parametrize(("message", "notes"), WALKS)
def test_compound_messages_walk_the_tree(
    message: bytes, notes: list[tuple[str, tuple[object, ...]]]
) -> None:
    assert notes_of(message) == notes


# NUM-8 and section 1.3, through the engine.
@pytest.mark.parametrize(
    ("message", "value"),
    [(f":PLAIN {text}\n".encode(), 28.0) for text in
     ("28", "0.28E2", "280E-1", "28000m", "0.028K", "28E-3K", "#H1C", "+28.", "2.8e+01")]
    + [
        (b":VOLT 5 MV\n", 0.005),
        (b":VOLT 5MAV\n", 5e6),
        (b":FREQ:STOP 2 MHZ\n", 2e6),
        (b":FREQ:STOP 2 MAHZ\n", 2e6),
        (b":LOAD 10 MOHM\n", 1e7),
        (b":VOLT MAX\n", 1e9),
        (b":VOLT default\n", 1.0),
    ],
)  # fmt: skip
def test_numbers_and_suffixes(message: bytes, value: float) -> None:
    ((_, values),) = notes_of(message)
    assert values[-1] == pytest.approx(value, rel=1e-14)


@pytest.mark.parametrize(
    ("message", "payload"),
    [
        (b":DATA #13ABC\n", b"ABC"),
        (b":DATA #800000003ABC\n", b"ABC"),
        (b":DATA #10\n", b""),
        (b":DATA #0ABC\n", b"ABC"),
        (b":DATA #13A\nC\n", b"A\nC"),
        (b":DATA #42000" + b"\n" * 2000 + b"\n", b"\n" * 2000),
        (b":DATA #13;\r \r\n", b";\r "),
    ],
)
def test_blocks_arrive_whole(message: bytes, payload: bytes) -> None:
    assert notes_of(message) == [(":DATA", (payload,))]


@pytest.mark.parametrize("text", ["ON", "on", "1", "2", "-1", "0.6", "1E400"])
def test_a_switch_is_on(text: str) -> None:
    assert notes_of(f":OUTP {text}\n".encode()) == [(":OUTPut", (True,))]


@pytest.mark.parametrize("text", ["OFF", "off", "0", "0.4", "#H0"])
def test_a_switch_is_off(text: str) -> None:
    assert notes_of(f":OUTP {text}\n".encode()) == [(":OUTPut", (False,))]


def test_event_status_after_an_unknown_header_and_opc() -> None:  # ESR-1, ESR-2
    assert talk(b"*CLS\n*XYZ\n*OPC\n*ESR?\n*ESR?\n") == b"33\n0\n"


def test_power_on_is_in_the_event_status_register() -> None:
    assert talk(b"*ESR?;*ESR?\n") == b"128;0\n"


def test_opc_query_sets_no_bit() -> None:  # ESR-4
    assert talk(b"*CLS;*OPC?;*ESR?;:SYST:ERR:COUN?\n") == b"1;0;0\n"


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


def test_rst_keeps_the_error_queue_and_cls_clears_it() -> None:  # ESR-5
    assert talk(b"*XYZ\n*RST\n:SYST:ERR:COUN?\n*CLS;:SYST:ERR:COUN?;*ESR?\n") == b"1\n0;0\n"


def test_status_byte_follows_its_enables() -> None:
    assert talk(b"*CLS;*ESE 32;*SRE 255;*SRE?\n*XYZ\n*STB?\n*ESE?\n") == b"191\n100\n32\n"


def test_bounds_of_the_enable_registers() -> None:
    assert errors_of(b"*ESE 256\n*ESE -1\n*ESE 254.6\n:STAT:OPER:ENAB 65536\n") == [-222] * 3
    assert talk(b"*ESE 254.4;*ESE?;:STAT:QUES:ENAB #HFFFF;ENAB?\n") == b"254;32767\n"


def test_status_preset_leaves_the_488_registers() -> None:
    stream = b"*ESE 1;*SRE 2;:STAT:OPER:ENAB 3;PTR 0;NTR 5;:STAT:PRES;*ESE?;*SRE?\n"
    assert talk(stream + b":STAT:OPER:ENAB?;PTR?;NTR?\n") == b"1;2\n0;32767;0\n"


def test_overflow_ends_the_queue_with_350() -> None:
    numbers = errors_of(b"*XYZ\n" * 40)
    assert numbers == [-113] * 31 + [-350]


def test_error_entries_have_number_and_quoted_text() -> None:
    assert talk(b":FAIL;:SYST:ERR?\n") == b'-200,"Execution error"\n'


def test_an_overlong_message_is_reported_and_the_next_one_is_followed() -> None:
    engine = ScpiEngine(Notebook(), limit=64)
    stream = b":TEXT '" + b"x" * 100 + b"'\n*OPC?\n:SYST:ERR?\n"
    assert engine.receive(stream) == b'1\n-363,"Input buffer overrun"\n'


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
