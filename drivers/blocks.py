"""Read the headers of IEEE 488.2 arbitrary blocks, without I/O.

A block is '#', one digit d, d digits of length, then that many bytes; or '#0' and bytes up
to the end of the message (IEEE Std 488.2-1992, 8.7.9 and 8.7.10).
"""

from typing import NamedTuple


class BlockError(ValueError):
    """The bytes are not the beginning of a block, or announce more than is allowed."""


class BlockHeader(NamedTuple):
    """Say how long a block is.

    header_bytes: length of the header itself.
    payload_bytes: length of what follows, or None for a block that ends with its message.
    """

    header_bytes: int
    payload_bytes: int | None


def parse_header(start: bytes, *, limit: int) -> BlockHeader | None:
    """Read a block's header from its first bytes; None if more bytes are needed.

    limit: largest payload, in bytes, that is accepted. A length is checked before anybody
    allocates room for it. Raises BlockError when start can't begin a block.
    """
    if not start:
        return None
    if start[:1] != b"#":
        raise BlockError(f"a block begins with '#', not with {start[:16]!r}")
    if len(start) < 2:
        return None
    digit = start[1:2]
    if not digit.isdigit():
        raise BlockError(f"'#' is followed by one digit, not by {digit!r}")
    if digit == b"0":
        return BlockHeader(2, None)
    size = int(digit)
    length = start[2 : 2 + size]
    if not (length == b"" or length.isdigit()):
        raise BlockError(f"the length of a block is {size} digits, not {length!r}")
    if len(length) < size:
        return None
    payload = int(length)
    if payload > limit:
        raise BlockError(f"the header announces {payload} bytes; at most {limit} are accepted")
    return BlockHeader(2 + size, payload)


def parse_block(message: bytes, *, limit: int = 1 << 28) -> bytes:
    """Take the payload out of one whole response message that is a block.

    message: the block with or without the line feed that ends the message.
    Raises BlockError when bytes are missing or something other than a line end follows.
    """
    header = parse_header(message, limit=limit)
    if header is None:
        raise BlockError(f"the header of the block is cut: {message[:16]!r}")
    body = message[header.header_bytes :]
    if header.payload_bytes is None:
        return body.removesuffix(b"\n")
    if len(body) < header.payload_bytes:
        raise BlockError(f"the header announces {header.payload_bytes} bytes, {len(body)} came")
    rest = body[header.payload_bytes :]
    if rest not in (b"", b"\n", b"\r\n"):
        raise BlockError(f"{len(rest)} bytes follow the block: {rest[:16]!r}")
    return body[: header.payload_bytes]
