"""How long a link waits, for what, and how it comes back."""

import socket
import threading
import time
import tracemalloc

import pytest

from pulsetally.drivers.channel import ChannelTimeout, Pace, SocketChannel
from pulsetally.drivers.errors import BadReply, LinkClosed, LinkError, NoAnswer
from pulsetally.drivers.link import VisaLink
from tests.drivers.misbehaving import server

PUBLIC = pytest.mark.parametrize("public", [False, True], ids=["socket", "public"])


@PUBLIC
def test_a_transfer_that_dies_is_noticed_by_its_silence(public: bool) -> None:
    def stop_midway(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#810000000" + bytes(200_000))

    with server(stop_midway) as address:
        link = VisaLink(address, seconds=30.0, idle_seconds=0.15, public=public)
        began = time.monotonic()
        with pytest.raises(NoAnswer, match=r"DATA\?.*stopped: no byte for 0\.15 s"):
            link.ask_block("DATA?")
        assert time.monotonic() - began < 1.0
        link.close()


@PUBLIC
def test_a_slow_block_may_take_longer_than_the_total_by_its_length(public: bool) -> None:
    # 6,000 bytes at 20,000 bytes a second: 0.3 s more than the 0.1 s of any other answer.
    def slow(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#46000")
        for _ in range(6):
            time.sleep(0.03)
            connection.sendall(b"\n" * 1000)
        connection.sendall(b"\n")

    with server(slow) as address:
        link = VisaLink(address, seconds=0.1, public=public)
        assert link.ask_block("DATA?") == b"\n" * 6000
        link.close()


@PUBLIC
@pytest.mark.parametrize("head", [b"", b"#3100", b"#0"])
def test_bytes_that_drip_do_not_stretch_the_total(public: bool, head: bytes) -> None:
    def drip(connection: socket.socket, line: bytes) -> None:
        connection.sendall(head)
        for _ in range(200):
            connection.sendall(b"x")
            time.sleep(0.01)

    with server(drip) as address:
        link = VisaLink(address, seconds=0.15, public=public)
        began = time.monotonic()
        with pytest.raises(NoAnswer, match=r"no answer within 0\.15"):
            link.ask_block("DATA?") if head else link.ask("DATA?")
        assert time.monotonic() - began < 0.6
        link.close()


# Nine digits end below 1 GB; the form in parentheses is not of the standard's 1992 edition.
@PUBLIC
@pytest.mark.parametrize(
    ("header", "words"),
    [
        (b"#9999999999", "announces 999999999 bytes; at most 268435456"),
        (b"#(4294967296)", "one digit"),
    ],
)
def test_a_header_of_gigabytes_is_refused_before_anything_is_allocated(
    public: bool, header: bytes, words: str
) -> None:
    with server(lambda connection, line: connection.sendall(header + bytes(1000))) as address:
        link = VisaLink(address, seconds=2.0, public=public)
        tracemalloc.start()
        try:
            with pytest.raises(BadReply, match=words):
                link.ask_block("DATA?")
            assert tracemalloc.get_traced_memory()[1] < 10_000_000
        finally:
            tracemalloc.stop()
        link.close()


def test_a_send_to_one_who_reads_nothing_ends_in_time() -> None:
    listener = socket.create_server(("127.0.0.1", 0))
    connection = socket.create_connection(listener.getsockname())
    channel = SocketChannel(connection, connection.close)
    began = time.monotonic()
    with pytest.raises(ChannelTimeout):
        channel.send(bytes(50_000_000), Pace(0.1, 0.1))
    assert time.monotonic() - began < 1.0
    listener.close()
    connection.close()


def test_an_idle_connection_is_kept_alive() -> None:
    listener = socket.create_server(("127.0.0.1", 0))
    connection = socket.create_connection(listener.getsockname())
    SocketChannel(connection, connection.close)
    assert connection.getsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE) == 1
    assert connection.getsockopt(socket.IPPROTO_TCP, socket.TCP_KEEPIDLE) <= 60
    listener.close()
    connection.close()


class FakeClock:
    """Time that passes only while somebody sleeps."""

    def __init__(self) -> None:
        self.seconds, self.sleeps = 0.0, list[float]()

    def now(self) -> float:
        return self.seconds

    def sleep(self, seconds: float) -> None:
        self.sleeps.append(seconds)
        self.seconds += seconds


def test_reopening_pauses_longer_and_longer_but_never_beyond_the_patience() -> None:
    clock = FakeClock()
    with server(lambda connection, line: None) as address:
        link = VisaLink(address, now=clock.now, sleep=clock.sleep)
    with pytest.raises(LinkError, match="nobody answers"):
        link.reopen(patience_seconds=20.0)
    assert clock.sleeps[:6] == pytest.approx([0.1, 0.2, 0.4, 0.8, 1.6, 3.2])
    assert max(clock.sleeps) == 5.0
    assert sum(clock.sleeps) == pytest.approx(20.0)
    assert link.tainted
    link.close()


def test_reopening_without_patience_tries_once() -> None:
    clock = FakeClock()
    with server(lambda connection, line: None) as address:
        link = VisaLink(address, now=clock.now, sleep=clock.sleep)
    with pytest.raises(LinkError):
        link.reopen()
    assert clock.sleeps == []
    link.close()


@PUBLIC
def test_reopening_goes_on_until_the_instrument_is_back(public: bool) -> None:
    failures = [3]

    def busy_at_first(connection: socket.socket, line: bytes) -> None:
        if failures[0] and line == b"*IDN?":
            failures[0] -= 1
            connection.shutdown(socket.SHUT_RDWR)
        elif line.endswith(b"?"):
            connection.sendall(line[:-1] + b"\n")

    clock = FakeClock()
    with server(busy_at_first) as address:
        link = VisaLink(address, public=public, now=clock.now, sleep=clock.sleep)
        with pytest.raises(LinkClosed):
            link.ask("*IDN?")
        link.reopen(patience_seconds=60.0)
        assert link.ask("A?") == "A"
        assert clock.sleeps == pytest.approx([0.1, 0.2])
        link.close()


@PUBLIC
def test_reopening_ends_half_a_message_asks_who_is_there_and_clears(public: bool) -> None:
    heard: list[bytes] = []

    def note(connection: socket.socket, line: bytes) -> None:
        heard.append(line)
        if line.endswith(b"?"):
            connection.sendall(b"A,B,C,D\n")

    with server(note) as address:
        link = VisaLink(address, public=public)
        link.reopen()
        link.ask("LAST?")
        link.close()
    assert heard == [b"", b"*IDN?", b"*CLS", b"LAST?"]


def test_reopening_a_closed_link_takes_its_lock_again() -> None:
    def echo(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"A\n") if line.endswith(b"?") else None

    with server(echo) as address:
        link = VisaLink(address)
        link.close()
        link.reopen()
        with pytest.raises(LinkError, match="in use by process"):
            VisaLink(address)
        link.close()


@PUBLIC
def test_two_threads_on_one_link_each_get_their_own_answers(public: bool) -> None:
    # Measured without a lock: 2,452 of 4,000 answers went to the wrong thread.
    def echo(connection: socket.socket, line: bytes) -> None:
        connection.sendall(line[:-1] + b"\n")

    wrong: list[str] = []
    with server(echo) as address:
        link = VisaLink(address, public=public)

        def ask(name: str) -> None:
            for number in range(100):
                answer = link.ask(f"{name}{number}?")
                if answer != f"{name}{number}":
                    wrong.append(answer)

        threads = [threading.Thread(target=ask, args=(name,)) for name in "AB"]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        link.close()
    assert wrong == []


def test_a_thread_that_waits_too_long_for_its_turn_is_told_so() -> None:
    held, go_on = threading.Event(), threading.Event()

    with server(lambda connection, line: None) as address:

        def held_by_gap() -> None:
            held.set()
            go_on.wait(5)

        # What holds the first thread is the pause before its message.
        link = VisaLink(address, seconds=0.1, gap_seconds=1.0, sleep=lambda _: held_by_gap())
        first = threading.Thread(target=lambda: link.write("A"))
        first.start()
        held.wait(5)
        with pytest.raises(LinkError, match=r"B\?.*another thread has used this link.*one thread"):
            link.ask("B?")
        go_on.set()
        first.join()
        assert not link.tainted
        link.close()


def test_an_interrupt_in_the_middle_of_an_exchange_taints_the_link() -> None:
    def interrupt(_: float) -> None:
        raise KeyboardInterrupt

    with server(lambda connection, line: None) as address:
        link = VisaLink(address, gap_seconds=0.01, sleep=interrupt)
        with pytest.raises(KeyboardInterrupt):
            link.ask("A?")
        with pytest.raises(LinkError, match=r"since 'A\?' failed"):
            link.ask("B?")
        link.close()
