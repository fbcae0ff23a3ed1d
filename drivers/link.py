"""Write to and ask one instrument by its VISA address.

One owner per link: answers would go to whoever reads first. A link whose answer did not come
in time is tainted, because the answer may still arrive and would be taken for the next one;
it refuses to work until it has been reopened.
"""

import functools
import os
import socket
import time
from typing import Any, Protocol

from pulsetally.drivers.blocks import BlockError, parse_header
from pulsetally.drivers.channel import (
    Channel,
    ChannelClosed,
    ChannelOverrun,
    ChannelTimeout,
    SocketChannel,
    VisaChannel,
)
from pulsetally.drivers.errors import BadReply, LinkClosed, LinkError, NoAnswer
from pulsetally.drivers.lock import AddressLock

_LINE_LIMIT = 65_536
_BLOCK_LIMIT = 1 << 28
_CHECK_LINE = "check that the instrument is on, connected and not in use by another program"


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

    seconds: how long a whole exchange may take. ending: what ends a message that is sent.
    gap_seconds: least pause between two messages. public: use PyVISA's public interface even
    where the session shows its socket. exclusive: refuse an address that another process has.
    """

    def __init__(
        self,
        address: str,
        *,
        seconds: float = 5.0,
        ending: str = "\n",
        gap_seconds: float = 0.0,
        public: bool = False,
        exclusive: bool = True,
    ) -> None:
        self._address, self._seconds, self._public = address, seconds, public
        self._ending, self._gap, self._free_at = ending.encode("ascii"), gap_seconds, 0.0
        self._lock = AddressLock(address) if exclusive else None
        self._channel: Channel | None = None
        self._tainted_by = ""
        try:
            self._channel = _open_channel(address, public=public)
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
        self._drop()
        if self._lock is not None:
            self._lock.release()

    def _drop(self) -> None:
        if self._channel is not None:
            self._channel.close()
            self._channel = None

    def reopen(self) -> None:
        """Open the line anew and clear what the instrument kept of the old one."""
        self._drop()
        self._channel, self._tainted_by = _open_channel(self._address, public=self._public), ""
        # A server may hold half a message from the connection before; the line feed ends it.
        self.write("")
        self.ask("*IDN?")
        self.write("*CLS")

    def write(self, command: str) -> None:
        """Send one program message. Raises LinkError."""
        self._send(command, time.monotonic() + self._seconds)

    def ask(self, command: str) -> str:
        """Send one query; return its answer without the line end.

        Raises NoAnswer, LinkClosed or BadReply; after each of them the link is tainted.
        """
        deadline = time.monotonic() + self._seconds
        channel = self._send(command, deadline)
        try:
            return self._as_text(channel.read_line(_LINE_LIMIT, deadline), command)
        except (ChannelTimeout, ChannelClosed, ChannelOverrun) as error:
            raise self._taint(error, command) from error

    def ask_block(self, command: str, *, line_end: bool = True, header: bool = False) -> bytes:
        """Send one query; return the payload of the block that answers it.

        The block is read by exact count. line_end: a line feed follows it, and is read too.
        header: the answer begins with the query's header and a space. Raises as ask.
        """
        deadline = time.monotonic() + self._seconds
        channel = self._send(command, deadline)
        try:
            if header:
                self._skip_header(channel, command, deadline)
            start = channel.read_exactly(2, deadline)
            found = parse_header(start, limit=_BLOCK_LIMIT)
            if found is None:
                start += channel.read_exactly(int(start[1:2]), deadline)
                found = parse_header(start, limit=_BLOCK_LIMIT)
            if found is None or found.payload_bytes is None:
                return channel.read_line(_BLOCK_LIMIT, deadline)
            payload = channel.read_exactly(found.payload_bytes, deadline)
            if not line_end:
                return payload
            after = channel.read_line(_LINE_LIMIT, deadline)
            if after not in (b"", b"\r"):
                raise BlockError(f"{len(after)} bytes follow the block: {after[:16]!r}")
            return payload
        except BlockError as error:
            self._tainted_by = command
            raise BadReply(
                self._address,
                command,
                f"the answer is not a block: {error}",
                "check that the dialect fits this instrument",
            ) from error
        except (ChannelTimeout, ChannelClosed, ChannelOverrun) as error:
            raise self._taint(error, command) from error

    def _skip_header(self, channel: Channel, command: str, deadline: float) -> None:
        header = command.removesuffix("?").lstrip(":").encode("ascii") + b" "
        found = channel.read_exactly(1, deadline)
        if found == b":":
            found = channel.read_exactly(1, deadline)
        found += channel.read_exactly(len(header) - 1, deadline)
        if found.upper() != header.upper():
            raise BlockError(f"it begins with {found!r} instead of {header!r}")

    def _send(self, command: str, deadline: float) -> Channel:
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
        try:
            if channel.waiting():
                raise ChannelOverrun("bytes came that nobody asked for")
            if self._gap:
                time.sleep(max(0.0, self._free_at - time.monotonic()))
            channel.send(data, deadline)
            self._free_at = time.monotonic() + self._gap
        except (ChannelTimeout, ChannelClosed, ChannelOverrun) as error:
            raise self._taint(error, command) from error
        return channel

    def _taint(self, error: Exception, command: str) -> LinkError | BadReply:
        self._tainted_by = command or "a line end"
        if isinstance(error, ChannelTimeout):
            return NoAnswer(
                self._address, command, f"no answer within {self._seconds:g} s", _CHECK_LINE
            )
        if isinstance(error, ChannelClosed):
            return LinkClosed(self._address, command, f"the line is gone ({error})", _CHECK_LINE)
        return BadReply(
            self._address, command, str(error), "check that the dialect fits this instrument"
        )

    def _as_text(self, line: bytes, command: str) -> str:
        try:
            return line.decode("ascii").removesuffix("\r")
        except UnicodeDecodeError as error:
            self._tainted_by = command
            raise BadReply(
                self._address,
                command,
                f"the answer {line[:40]!r} is not plain text",
                "check that a SCPI instrument is at this address",
            ) from error


@functools.cache
def manager() -> Any:
    """Return the one resource manager of this process.

    It is never closed: closing it closes every session of the process.
    """
    import pyvisa

    return pyvisa.ResourceManager("@py")


def _open_channel(address: str, *, public: bool) -> Channel:
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
    try:
        resource = manager().open_resource(address, open_timeout=3000)
    except Exception as error:
        # The backend raises its own errors, its libraries' and bare Exception. A word such as
        # 'No module named usb' among them says what a kind of line needs.
        reason = " ".join(str(error).split())[:300] or type(error).__name__
        raise LinkError(address, "", f"it can't be opened ({reason})", _CHECK_LINE) from error
    connection = _own_socket(resource)
    if connection is None:
        return VisaChannel(resource)
    # The backend takes a refused connection for an open one.
    failure = connection.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
    if failure:
        resource.close()
        reason = f"nobody answers there ({os.strerror(failure)})"
        raise LinkError(address, "", reason, _CHECK_LINE)
    if public:
        return VisaChannel(resource)
    return SocketChannel(connection, resource.close)


def _own_socket(resource: Any) -> socket.socket | None:
    """Return the socket of a raw socket session, or None where the backend doesn't show it."""
    if not getattr(resource, "resource_name", "").upper().endswith("::SOCKET"):
        return None
    sessions = getattr(resource.visalib, "sessions", None)
    session = sessions.get(resource.session) if isinstance(sessions, dict) else None
    connection = getattr(session, "interface", None)
    return connection if isinstance(connection, socket.socket) else None
