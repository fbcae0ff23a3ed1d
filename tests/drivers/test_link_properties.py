"""Any split of valid answers gives the same answers; any garbage gives one of our errors."""

import itertools
import re
import socket
import time
from collections.abc import Iterator

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pulsetally.drivers.errors import BadReply, LinkClosed, NoAnswer
from pulsetally.drivers.link import VisaLink
from tests.drivers.misbehaving import server

FEW = settings(
    max_examples=16,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
LINES = st.text(st.characters(min_codepoint=0x20, max_codepoint=0x7E), min_size=1, max_size=40)
# Long ones are repetitions: what matters is where they are cut, not what they hold.
PAYLOADS = st.one_of(
    st.binary(max_size=64),
    st.builds(
        lambda piece, times: piece * times, st.binary(min_size=1, max_size=7), st.integers(1, 9_000)
    ),
    st.sampled_from([b"\n" * 70_000, bytes(70_000)]),
)


class Instrument:
    """A server that answers every line with the pieces that it has been given."""

    def __init__(self) -> None:
        self.pieces: list[bytes] = []
        self.address, self.hang_up = "", False

    def answer(self, connection: socket.socket, line: bytes) -> None:
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        for piece in self.pieces:
            connection.sendall(piece)
            if len(self.pieces) > 1:
                time.sleep(0.0005)
        if self.hang_up:
            connection.shutdown(socket.SHUT_RDWR)


@pytest.fixture
def instrument() -> Iterator[Instrument]:
    served = Instrument()
    with server(served.answer) as served.address:
        yield served


def cut(data: bytes, places: list[float]) -> list[bytes]:
    ends = sorted({round(place * len(data)) for place in places} | {0, len(data)})
    return [data[start:end] for start, end in itertools.pairwise(ends)]


@pytest.mark.parametrize("public", [False, True], ids=["socket", "public"])
@FEW
@given(
    replies=st.lists(st.one_of(LINES, PAYLOADS), min_size=1, max_size=4),
    places=st.lists(st.floats(0, 1), max_size=5),
)
def test_answers_are_the_same_however_they_are_cut(
    instrument: Instrument, public: bool, replies: list[str | bytes], places: list[float]
) -> None:
    link = VisaLink(instrument.address, seconds=5.0, public=public)
    try:
        for reply in replies:
            if isinstance(reply, str):
                instrument.pieces = cut(reply.encode() + b"\r\n", places)
                assert link.ask("A?") == reply
            else:
                digits = str(len(reply)).encode()
                instrument.pieces = cut(b"#%d%s%s\n" % (len(digits), digits, reply), places)
                assert link.ask_block("DATA?") == reply
    finally:
        link.close()


GARBAGE = st.one_of(
    st.binary(max_size=60),
    st.binary(max_size=30).map(lambda data: data + b"\n"),
    st.binary(max_size=12).map(lambda data: b"#" + data + b"\n"),
    st.from_regex(rb"#[0-9]{1,12}[^\n]{0,9}\n?", fullmatch=True),
)


def honest_block(data: bytes) -> bytes | None:
    """Read a block in the plainest way; None if the data is not one whole block and its end."""
    if found := re.fullmatch(rb"#0(.*)\n", data, re.DOTALL):
        return found[1]
    if found := re.match(rb"#([1-9])", data):
        digits = data[2 : 2 + int(found[1])]
        rest = data[2 + int(found[1]) :]
        if len(digits) == int(found[1]) and digits.isdigit():
            payload, after = rest[: int(digits)], rest[int(digits) :]
            if len(payload) == int(digits) and after.startswith((b"\n", b"\r\n")):
                return payload
    return None


# Both within the deadline by the clock, and at once since the other side hangs up.
@pytest.mark.parametrize(("seconds", "hang_up"), [(0.05, False), (5.0, True)])
@pytest.mark.parametrize("public", [False, True], ids=["socket", "public"])
@FEW
@given(data=GARBAGE)
def test_garbage_is_one_of_our_errors_in_time_and_never_a_wrong_answer(
    instrument: Instrument, public: bool, seconds: float, hang_up: bool, data: bytes
) -> None:
    instrument.pieces, instrument.hang_up = [data], hang_up
    first = data.split(b"\n")[0].removesuffix(b"\r")
    for block in (False, True):
        link = VisaLink(instrument.address, seconds=seconds, public=public)
        answer = None
        began = time.monotonic()
        try:
            answer = link.ask_block("DATA?") if block else link.ask("A?").encode()
        except (NoAnswer, BadReply, LinkClosed):
            assert link.tainted
        took = time.monotonic() - began
        link.close()
        assert took < 1.0
        if answer is not None:
            assert answer == (honest_block(data) if block else first)
        elif data.endswith(b"\n") and data.count(b"\n") == 1 and data.isascii() and not block:
            raise AssertionError("a whole line was refused")
