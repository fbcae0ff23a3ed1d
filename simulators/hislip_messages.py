"""Write HiSLIP messages and cut them out of a byte stream, without doing I/O.

HiSLIP is the open specification IVI-6.1; numbers, names and layouts here are from memory of
its revision 1.1 (protocol version 1.0). A message is a header of 16 bytes, most significant
byte first, and a payload: the prologue "HS", type, control code, four bytes of parameter,
eight bytes of payload length.
"""

import struct
from dataclasses import dataclass
from enum import Enum, IntEnum

PROLOGUE = b"HS"
_HEADER = struct.Struct("!2sBBIQ")
HEADER_BYTES = _HEADER.size
# What a message may be at most while the two sides have not agreed on more, header included.
FIRST_MESSAGE_BYTES = 272
FIRST_MESSAGE_ID = 0xFFFFFF00
FIRST_VENDOR_TYPE = 128


class MessageType(IntEnum):
    """What a message is."""

    INITIALIZE = 0
    INITIALIZE_RESPONSE = 1
    FATAL_ERROR = 2
    ERROR = 3
    ASYNC_LOCK = 4
    ASYNC_LOCK_RESPONSE = 5
    DATA = 6
    DATA_END = 7
    DEVICE_CLEAR_COMPLETE = 8
    DEVICE_CLEAR_ACKNOWLEDGE = 9
    ASYNC_REMOTE_LOCAL_CONTROL = 10
    ASYNC_REMOTE_LOCAL_RESPONSE = 11
    TRIGGER = 12
    INTERRUPTED = 13
    ASYNC_INTERRUPTED = 14
    ASYNC_MAXIMUM_MESSAGE_SIZE = 15
    ASYNC_MAXIMUM_MESSAGE_SIZE_RESPONSE = 16
    ASYNC_INITIALIZE = 17
    ASYNC_INITIALIZE_RESPONSE = 18
    ASYNC_DEVICE_CLEAR = 19
    ASYNC_SERVICE_REQUEST = 20
    ASYNC_STATUS_QUERY = 21
    ASYNC_STATUS_RESPONSE = 22
    ASYNC_DEVICE_CLEAR_ACKNOWLEDGE = 23
    ASYNC_LOCK_INFO = 24
    ASYNC_LOCK_INFO_RESPONSE = 25


class FatalCode(IntEnum):
    """Control code of FatalError: why the connection ends."""

    UNIDENTIFIED = 0
    BAD_HEADER = 1
    CHANNELS_MISSING = 2
    BAD_INITIALIZATION = 3
    TOO_MANY_CLIENTS = 4


class ErrorCode(IntEnum):
    """Control code of Error: why a message was left out."""

    UNIDENTIFIED = 0
    UNKNOWN_TYPE = 1
    UNKNOWN_CONTROL_CODE = 2
    UNKNOWN_VENDOR_TYPE = 3
    TOO_LARGE = 4


class Channel(Enum):
    """The two connections of a session."""

    SYNCHRONOUS = "synchronous"
    ASYNCHRONOUS = "asynchronous"


@dataclass(frozen=True, slots=True, kw_only=True)
class Message:
    """One message. type: a MessageType where it is a known one."""

    type: int
    control: int = 0
    parameter: int = 0
    payload: bytes = b""

    def encoded(self) -> bytes:
        """Return the bytes that carry it."""
        header = _HEADER.pack(PROLOGUE, self.type, self.control, self.parameter, len(self.payload))
        return header + self.payload


@dataclass(frozen=True, slots=True, kw_only=True)
class Oversized:
    """A message whose payload was announced as more than the limit, and is left out."""

    type: int
    payload_bytes: int


class BadPrologueError(Exception):
    """A header does not begin with 'HS'; what follows may mean anything."""


class MessageCutter:
    """Collect bytes and hand out whole messages.

    limit: most payload bytes of one message; may be changed between two messages. The
    payload of an oversized one is dropped as it comes, so that it never fills the memory.
    """

    def __init__(self, limit: int) -> None:
        self.limit = limit
        self._buffer = bytearray()
        self._to_drop = 0

    def feed(self, data: bytes) -> None:
        """Take newly arrived bytes."""
        dropped = min(self._to_drop, len(data))
        self._to_drop -= dropped
        self._buffer += memoryview(data)[dropped:]

    def take(self) -> Message | Oversized | None:
        """Return the next message, None when it is not all there. Raises BadPrologueError."""
        buffer = self._buffer
        # Told as soon as it is wrong: whoever speaks another protocol may wait for a word.
        start = bytes(buffer[: len(PROLOGUE)])
        if not PROLOGUE.startswith(start):
            raise BadPrologueError(f"a header begins with {PROLOGUE!r}, not with {start!r}")
        if len(buffer) < HEADER_BYTES:
            return None
        _, kind, control, parameter, length = _HEADER.unpack_from(buffer)
        if length > self.limit:
            here = min(length, len(buffer) - HEADER_BYTES)
            del buffer[: HEADER_BYTES + here]
            self._to_drop = length - here
            return Oversized(type=kind, payload_bytes=length)
        end = HEADER_BYTES + length
        if len(buffer) < end:
            return None
        payload = bytes(buffer[HEADER_BYTES:end])
        del buffer[:end]
        return Message(type=kind, control=control, parameter=parameter, payload=payload)


