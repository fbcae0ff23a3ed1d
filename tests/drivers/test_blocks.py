"""Blocks against IEEE Std 488.2-1992, 8.7.9 and 8.7.10."""

import struct

import numpy as np
import pytest

from pulsetally.drivers.blocks import BlockError, parse_block, parse_header

# Message, payload. The first four are worked examples of public programming manuals or follow
# from the rule; the last three are the rule's own consequences.
BLOCKS = [
    (b"#13ABC", b"ABC"),
    (b"#213" + bytes(range(13)), bytes(range(13))),
    (b"#42000" + bytes(2000), bytes(2000)),
    (b"#501024" + bytes(1024), bytes(1024)),  # leading zeros are legal
    (b"#800000003ABC\n", b"ABC"),  # the line end is no payload
    (b"#10\n", b""),
    (b"#0ABC\n", b"ABC"),
    (b"#13A\nC\n", b"A\nC"),  # a line feed inside is data
]


@pytest.mark.parametrize(("message", "payload"), BLOCKS)
def test_payload_of_a_whole_block(message: bytes, payload: bytes) -> None:
    assert parse_block(message) == payload


@pytest.mark.parametrize(("message", "payload"), BLOCKS)
def test_header_asks_for_more_until_it_is_whole(message: bytes, payload: bytes) -> None:
    whole = parse_header(message, limit=10_000)
    assert whole is not None
    for length in range(whole.header_bytes):
        assert parse_header(message[:length], limit=10_000) is None
    assert parse_header(message[: whole.header_bytes], limit=10_000) == whole


@pytest.mark.parametrize(
    ("message", "words"),
    [
        (b"#15ABC\n", "announces 5 bytes, 4 came"),
        (b"noise#13ABC", "begins with '#'"),
        (b"#1", "cut"),
        (b"#A3ABC", "one digit"),
        (b"#2x3ABC", "digits"),
        (b"#13ABCD", "follow the block"),
        (b"#9999999999", "at most"),
    ],
)
def test_faulty_blocks_are_refused(message: bytes, words: str) -> None:
    with pytest.raises(BlockError, match=words):
        parse_block(message)


def test_a_length_of_gigabytes_is_refused_before_anything_is_allocated() -> None:
    with pytest.raises(BlockError, match="400000000 bytes"):
        parse_header(b"#94000000000"[:2] + b"400000000", limit=1 << 28)


# The same four numbers in three sample formats; closed form.
def test_samples_of_both_byte_orders() -> None:
    expected = [1, 32767, -32768, -1]
    little = parse_block(b"#18" + bytes.fromhex("0100ff7f0080ffff"))
    big = parse_block(b"#18" + bytes.fromhex("00017fff8000ffff"))
    assert np.frombuffer(little, "<i2").tolist() == expected
    assert np.frombuffer(big, ">i2").tolist() == expected
    reals = parse_block(b"#18" + bytes.fromhex("0000803f000000c0"))
    assert struct.unpack("<2f", reals) == (1.0, -2.0)
