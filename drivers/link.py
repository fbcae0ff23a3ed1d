"""Write to and ask one instrument by its VISA address.

One owner per link: answers would go to whoever reads first. A link whose answer did not come
in time is tainted, because the answer may still arrive and would be taken for the next one;
it refuses to work until it has been reopened.
"""

import contextlib
import functools
import os
import socket
import threading
import time
from collections.abc import Callable
from typing import Any, Protocol, TypeVar

from pulsetally.drivers.blocks import BlockError, parse_header
from pulsetally.drivers.channel import (
    SLICE_SECONDS,
    Channel,
    ChannelOverrun,
    Pace,
    SocketChannel,
    VisaChannel,
)
from pulsetally.drivers.errors import (
    CHECK_LINE,
    BadReply,
    InstrumentError,
    LinkError,
    from_library,
)
from pulsetally.drivers.lock import AddressLock

_LINE_LIMIT = 65_536
_BLOCK_LIMIT = 1 << 28
_STEADY_LIMIT = 1 << 20
_OPEN_MILLISECONDS = 3000
_FIRST_PAUSE_SECONDS, _LONGEST_PAUSE_SECONDS = 0.1, 5.0

T = TypeVar("T")
Read = Callable[[Channel, Pace], T]
# What takes a whole answer out of the first bytes that came, or None if it isn't just one.
Glance = Callable[[bytes], T | None]
Opener = Callable[[str, bool], Channel]


class Link(Protocol):
    """What a driver needs of a line to an instrument."""

    @property
    def address(self) -> str:
        """Return the VISA address."""

    def write(self, command: str) -> None:
        """Send one program message."""

    def ask(self, command: str) -> str:
        """Send one query; return its answer without the line end."""

    def ask_block(self, command: str, *, line_end: bool = True, header: bool = False) -> bytes:
        """Send one query; return the payload of the block that answers it."""


