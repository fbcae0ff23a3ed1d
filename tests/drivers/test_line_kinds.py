"""Serial lines over a pseudo-terminal, and HiSLIP and VXI-11 over loopback."""

import gc
import logging
import os
import re
import threading
import time
import warnings
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager

import pytest

from pulsetally.drivers.errors import BadReply, LinkClosed, LinkError, NoAnswer
from pulsetally.drivers.link import VisaLink
from tests.drivers.lines import Reply, hislip, serial_line, vxi11

# XON, XOFF, line feed, carriage return, NUL, interrupt, end of file, and all the others.
AWKWARD = b"\x11\x13\n\r\x00\x03\x04\x1a\x7f\xff" + bytes(range(256))


def block(payload: bytes) -> bytes:
    digits = str(len(payload)).encode()
    return b"#%d%s%s" % (len(digits), digits, payload)


Serve = Callable[[Reply], AbstractContextManager[str]]


def answers(line: bytes) -> bytes:
    if line.strip() == b"DATA?":
        return block(AWKWARD * 20) + b"\n"
    return line.strip()[:-1] + b"\n" if line.strip().endswith(b"?") else b""


@contextmanager
def open_link(address: str, seconds: float = 5.0) -> Iterator[VisaLink]:
    link = VisaLink(address, seconds=seconds)
    try:
        yield link
    finally:
        link.close()


def send(near: int, line: bytes) -> None:
    os.write(near, answers(line))


def says(near: int, data: bytes) -> None:
    os.write(near, data)


def test_a_serial_block_of_control_characters_comes_whole() -> None:
    with serial_line(send) as address, open_link(address) as link:
        for _ in range(3):
            assert link.ask_block("DATA?") == AWKWARD * 20
            assert link.ask("AFTER?") == "AFTER"


def test_a_serial_line_in_halves_is_one_answer() -> None:
    def halves(near: int, line: bytes) -> None:
        os.write(near, b"12")
        time.sleep(0.05)
        os.write(near, b"34\n")

    with serial_line(halves) as address, open_link(address) as link:
        assert link.ask("A?") == "1234"


def test_half_a_serial_line_and_then_silence_is_no_answer() -> None:
    with (
        serial_line(lambda near, line: says(near, b"12")) as address,
        open_link(address, 0.1) as link,
        pytest.raises(NoAnswer, match=r"A\?.*within 0\.1 s"),
    ):
        link.ask("A?")


def test_a_silent_serial_line_is_no_answer_in_time() -> None:
    with serial_line(lambda near, line: None) as address, open_link(address, 0.1) as link:
        began = time.monotonic()
        with pytest.raises(NoAnswer, match="check that the instrument is on"):
            link.ask("A?")
        assert time.monotonic() - began < 0.5


def test_serial_bytes_that_nobody_asked_for_are_noticed() -> None:
    with (
        serial_line(lambda near, line: says(near, b"a\nb\n")) as address,
        open_link(address) as link,
    ):
        assert link.ask("A?") == "a"
        with pytest.raises(BadReply, match="nobody asked for"):
            link.ask("B?")


def test_what_waits_on_a_serial_line_when_it_is_opened_is_flushed() -> None:
    said = threading.Event()

    def late(near: int, line: bytes) -> None:
        os.write(near, b"late\n" if line == b"SLOW?" else answers(line))
        said.set()

    with serial_line(late) as address, open_link(address) as link:
        link.write("SLOW?")
        assert said.wait(5)
        # The system hands a terminal's bytes on a little after they are written.
        time.sleep(0.1)
        with pytest.raises(BadReply, match="nobody asked for"):
            link.ask("NEXT?")
        link.reopen()
        assert link.ask("NEXT?") == "NEXT"


def test_a_serial_line_whose_other_end_closes_is_gone() -> None:
    def hang_up(near: int, line: bytes) -> None:
        os.close(near)
        raise OSError

    with serial_line(hang_up) as address, open_link(address, 2.0) as link:
        began = time.monotonic()
        with pytest.raises(LinkClosed, match=r"A\?.*the line is gone.*check that the instrument"):
            link.ask("A?")
        assert time.monotonic() - began < 1.0


