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

    def ask_block(self, command: str) -> bytes:
        """Send one query; return the payload of the block that answers it."""


class VisaLink:
    """Speak with one instrument over PyVISA."""

    def __init__(self, address: str, *, seconds: float = 5.0, backend: str = "@py") -> None:
        self._address, self._seconds, self._backend = address, seconds, backend
        self._channel: Channel | None = _open_channel(address, backend)
        self._tainted_by = ""

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
        if self._channel is not None:
            self._channel.close()
            self._channel = None

    def reopen(self) -> None:
        """Open the line anew and clear what the instrument kept of the old one."""
        self.close()
        self._channel, self._tainted_by = _open_channel(self._address, self._backend), ""
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

    def ask_block(self, command: str) -> bytes:
        """Send one query; return the payload of the block that answers it.

        The block is read by exact count, then the line end that follows it. Raises as ask.
        """
        deadline = time.monotonic() + self._seconds
        channel = self._send(command, deadline)
        try:
            start = channel.read_exactly(2, deadline)
            header = parse_header(start, limit=_BLOCK_LIMIT)
            if header is None:
                start += channel.read_exactly(int(start[1:2]), deadline)
                header = parse_header(start, limit=_BLOCK_LIMIT)
            if header is None or header.payload_bytes is None:
                return channel.read_line(_BLOCK_LIMIT, deadline)
            payload = channel.read_exactly(header.payload_bytes, deadline)
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
            data = command.encode("ascii") + b"\n"
        except UnicodeEncodeError as error:
            raise LinkError(
                self._address, command, "a command is plain ASCII", "mend the dialect"
            ) from error
        try:
            if channel.waiting():
                raise ChannelOverrun("bytes came that nobody asked for")
            channel.send(data, deadline)
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
def _manager(backend: str) -> Any:
    # One per process, and never closed here: closing it closes every session of the process.
    import pyvisa

    return pyvisa.ResourceManager(backend)


def _open_channel(address: str, backend: str) -> Channel:
    from pyvisa import errors, rname

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
        resource = _manager(backend).open_resource(address, open_timeout=3000)
    except (errors.Error, OSError, RuntimeError, ValueError) as error:
        raise LinkError(address, "", f"it can't be opened ({error})", _CHECK_LINE) from error
    except Exception as error:
        # The pyvisa-py backend raises bare Exception when a host does not answer.
        raise LinkError(address, "", f"it can't be opened ({error})", _CHECK_LINE) from error
    connection = _own_socket(resource)
    if connection is None:
        return VisaChannel(resource)
    # The backend takes a refused connection for an open one.
    failure = connection.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
    if failure:
        resource.close()
        raise LinkError(address, "", f"nobody answers there ({os.strerror(failure)})", _CHECK_LINE)
    return SocketChannel(connection, resource.close)


def _own_socket(resource: Any) -> socket.socket | None:
    """Return the socket of a raw socket session, or None where the backend doesn't show it."""
    if not getattr(resource, "resource_name", "").upper().endswith("::SOCKET"):
        return None
    sessions = getattr(resource.visalib, "sessions", None)
    session = sessions.get(resource.session) if isinstance(sessions, dict) else None
    connection = getattr(session, "interface", None)
    return connection if isinstance(connection, socket.socket) else None