@dataclass(frozen=True, slots=True, kw_only=True)
class Accepted:
    """Where a client may send a type of message, and with which control codes."""

    channels: frozenset[Channel]
    controls: range


_SYNCHRONOUS = frozenset({Channel.SYNCHRONOUS})
_ASYNCHRONOUS = frozenset({Channel.ASYNCHRONOUS})
_ANY = range(256)

# Initialize comes first on a connection and AsyncInitialize likewise; what follows them:
ACCEPTED: dict[int, Accepted] = {
    MessageType.FATAL_ERROR: Accepted(channels=_SYNCHRONOUS | _ASYNCHRONOUS, controls=_ANY),
    MessageType.ERROR: Accepted(channels=_SYNCHRONOUS | _ASYNCHRONOUS, controls=_ANY),
    # Bit 0: the end of the last answer has been delivered to whoever asked (RMT-delivered).
    MessageType.DATA: Accepted(channels=_SYNCHRONOUS, controls=range(2)),
    MessageType.DATA_END: Accepted(channels=_SYNCHRONOUS, controls=range(2)),
    MessageType.TRIGGER: Accepted(channels=_SYNCHRONOUS, controls=range(2)),
    # Bit 0: the client would like overlap mode.
    MessageType.DEVICE_CLEAR_COMPLETE: Accepted(channels=_SYNCHRONOUS, controls=range(2)),
    # 0: release, 1: request.
    MessageType.ASYNC_LOCK: Accepted(channels=_ASYNCHRONOUS, controls=range(2)),
    MessageType.ASYNC_LOCK_INFO: Accepted(channels=_ASYNCHRONOUS, controls=range(1)),
    MessageType.ASYNC_REMOTE_LOCAL_CONTROL: Accepted(channels=_ASYNCHRONOUS, controls=range(7)),
    MessageType.ASYNC_MAXIMUM_MESSAGE_SIZE: Accepted(channels=_ASYNCHRONOUS, controls=range(1)),
    MessageType.ASYNC_DEVICE_CLEAR: Accepted(channels=_ASYNCHRONOUS, controls=range(1)),
    MessageType.ASYNC_STATUS_QUERY: Accepted(channels=_ASYNCHRONOUS, controls=range(2)),
}


def complaint(message: Message | Oversized, channel: Channel, limit: int) -> Message | None:
    """Return the Error that answers a message which can't be followed; None if it can be.

    limit: the channel's most payload bytes, for the text.
    """
    kind = message.type
    if kind >= FIRST_VENDOR_TYPE:
        return error(ErrorCode.UNKNOWN_VENDOR_TYPE, f"no vendor's message {kind} is known here")
    accepted = ACCEPTED.get(kind)
    if accepted is None:
        return error(ErrorCode.UNKNOWN_TYPE, f"a client can't send message type {kind} here")
    if channel not in accepted.channels:
        return error(
            ErrorCode.UNKNOWN_TYPE,
            f"message type {kind} does not belong on the {channel.value} channel",
        )
    if isinstance(message, Oversized):
        return error(
            ErrorCode.TOO_LARGE,
            f"a payload of {message.payload_bytes} bytes was left out; "
            f"the {channel.value} channel takes {limit}",
        )
    if message.control not in accepted.controls:
        return error(
            ErrorCode.UNKNOWN_CONTROL_CODE,
            f"message type {kind} has no control code {message.control}; "
            f"write one from 0 to {accepted.controls[-1]}",
        )
    return None


def error(code: ErrorCode, text: str) -> Message:
    """Return an Error message: one message was left out, the session goes on."""
    return Message(type=MessageType.ERROR, control=code, payload=text.encode("ascii", "replace"))


def fatal(code: FatalCode, text: str) -> Message:
    """Return a FatalError message: the session ends."""
    return Message(
        type=MessageType.FATAL_ERROR, control=code, payload=text.encode("ascii", "replace")
    )


def fragments(answer: bytes, *, message_id: int, most_bytes: int, ends: bool) -> list[Message]:
    """Cut an answer into Data messages of at most most_bytes each, their headers included.

    message_id: of the client's message that is answered. ends: the last one is a DataEnd.
    """
    room = most_bytes - HEADER_BYTES
    pieces = [answer[begin : begin + room] for begin in range(0, len(answer), room)] or [b""]
    return [
        Message(
            type=MessageType.DATA_END if ends and index == len(pieces) - 1 else MessageType.DATA,
            parameter=message_id,
            payload=piece,
        )
        for index, piece in enumerate(pieces)
    ]
