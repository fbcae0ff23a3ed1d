"""The link against a server that misbehaves, over real sockets."""

import socket
import time
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager

import pytest

from pulsetally.drivers.errors import BadReply, LinkClosed, LinkError, NoAnswer
from pulsetally.drivers.link import VisaLink, manager
from tests.drivers.misbehaving import Answer, server

Linked = Callable[..., AbstractContextManager[VisaLink]]


@pytest.fixture(params=[False, True], ids=["socket", "public"])
def linked(request: pytest.FixtureRequest) -> Linked:
    """Return what links to a server, over its socket or over PyVISA's public interface."""

    @contextmanager
    def link_to(answer: Answer, *, seconds: float = 5.0) -> Iterator[VisaLink]:
        with server(answer) as address:
            link = VisaLink(address, seconds=seconds, public=request.param)
            try:
                yield link
            finally:
                link.close()

    return link_to


def echo(connection: socket.socket, line: bytes) -> None:
    if line.endswith(b"?"):
        connection.sendall(line[:-1] + b"\n")


def test_answers_come_in_order(linked: Linked) -> None:
    with linked(echo) as link:
        link.write("SET 1")
        assert [link.ask(f"A{number}?") for number in range(50)] == [
            f"A{number}" for number in range(50)
        ]


@pytest.mark.parametrize("size", [0, 1, 9, 10, 4096, 65_535, 65_536, 1_000_000])
def test_a_block_full_of_line_feeds_comes_whole(linked: Linked, size: int) -> None:
    data = b"\n" * size

    def answer(connection: socket.socket, line: bytes) -> None:
        if line == b"DATA?":
            digits = str(size).encode()
            connection.sendall(b"#" + str(len(digits)).encode() + digits + data + b"\n")
        else:
            echo(connection, line)

    with linked(answer) as link:
        assert link.ask_block("DATA?") == data
        assert link.ask("AFTER?") == "AFTER"


