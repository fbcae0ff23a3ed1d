"""Cut a byte stream into program messages, units, headers and data elements.

IEEE Std 488.2 section 7, as it works over a byte stream: a message ends at a newline
that is neither inside a string nor inside a block. A transport with messages of its own
knows a second end, END, which ends whatever has come.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass

from pulsetally.simulators.scpi_blocks import block_payload, element_end, look_for_end
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import read_decimal, read_non_decimal

LONGEST_WORD = 12

# White space of IEEE 488.2: every control character but the newline, and the blank.
_WHITE = bytes(range(0x0A)) + bytes(range(0x0B, 0x21))
_W = rb"[\x00-\x09\x0b-\x20]"
# A string or a block begins only where a data element may: behind white space or a comma.
_DATA_START = rb"(?<=[\x00-\x09\x0b-\x20,])[\"'#]"
_MESSAGE_STOP = re.compile(rb"\n|" + _DATA_START)
_UNIT_STOP = re.compile(rb";|" + _DATA_START)
_HEADER = re.compile(rb"[*:A-Za-z0-9_]*\??")
_HEADER_SHAPE = re.compile(r"(?:\*|:?)[A-Za-z][A-Za-z0-9_]*(?::[A-Za-z][A-Za-z0-9_]*)*\??\Z")
_NUMBER = re.compile(rb"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:%b*[Ee]%b*[+-]?[0-9]+)?" % (_W, _W))
_SUFFIX = re.compile(rb"%b*([A-Za-z/][A-Za-z0-9/.\-]*)" % _W)
_NON_DECIMAL = re.compile(rb"#[A-Za-z][A-Za-z0-9]*")
_WORD = re.compile(rb"[A-Za-z][A-Za-z0-9_]*")
_WHITE_RUN = re.compile(_W + rb"*")
# These begin a data element, so that the blank before them is what is missing (-111).
_DATA_FIRST = b"\"'#(+-.,"


@dataclass(frozen=True, slots=True)
class NumberElement:
    """A number, and its suffix as it was written ('' without one)."""

    value: float
    suffix: str


@dataclass(frozen=True, slots=True)
class WordElement:
    """Character data: a bare word."""

    text: str


@dataclass(frozen=True, slots=True)
class StringElement:
    """What stood between the quotes, doubled quotes made single."""

    text: str


@dataclass(frozen=True, slots=True)
class BlockElement:
    """The payload of an arbitrary block."""

    payload: bytes


@dataclass(frozen=True, slots=True)
class ExpressionElement:
    """An expression with its parentheses."""

    text: str


Element = NumberElement | WordElement | StringElement | BlockElement | ExpressionElement


class MessageReader:
    """Collect bytes and hand out whole program messages.

    limit: most bytes of one message without its newline. A longer one is given up with
    -363, and reading starts again behind the first newline at or beyond the limit.
    """

    def __init__(self, limit: int = 65_536) -> None:
        self._limit = limit
        self._buffer = bytearray()
        # Up to where no message ends; and, in a string that begins there, no string.
        self._scanned = self._looked = 0
        self._skipping = False

    def feed(self, data: bytes) -> list[bytes | ScpiError]:
        """Take newly arrived bytes; return the messages they complete, faults in their place."""
        self._buffer += data
        found: list[bytes | ScpiError] = []
        while True:
            if self._skipping and not self._skip_line():
                return found
            end = self._message_end()
            if (len(self._buffer) if end is None else end) > self._limit:
                found.append(ScpiError(-363))
                del self._buffer[: self._limit]
                self._skipping = True
                continue
            if end is None:
                return found
            found.append(bytes(self._buffer[:end]))
            del self._buffer[: end + 1]
            self._scanned = self._looked = 0

    @property
    def amid_message(self) -> bool:
        """Whether a message has begun and not ended."""
        return bool(self._buffer) or self._skipping

    def end(self) -> bytes | None:
        """End the message where it is; return what came of it, None when nothing is left.

        A message that was given up as too long has been told of already.
        """
        message = None if self._skipping or not self._buffer else bytes(self._buffer)
        self._buffer.clear()
        self._scanned, self._looked, self._skipping = 0, 0, False
        return message

    def _skip_line(self) -> bool:
        newline = self._buffer.find(b"\n")
        del self._buffer[: newline + 1 if newline >= 0 else len(self._buffer)]
        self._scanned = self._looked = 0
        self._skipping = newline < 0
        return newline >= 0

    def _message_end(self) -> int | None:
        while True:
            stop = _MESSAGE_STOP.search(self._buffer, self._scanned)
            if stop is None:
                self._scanned = len(self._buffer)
                return None
            if stop.group() == b"\n":
                return stop.start()
            end, self._looked = look_for_end(
                self._buffer, stop.start(), whole=False, looked=self._looked
            )
            if end is None:
                self._scanned = stop.start()
                return None
            self._scanned, self._looked = end, 0


def split_units(message: bytes) -> Iterator[bytes]:
    """Cut a whole message at the semicolons outside strings and blocks."""
    begin = position = 0
    while True:
        stop = _UNIT_STOP.search(message, position)
        if stop is None:
            yield message[begin:]
            return
        if stop.group() == b";":
            yield message[begin : stop.start()]
            begin = position = stop.end()
            continue
        end = element_end(message, stop.start(), whole=True)
        position = len(message) if end is None else end


def split_header(unit: bytes) -> tuple[str, bytes]:
    """Return a unit's header and what stands behind it; ('', b'') for an empty unit.

    Raises -101 (a character no header has), -111 (data without a blank before it),
    -102 (colons or stars in the wrong place).
    """
    unit = unit.lstrip(_WHITE)
    match = _HEADER.match(unit)
    end = match.end() if match else 0
    header, rest = unit[:end].decode("ascii"), unit[end:]
    if rest and rest[0] not in _WHITE:
        number = -111 if header and rest[0] in _DATA_FIRST else -101
        raise ScpiError(number, unit[:40].decode("latin-1"))
    if header and not _HEADER_SHAPE.match(header):
        raise ScpiError(-102, header[:40])
    return header, rest


def read_elements(data: bytes) -> list[Element]:
    """Read the comma-separated data elements behind a header."""
    position = _skip_white(data, 0)
    elements: list[Element] = []
    if position == len(data):
        return elements
    while True:
        element, position = _read_element(data, position)
        elements.append(element)
        position = _skip_white(data, position)
        if position == len(data):
            return elements
        if data[position] != ord(","):
            raise ScpiError(-103, data[:40].decode("latin-1"))
        position = _skip_white(data, position + 1)


def _skip_white(data: bytes, position: int) -> int:
    match = _WHITE_RUN.match(data, position)
    return match.end() if match else position


def _read_element(data: bytes, start: int) -> tuple[Element, int]:
    first = data[start : start + 1]
    if not first or first == b",":
        raise ScpiError(-109)
    if first in b"+-.0123456789":
        return _read_number(data, start)
    if first.isalpha():
        return _read_word(data, start)
    if first in b"\"'":
        return _read_string(data, start)
    if first == b"#":
        if data[start + 1 : start + 2].isdigit():
            payload, end = block_payload(data, start)
            return BlockElement(payload), end
        match = _NON_DECIMAL.match(data, start)
        if match is None:
            raise ScpiError(-102, "#")
        return NumberElement(read_non_decimal(match.group().decode("ascii")), ""), match.end()
    if first == b"(":
        return _read_expression(data, start)
    raise ScpiError(-101, first.decode("latin-1"))


def _read_number(data: bytes, start: int) -> tuple[NumberElement, int]:
    match = _NUMBER.match(data, start)
    if match is None:
        raise ScpiError(-121, data[start : start + 40].decode("latin-1"))
    value = read_decimal(match.group().translate(None, _WHITE).decode("ascii"))
    suffix = _SUFFIX.match(data, match.end())
    end = suffix.end() if suffix else match.end()
    if end < len(data) and data[end] not in _WHITE and data[end] not in b",:\"'(#":
        raise ScpiError(-121, data[start : start + 40].decode("latin-1"))
    return NumberElement(value, suffix[1].decode("ascii") if suffix else ""), end


def _read_word(data: bytes, start: int) -> tuple[WordElement, int]:
    match = _WORD.match(data, start)
    end = match.end() if match else start
    text = data[start:end].decode("ascii")
    if len(text) > LONGEST_WORD:
        raise ScpiError(-144, text[:40])
    if end < len(data) and data[end] not in _WHITE and data[end] not in b",:\"'(#":
        raise ScpiError(-141, data[start : start + 40].decode("latin-1"))
    return WordElement(text), end


def _read_string(data: bytes, start: int) -> tuple[StringElement, int]:
    end = element_end(data, start, whole=True)
    if end is None:
        raise ScpiError(-151, "no closing quote")
    quote = data[start : start + 1].decode("ascii")
    try:
        text = data[start + 1 : end - 1].decode("ascii")
    except UnicodeDecodeError:
        raise ScpiError(-151, "not seven-bit characters") from None
    return StringElement(text.replace(quote * 2, quote)), end


def _read_expression(data: bytes, start: int) -> tuple[ExpressionElement, int]:
    depth = 0
    for position in range(start, len(data)):
        depth += {ord("("): 1, ord(")"): -1}.get(data[position], 0)
        if depth == 0:
            text = data[start : position + 1].decode("latin-1")
            return ExpressionElement(text), position + 1
    raise ScpiError(-171, "no closing parenthesis")