class VisaLink:
    """Speak with one instrument over PyVISA.

    seconds: how long a whole exchange may take; a block may take longer by its announced
    length over the channel's slowest rate. idle_seconds: longest silence inside an answer, at
    most seconds. ending: what ends a message that is sent. gap_seconds: least pause between
    two messages. public: use PyVISA's public interface even where the session shows its
    socket. exclusive: refuse an address that another process has.

    Threads may share a link: one exchange waits for the other, so that each gets its own
    answer. now, sleep, opener: the clock in seconds, and what opens an address.
    """

    def __init__(
        self,
        address: str,
        *,
        seconds: float = 5.0,
        idle_seconds: float = 3.0,
        ending: str = "\n",
        gap_seconds: float = 0.0,
        public: bool = False,
        exclusive: bool = True,
        now: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
        opener: "Opener | None" = None,
    ) -> None:
        self._address, self._seconds, self._public = address, seconds, public
        self._idle_seconds = min(idle_seconds, seconds)
        self._ending, self._gap, self._free_at = ending.encode("ascii"), gap_seconds, 0.0
        self._now, self._sleep, self._opener = now, sleep, opener or open_channel
        self._exclusive, self._lock = exclusive, AddressLock(address) if exclusive else None
        self._turn = threading.Lock()
        self._channel: Channel | None = None
        self._quick: SocketChannel | None = None
        # The last block question that was answered twice at the same length, and that length;
        # a run asks the same one again and again.
        self._steady = self._seen = ("", 0)
        self._tainted_by = ""
        try:
            self._open()
        finally:
            if self._channel is None:
                self.close()

    @property
    def address(self) -> str:
        """Return the VISA address."""
        return self._address

    @property
    def tainted(self) -> bool:
        """Say whether the link must be reopened before it can be used again."""
        return self._channel is None or bool(self._tainted_by)

    def close(self) -> None:
        """Give the line back; closing twice is harmless."""
        # Not for ever: whoever closes wants it closed.
        mine = self._turn.acquire(timeout=self._seconds)
        try:
            self._drop()
            if self._lock is not None:
                self._lock.release()
                self._lock = None
        finally:
            if mine:
                self._turn.release()

    def _drop(self) -> None:
        if self._channel is not None:
            self._channel.close()
            self._channel = None

    def _open(self) -> None:
        try:
            channel = self._opener(self._address, self._public)
        except InstrumentError:
            raise
        except Exception as error:
            raise from_library(error, self._address, "", opening=True) from error
        self._channel = channel
        roomy = self._idle_seconds > 2 * SLICE_SECONDS and not self._gap
        self._quick = None
        if isinstance(channel, SocketChannel) and channel.can_begin and roomy:
            self._quick = channel

    def reopen(self, patience_seconds: float = 0.0) -> None:
        """Open the line anew and clear what the instrument kept of the old one.

        patience_seconds: how long to try again, after pauses that double from 0.1 to 5 s; the
        last attempt begins no later. Raises what the last attempt raised: LinkError or
        BadReply, and the link stays tainted.
        """
        self._take_turn("reopening")
        try:
            end, pause = self._now() + patience_seconds, _FIRST_PAUSE_SECONDS
            while True:
                try:
                    return self._reopen_once()
                except (LinkError, BadReply):
                    left = end - self._now()
                    if left <= 0:
                        raise
                self._sleep(min(pause, left))
                pause = min(2 * pause, _LONGEST_PAUSE_SECONDS)
        finally:
            self._turn.release()

    def _reopen_once(self) -> None:
        self._drop()
        if self._exclusive and self._lock is None:
            self._lock = AddressLock(self._address)
        self._open()
        self._tainted_by = ""
        # A server may hold half a message from the connection before; the line feed ends it.
        self._exchange("", _nothing)
        self._exchange("*IDN?", _read_text)
        self._exchange("*CLS", _nothing)

    def write(self, command: str) -> None:
        """Send one program message. Raises LinkError."""
        self._run(command, _nothing)

    def ask(self, command: str) -> str:
        """Send one query; return its answer without the line end.

        Raises NoAnswer, LinkClosed or BadReply; after each of them the link is tainted.
        """
        return self._run(command, _read_text, _glance_text)

    def ask_block(self, command: str, *, line_end: bool = True, header: bool = False) -> bytes:
        """Send one query; return the payload of the block that answers it.

        The block is read by exact count. line_end: a line feed follows it, and is read too.
        header: the answer begins with the query's header and a space. Raises as ask.
        """

        def read(channel: Channel, pace: Pace) -> bytes:
            if header:
                _skip_header(channel, command, pace)
            payload = _read_block(channel, pace, line_end=line_end)
            seen = (command, 3 + len(str(len(payload))) + len(payload))
            if seen == self._seen and line_end and not header and seen[1] <= _STEADY_LIMIT:
                self._steady = seen
            self._seen = seen
            return payload

        whole = _glance_block if line_end and not header else None
        return self._run(command, read, whole)

    def _take_turn(self, command: str) -> None:
        if not self._turn.acquire(timeout=self._seconds):
            raise LinkError(
                self._address,
                command,
                f"another thread has used this link for more than {self._seconds:g} s",
                "let one thread speak with one instrument",
            )

    def _run(self, command: str, read: Read[T], glance: "Glance[T] | None" = None) -> T:
        if not self._turn.acquire(False):
            self._take_turn(command)
        try:
            return self._exchange(command, read, glance)
        finally:
            self._turn.release()

    def _exchange(self, command: str, read: Read[T], glance: "Glance[T] | None" = None) -> T:
        channel = self._channel
        if channel is None or self._tainted_by:
            raise LinkError(
                self._address,
                command,
                f"the link can't be used since {self._tainted_by or 'it was closed'!r} failed",
                "reopen it before the next command",
            )
        try:
            data = command.encode("ascii") + self._ending
        except UnicodeEncodeError as error:
            raise LinkError(
                self._address, command, "a command is plain ASCII", "mend the dialect"
            ) from error
        # Until the end, whatever comes between: an interrupt leaves an answer on the line too.
        self._tainted_by = command or "a line end"
        try:
            pace = None
            if glance is not None and self._quick is not None:
                began = time.monotonic()
                expected = self._steady[1] if command == self._steady[0] else 0
                first = self._quick.begin(data, expected)
                if first is not None:
                    result = glance(first)
                    if result is not None:
                        self._tainted_by = ""
                        return result
                    self._quick.put_back(first)
                    self._steady = ("", 0)
                    pace = Pace(self._seconds, self._idle_seconds, began)
                    if first:
                        pace.moved()
            if pace is None:
                if channel.waiting():
                    raise _unasked(channel)
                if self._gap:
                    self._sleep(max(0.0, self._free_at - self._now()))
                pace = Pace(self._seconds, self._idle_seconds)
                channel.send(data, pace)
                if self._gap:
                    self._free_at = self._now() + self._gap
            answer = read(channel, pace)
        except Exception as error:
            raise from_library(error, self._address, command) from error
        self._tainted_by = ""
        return answer


