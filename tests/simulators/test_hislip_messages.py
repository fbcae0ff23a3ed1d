"""Cutting HiSLIP messages out of a stream, and what rubbish does to a server."""

from collections.abc import Iterator
from itertools import pairwise

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pulsetally.simulators.hislip_messages import (
    BadPrologueError,
    Message,
    MessageCutter,
    Oversized,
    fragments,
)
from pulsetally.simulators.simulate import Addresses, SimulationSettings
from tests.simulators import hislip_wire as hs
from tests.simulators.hislip_wire import Dialogue, Wire, port_of, raw
from tests.simulators.sockets import served

LIMIT = 20
MESSAGES = st.lists(
    st.builds(
        Message,
        type=st.integers(0, 255),
        control=st.integers(0, 255),
        parameter=st.integers(0, 0xFFFFFFFF),
        payload=st.binary(max_size=2 * LIMIT),
    ),
    max_size=6,
)


def cut(pieces: list[bytes]) -> list[Message | Oversized]:
    cutter = MessageCutter(LIMIT)
    found: list[Message | Oversized] = []
    for piece in pieces:
        cutter.feed(piece)
        while (message := cutter.take()) is not None:
            found.append(message)
    return found


def test_the_layout_of_a_message() -> None:
    # IVI-6.1, from memory: 'HS', type, control code, parameter, payload length, payload.
    message = Message(type=7, control=1, parameter=0xFFFFFF02, payload=b"*IDN?\n")
    assert message.encoded() == (
        b"HS\x07\x01\xff\xff\xff\x02\x00\x00\x00\x00\x00\x00\x00\x06*IDN?\n"
    )


@given(MESSAGES, st.lists(st.integers(0, 400)))
def test_any_cut_gives_the_same_messages(messages: list[Message], cuts: list[int]) -> None:
    stream = b"".join(message.encoded() for message in messages)
    edges = [0, *sorted(min(each, len(stream)) for each in cuts), len(stream)]
    assert cut([stream[a:b] for a, b in pairwise(edges)]) == [
        message
        if len(message.payload) <= LIMIT
        else Oversized(type=message.type, payload_bytes=len(message.payload))
        for message in messages
    ]


@given(st.binary())
def test_any_rubbish_gives_messages_or_a_wrong_prologue(rubbish: bytes) -> None:
    try:
        cut([rubbish])
    except BadPrologueError:
        return
    assert rubbish[:2] in (b"", b"H", b"HS")


@given(st.binary(max_size=300), st.integers(17, 60), st.booleans())
def test_fragments_carry_an_answer_whole(answer: bytes, most: int, ends: bool) -> None:
    messages = fragments(answer, message_id=5, most_bytes=most, ends=ends)
    assert b"".join(message.payload for message in messages) == answer
    assert all(len(message.encoded()) <= most for message in messages)
    assert [message.type for message in messages[:-1]] == [hs.DATA] * (len(messages) - 1)
    assert messages[-1].type == (hs.DATA_END if ends else hs.DATA)


@pytest.fixture(autouse=True)
def the_server_never_stumbles(caplog: pytest.LogCaptureFixture) -> Iterator[None]:
    """Fail where an exception got as far as the server's event loop."""
    yield
    told = [*caplog.get_records("setup"), *caplog.get_records("call")]
    assert [record.getMessage() for record in told] == []


@pytest.fixture(scope="module")
def addresses() -> Iterator[Addresses]:
    with served(SimulationSettings(transport="hislip")) as found:
        yield found


@pytest.fixture(scope="module")
def witness(addresses: Addresses) -> Iterator[Dialogue]:
    with Dialogue(addresses.generator) as dialogue:
        yield dialogue


TEXTS = st.sampled_from([b"", b"*CLS\n", b"*ESR?", b"*IDN?\n*OPC?\n", b":X '", b"*ESE #15ab"])
# Locks are left out: they would hold back the witness, as they should.
SENT = st.tuples(
    st.booleans(),
    st.integers(0, 27).filter(lambda kind: kind != hs.ASYNC_LOCK),
    st.integers(0, 3),
    TEXTS,
)


@settings(
    max_examples=40,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(st.lists(SENT, max_size=12), st.binary(max_size=40))
def test_a_client_that_knows_no_order_harms_nobody(
    addresses: Addresses, witness: Dialogue, sent: list[tuple[bool, int, int, bytes]], last: bytes
) -> None:
    with Dialogue(addresses.generator) as wild:
        try:
            for aside, kind, control, payload in sent:
                wire: Wire = wild.aside if aside else wild.sync
                wire.send(raw(kind, control, hs.FIRST_ID, payload))
            wild.sync.send(last)
        except (BrokenPipeError, ConnectionResetError):
            pass  # the session was ended, as it may be
    assert witness.ask("*OPC?") == "1"
    assert port_of(addresses.generator) == witness.port
