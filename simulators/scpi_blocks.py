"""Write arbitrary blocks, and find where a string or a block in a program message ends.

IEEE Std 488.2: 7.7.5 and 7.7.6 (listening), 8.7.9 and 8.7.10 (talking).
"""

from pulsetally.simulators.scpi_errors import ScpiError

_QUOTES = b"\"'"
_NEWLINE = 0x0A


def definite_block(payload: bytes) -> bytes:
    """Return '#', the number of length digits, the length, then the payload."""
    length = b"%d" % len(payload)
    if len(length) > 9:
        raise ValueError(f"a definite block holds less than 1e9 bytes, not {len(payload)}")
    return b"#%d%s%s" % (len(length), length, payload)


def indefinite_block(payload: bytes) -> bytes:
    """Return '#0' and the payload; only the end of the message ends it."""
    return b"#0" + payload


def element_end(buffer: bytes | bytearray, start: int, *, whole: bool) -> int | None:
    """Return the index behind the string or block that begins at start.

    buffer: what has arrived; whole: nothing more will come. None means that the end
    has not arrived yet, or never will when whole. Where '#' begins no block, or its
    length field is faulty, the index behind the '#' comes back and the reader of the
    element reports the fault.
    """
    return look_for_end(buffer, start, whole=whole)[0]


def look_for_end(
    buffer: bytes | bytearray, start: int, *, whole: bool, looked: int = 0
) -> tuple[int | None, int]:
    """Return what element_end does, and how far this was looked through where that is None.

    looked: what came back when less had arrived, so that a string that comes byte by byte
    is looked through once and not once a byte.
    """
    if buffer[start] in _QUOTES:
        return _string_end(buffer, start, max(start + 1, looked), whole)
    return _block_end(buffer, start, whole), start


def _string_end(
    buffer: bytes | bytearray, start: int, position: int, whole: bool
) -> tuple[int | None, int]:
    quote = buffer[start : start + 1]
    while True:
        closing = buffer.find(quote, position)
        if closing < 0:
            return None, len(buffer)
        if closing + 1 == len(buffer):
            # Only the next byte tells an end from the first half of a doubled quote.
            return (closing + 1 if whole else None), closing
        if buffer[closing + 1] != quote[0]:
            return closing + 1, closing + 1
        position = closing + 2


def _block_end(buffer: bytes | bytearray, start: int, whole: bool) -> int | None:
    if len(buffer) < start + 2:
        return start + 1 if whole else None
    digits = buffer[start + 1] - 0x30
    if not 0 <= digits <= 9:
        return start + 1
    if digits == 0:
        newline = buffer.find(b"\n", start)
        return newline if newline >= 0 else (len(buffer) if whole else None)
    field = bytes(buffer[start + 2 : start + 2 + digits])
    if field and not field.isdigit():
        return start + 1
    if len(field) < digits:
        return start + 1 if whole else None
    end = start + 2 + digits + int(field)
    return end if end <= len(buffer) else None


def block_payload(message: bytes, start: int) -> tuple[bytes, int]:
    """Return the payload of the block at start of a whole message, and the index behind it.

    Raises -161 when the length field is faulty or fewer bytes came than announced.
    """
    end = element_end(message, start, whole=True)
    if end is None:
        raise ScpiError(-161, "fewer bytes than announced")
    if end == start + 1:
        raise ScpiError(-161, "length field")
    header = 2 + message[start + 1] - 0x30
    return message[start + header : end], end