def _read_text(channel: Channel, pace: Pace) -> str:
    line = channel.read_line(_LINE_LIMIT, pace)
    if not line.isascii():
        raise ChannelOverrun(f"{line[:40]!r} is not plain text")
    return line.decode("ascii").removesuffix("\r")


def _glance_text(first: bytes) -> str | None:
    if first.find(b"\n") != len(first) - 1 or not first or not first.isascii():
        return None
    return first[:-1].decode("ascii").removesuffix("\r")


def _glance_block(first: bytes) -> bytes | None:
    if not first or first[0] != 0x23 or first[-1] != 0x0A:
        return None
    begin = first[1] - 0x30 + 2
    digits = first[2:begin]
    if not (digits.isdigit() and 3 <= begin <= 11 and len(first) == begin + int(digits) + 1):
        return None
    return first[begin:-1]


def _nothing(channel: Channel, pace: Pace) -> None:
    """Read nothing: a command has no answer."""


def _unasked(channel: Channel) -> Exception:
    """Say whether bytes wait that nobody asked for, or the other side is gone."""
    try:
        channel.read_exactly(1, Pace(0.001, 0.001))
    except Exception as error:
        return error
    return ChannelOverrun("bytes came that nobody asked for")


def _read_block(channel: Channel, pace: Pace, *, line_end: bool) -> bytes:
    start = channel.read_exactly(2, pace)
    if start[:1] == b"#" and start[1:].isdigit():
        start += channel.read_exactly(int(start[1:]), pace)
    found = parse_header(start, limit=_BLOCK_LIMIT)
    if found is None or found.payload_bytes is None:
        return channel.read_message(_BLOCK_LIMIT, pace)
    pace.allow(found.payload_bytes / channel.slowest)
    payload = channel.read_exactly(found.payload_bytes, pace)
    if not line_end:
        return payload
    after = channel.read_line(_LINE_LIMIT, pace)
    if after not in (b"", b"\r"):
        raise BlockError(f"{len(after)} bytes follow the block: {after[:16]!r}")
    return payload


def _skip_header(channel: Channel, command: str, pace: Pace) -> None:
    header = command.removesuffix("?").lstrip(":").encode("ascii") + b" "
    found = channel.read_exactly(1, pace)
    if found == b":":
        found = channel.read_exactly(1, pace)
    found += channel.read_exactly(len(header) - 1, pace)
    if found.upper() != header.upper():
        raise BlockError(f"it begins with {found!r} instead of {header!r}")


@functools.cache
def manager() -> Any:
    """Return the one resource manager of this process.

    It is never closed: closing it closes every session of the process.
    """
    import pyvisa

    return pyvisa.ResourceManager("@py")


def open_channel(address: str, public: bool) -> Channel:
    """Open any VISA address: raw socket, serial line, HiSLIP, VXI-11 or USB.

    Raises LinkError for what is no address or doesn't answer, and whatever the backend raises.
    """
    from pyvisa import rname

    try:
        rname.ResourceName.from_string(address)
    except rname.InvalidResourceName as error:
        raise LinkError(
            address,
            "",
            "this is not a VISA address",
            "write one such as TCPIP::192.0.2.10::5025::SOCKET or ASRL/dev/ttyUSB0::INSTR",
        ) from error
    resource = manager().open_resource(address, open_timeout=_OPEN_MILLISECONDS)
    try:
        connection = _own_socket(resource)
        if connection is None:
            return VisaChannel(resource)
        # The backend takes a refused connection for an open one.
        failure = connection.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
        if failure:
            reason = f"nobody answers there ({os.strerror(failure)})"
            raise LinkError(address, "", reason, CHECK_LINE)
        # No VISA attribute sets it in this backend; without it, 40 ms for every two messages.
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        if public:
            return VisaChannel(resource)
        return SocketChannel(connection, resource.close)
    except BaseException:
        with contextlib.suppress(Exception):
            resource.close()
        raise


def _own_socket(resource: Any) -> socket.socket | None:
    """Return the socket of a raw socket session, or None where the backend doesn't show it."""
    if not getattr(resource, "resource_name", "").upper().endswith("::SOCKET"):
        return None
    sessions = getattr(resource.visalib, "sessions", None)
    session = sessions.get(resource.session) if isinstance(sessions, dict) else None
    connection = getattr(session, "interface", None)
    return connection if isinstance(connection, socket.socket) else None