def test_a_block_in_single_bytes_comes_whole(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        for byte in b"#212hello\nworld!\n":
            connection.sendall(bytes([byte]))
            time.sleep(0.001)

    with linked(answer) as link:
        assert link.ask_block("DATA?") == b"hello\nworld!"


def test_an_indefinite_block_ends_with_its_line(linked: Linked) -> None:
    with linked(lambda connection, line: connection.sendall(b"#0abc\n")) as link:
        assert link.ask_block("DATA?") == b"abc"


def test_an_indefinite_block_may_hold_line_feeds(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#0" + b"a\nb\n\n" * 500 + b"\n")

    with linked(answer) as link:
        assert link.ask_block("DATA?") == b"a\nb\n\n" * 500


def test_blocks_of_changing_lengths_come_whole(linked: Linked) -> None:
    # A length that came twice is expected a third time; the next one may differ all the same.
    lengths = [5_000, 5_000, 5_000, 300, 5_000, 5_000, 70_000, 70_000, 70_000, 5_001, 4_999, 1]
    left = list(lengths)

    def answer(connection: socket.socket, line: bytes) -> None:
        size = left.pop(0)
        connection.sendall(b"#9%09d" % size + b"\n" * size + b"\n")

    with linked(answer) as link:
        assert [len(link.ask_block("DATA?")) for _ in lengths] == lengths


def test_a_steady_block_that_is_cut_is_still_an_error(linked: Linked) -> None:
    sizes = [9_000, 9_000, 9_000, 4_000]

    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#49000" + bytes(sizes.pop(0)) + (b"\n" if sizes else b""))

    with linked(answer, seconds=0.4) as link:
        for _ in range(3):
            assert link.ask_block("DATA?") == bytes(9_000)
        with pytest.raises(NoAnswer):
            link.ask_block("DATA?")


def test_a_line_end_that_nobody_expects_after_a_block_does_not_shift_the_answers(
    linked: Linked,
) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#13abc\n" if line == b"DATA?" else line[:-1] + b"\n")

    with linked(answer) as link:
        assert link.ask_block("DATA?", line_end=False) == b"abc"
        with pytest.raises(BadReply, match="nobody asked for"):
            link.ask("A?")


def test_a_line_end_that_is_missing_after_a_block_is_noticed(linked: Linked) -> None:
    with (
        linked(lambda connection, line: connection.sendall(b"#13abc"), seconds=0.1) as link,
        pytest.raises(NoAnswer, match=r"DATA\?"),
    ):
        link.ask_block("DATA?")


def test_closing_one_link_leaves_the_others_open(linked: Linked) -> None:
    assert manager() is manager()
    with linked(echo) as kept:
        with linked(echo) as closed:
            assert closed.ask("A?") == "A"
        assert kept.ask("B?") == "B"


def test_a_late_answer_taints_the_link_until_it_is_reopened(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        if line == b"SLOW?":
            time.sleep(0.3)
        echo(connection, line)

    with linked(answer, seconds=0.1) as link:
        with pytest.raises(NoAnswer, match=r"SLOW\?.*no answer within 0\.1 s"):
            link.ask("SLOW?")
        assert link.tainted
        with pytest.raises(LinkError, match="reopen"):
            link.ask("NEXT?")
        time.sleep(0.3)
        link.reopen()
        # The late answer must not be taken for this one.
        assert link.ask("NEXT?") == "NEXT"


def test_a_closed_connection_is_noticed_at_once(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        connection.shutdown(socket.SHUT_RDWR)

    with linked(answer, seconds=30.0) as link:
        began = time.monotonic()
        with pytest.raises(LinkClosed, match="check that the instrument is on"):
            link.ask("ANY?")
        assert time.monotonic() - began < 5


def test_a_cut_block_is_an_error_and_not_a_short_record(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#3100" + b"x" * 40)
        connection.shutdown(socket.SHUT_RDWR)

    with linked(answer) as link, pytest.raises(LinkClosed):
        link.ask_block("DATA?")


@pytest.mark.parametrize(
    "reply",
    [b"garbage\n", b"#x\n", b"#9999999999", b"#15ABCDEFGH\n", b"#3abc\n"],
)
def test_garbage_instead_of_a_block_is_a_bad_reply(linked: Linked, reply: bytes) -> None:
    with linked(lambda connection, line: connection.sendall(reply)) as link:
        with pytest.raises(BadReply, match="not a block"):
            link.ask_block("DATA?")
        assert link.tainted


def test_bytes_that_nobody_asked_for_are_not_taken_for_an_answer(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"first\nsecond\n")

    with linked(answer) as link:
        assert link.ask("A?") == "first"
        with pytest.raises(BadReply, match="nobody asked for"):
            link.ask("B?")


def test_an_endless_line_is_refused(linked: Linked) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        for _ in range(50):
            connection.sendall(b"x" * 10_000)

    with linked(answer) as link, pytest.raises(BadReply, match="without a line end"):
        link.ask("A?")


def test_an_answer_that_is_not_text_is_a_bad_reply(linked: Linked) -> None:
    with (
        linked(lambda connection, line: connection.sendall(b"\xff\xfe\x00\n")) as link,
        pytest.raises(BadReply, match="not plain text"),
    ):
        link.ask("A?")


def test_a_refused_port_says_that_nobody_answers() -> None:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with pytest.raises(LinkError, match=r"nobody answers there.*check that the instrument is on"):
        VisaLink(f"TCPIP::127.0.0.1::{port}::SOCKET")


def test_what_is_no_address_is_refused_with_an_example() -> None:
    with pytest.raises(LinkError, match=r"not a VISA address.*ASRL/dev/ttyUSB0"):
        VisaLink("the oscilloscope on the left")


def test_small_messages_do_not_wait_for_each_other(linked: Linked) -> None:
    # Measured without the no-delay option: 40 ms for each write that a query follows.
    with linked(echo) as link:
        began = time.monotonic()
        for _ in range(50):
            link.write("SET 1")
            link.write("SET 2")
            link.ask("GET?")
        assert time.monotonic() - began < 1.0
