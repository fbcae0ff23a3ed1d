"""Arbitrary blocks: IEEE 488.2 7.7.6, 8.7.9 and 8.7.10 (BLK rows of the reference values)."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.scpi_blocks import block_payload, definite_block, indefinite_block
from pulsetally.simulators.scpi_errors import ScpiError

# message, header length, payload; without the newline, which ends the message.
BLOCKS = [
    (b"#13ABC", 3, b"ABC"),  # BLK-1
    (b"#213" + b"0123456789abc", 4, b"0123456789abc"),  # BLK-2
    (b"#42000" + bytes(2000), 6, bytes(2000)),  # BLK-3
    (b"#501024" + b"\xff" * 1024, 7, b"\xff" * 1024),  # BLK-4: leading zeros are legal
    (b"#800000003ABC", 10, b"ABC"),  # BLK-5
    (b"#10", 3, b""),  # BLK-6
    (b"#0ABC", 2, b"ABC"),  # BLK-7
    (b"#13A\nC", 3, b"A\nC"),  # BLK-9
]


@pytest.mark.parametrize(("message", "header", "payload"), BLOCKS)
def test_blocks_are_read(message: bytes, header: int, payload: bytes) -> None:
    assert block_payload(message, 0) == (payload, header + len(payload))


@pytest.mark.parametrize("message", [b"#15ABC", b"#1", b"#2", b"#21", b"#1x", b"#2-5", b"#"])
def test_faulty_blocks_are_refused(message: bytes) -> None:  # BLK-8, BLK-15
    with pytest.raises(ScpiError) as caught:
        block_payload(message, 0)
    assert caught.value.number == -161


def test_two_thousand_bytes_have_a_six_byte_header() -> None:  # BLK-13
    assert definite_block(bytes(2000))[:6] == b"#42000"


def test_a_block_of_a_thousand_million_bytes_is_refused() -> None:
    class Huge(bytes):
        def __len__(self) -> int:
            return 10**9

    with pytest.raises(ValueError, match="1e9"):
        definite_block(Huge())


@given(st.binary(max_size=2000))
def test_definite_blocks_come_back(payload: bytes) -> None:
    block = definite_block(payload)
    assert block_payload(block, 0) == (payload, len(block))


@given(st.binary(max_size=200).filter(lambda data: b"\n" not in data))
def test_indefinite_blocks_come_back(payload: bytes) -> None:
    block = indefinite_block(payload)
    assert block_payload(block, 0) == (payload, len(block))