def test_a_serial_port_that_is_not_there_says_what_to_check() -> None:
    with pytest.raises(LinkError, match=r"can't be opened.*check the name of the port") as caught:
        VisaLink("ASRL/dev/no-such-port::INSTR")
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("kind", [hislip, vxi11])
def test_message_based_lines_open_through_the_same_call(kind: Serve) -> None:
    with kind(answers) as address, open_link(address) as link:
        assert link.ask("*IDN?") == "*IDN"
        assert link.ask_block("DATA?") == AWKWARD * 20
        link.reopen()
        assert link.ask("AFTER?") == "AFTER"


@pytest.mark.parametrize("kind", [hislip, vxi11])
def test_a_message_may_end_without_a_line_feed(kind: Serve) -> None:
    with kind(lambda line: b"1.5" if b"?" in line else b"") as address, open_link(address) as link:
        assert [link.ask("A?"), link.ask("B?")] == ["1.5", "1.5"]


@pytest.mark.parametrize("kind", [hislip, vxi11])
def test_an_indefinite_block_ends_with_its_message_and_not_at_a_line_feed(kind: Serve) -> None:
    with kind(lambda line: b"#0" + AWKWARD + b"\n") as address, open_link(address) as link:
        assert link.ask_block("DATA?") == AWKWARD


# The sizes that our reads ask for, the library's own chunk, and one either side of each.
@pytest.mark.parametrize(
    "size", [near + off for near in (20 * 1024, 65_537, 2 * 65_537, 327_685) for off in (-1, 0, 1)]
)
def test_an_answer_of_exactly_one_chunk_comes_without_a_time_out(size: int) -> None:
    # Measured: VXI-11 takes an answer of exactly what was asked for for a part of one.
    payload = b"\n" * (size - len(block(b"\n" * (size - 9))) + size - 9)
    message = block(payload)
    with (
        vxi11(lambda line: message if b"?" in line else b"") as address,
        open_link(address, 1.0) as link,
    ):
        assert link.ask_block("DATA?", line_end=False) == payload


@pytest.mark.parametrize("kind", [hislip, vxi11])
def test_a_silent_message_based_instrument_is_no_answer(kind: Serve) -> None:
    with kind(lambda line: b"") as address, open_link(address, 0.1) as link:
        with pytest.raises(NoAnswer, match=r"A\?"):
            link.ask("A?")
        with pytest.raises(LinkError, match="reopen"):
            link.ask("B?")


# What this installation lacks, and what the backend can't do, in one sentence each.
@pytest.mark.parametrize(
    ("address", "words"),
    [
        ("VXI0::1::INSTR", r"can't be opened.*use a TCPIP, ASRL, USB or GPIB address\.$"),
        ("VICP::127.0.0.1::INSTR", r"can't be opened.*install PyVICP\.$"),
        ("TCPIP::127.0.0.1::hislip0,1::INSTR", r"can't be opened.*[Rr]efused.*check that"),
        ("TCPIP::127.0.0.1,1::inst0::INSTR", r"can't be opened.*[Rr]efused.*check that"),
        ("USB0::0x1234::0x5678::NOBODY::INSTR", r"can't be opened.*To fix it"),
    ],
)
def test_what_can_not_be_opened_says_why_in_one_line(
    address: str, words: str, caplog: pytest.LogCaptureFixture
) -> None:
    # The log would keep the backend's half-open sockets.
    with caplog.at_level(logging.CRITICAL + 1, "pyvisa"), warnings.catch_warnings():
        # The backend forgets the sockets of connections that were refused.
        warnings.simplefilter("ignore", ResourceWarning)
        try:
            VisaLink(address)
        except LinkError as error:
            said = str(error)
        gc.collect()
    assert re.search(words, said)
    assert "\n" not in said
