"""Move bytes between the program and one instrument, each read bounded in time and size.

Two channels do the same: one on the session's own socket, one on PyVISA's public interface
for every other kind of line. Both know line ends and exact counts, and nothing else.
"""

import contextlib
import select
import socket
import time
from typing import Any, Protocol


class ChannelTimeout(Exception):  # noqa: N818 - it says what happened
    """Nothing came, or nothing could be sent, before the deadline."""


class ChannelClosed(Exception):  # noqa: N818 - it says what happened
    """The other side is gone."""


class ChannelOverrun(Exception):  # noqa: N818 - it says what happened
    """More bytes came than were allowed."""


class Channel(Protocol):
    """Send bytes, and read a line or an exact number of bytes. Deadlines are time.monotonic."""

    def send(self, data: bytes, deadline: float) -> None:
        """Send all of data."""

    def read_line(self, limit: int, deadline: float) -> bytes:
        """Read up to and without the next line feed, at most limit bytes."""

    def read_exactly(self, count: int, deadline: float) -> bytes:
        """Read count bytes, whatever they are."""

    def waiting(self) -> bool:
        """Say whether bytes that nobody asked for are there, or the other side is gone."""

    def close(self) -> None:
        """Give the line back; never raises."""


def _left(deadline: float) -> float:
    left = deadline - time.monotonic()
    if left <= 0:
        raise ChannelTimeout
    return left


class SocketChannel:
    """Read and write the socket of a raw socket session directly.

    Through the library's own calls a block costs several times as much, and a peer that
    closes is noticed only at the time-out.
    """

    _chunk = 65_536

    def __init__(self, connection: socket.socket, close: Any) -> None:
        self._socket, self._close = connection, close
        self._pending = bytearray()
        # Without it, a command followed by a query waits 40 ms for the other side's receipt.
        connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        # Routers drop idle connections; a night has pauses.
        connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)

    def send(self, data: bytes, deadline: float) -> None:
        """Send all of data."""
        self._socket.settimeout(_left(deadline))
        try:
            self._socket.sendall(data)
        except TimeoutError as error:
            raise ChannelTimeout from error
        except OSError as error:
            raise ChannelClosed(str(error)) from error

    def _receive_into(self, room: memoryview, deadline: float) -> int:
        self._socket.settimeout(_left(deadline))
        try:
            count = self._socket.recv_into(room)
        except TimeoutError as error:
            raise ChannelTimeout from error
        except OSError as error:
            raise ChannelClosed(str(error)) from error
        if count == 0:
            raise ChannelClosed("the connection was closed")
        return count

    def _receive(self, deadline: float) -> None:
        chunk = bytearray(self._chunk)
        count = self._receive_into(memoryview(chunk), deadline)
        self._pending += memoryview(chunk)[:count]

    def read_line(self, limit: int, deadline: float) -> bytes:
        """Read up to and without the next line feed, at most limit bytes."""
        searched = 0
        while (end := self._pending.find(b"\n", searched)) < 0:
            searched = len(self._pending)
            if searched > limit:
                raise ChannelOverrun(f"{searched} bytes came without a line end")
            self._receive(deadline)
        line = bytes(self._pending[:end])
        del self._pending[: end + 1]
        return line

    def read_exactly(self, count: int, deadline: float) -> bytes:
        """Read count bytes, whatever they are."""
        if len(self._pending) >= count:
            data = bytes(self._pending[:count])
            del self._pending[:count]
            return data
        if count < self._chunk:
            # A short read, such as a header: take what else has arrived along with it.
            self._receive(deadline)
            return self.read_exactly(count, deadline)
        whole = bytearray(count)
        room = memoryview(whole)
        filled = len(self._pending)
        room[:filled] = self._pending
        self._pending.clear()
        while filled < count:
            filled += self._receive_into(room[filled:], deadline)
        return bytes(whole)

    def waiting(self) -> bool:
        """Say whether bytes that nobody asked for are there, or the other side is gone."""
        return bool(self._pending) or bool(select.select([self._socket], [], [], 0)[0])

    def close(self) -> None:
        """Give the line back; never raises."""
        with contextlib.suppress(Exception):
            self._close()


class VisaChannel:
    """Read and write through PyVISA's public interface: serial lines, HiSLIP, VXI-11."""

    def __init__(self, resource: Any) -> None:
        self._resource = resource
        # An answer that is an exact multiple of the chunk size times out on VXI-11.
        resource.chunk_size = 1 << 20 | 1
        name = str(getattr(resource, "resource_name", "")).upper()
        self._serial = name.startswith("ASRL")
        if self._serial:
            from pyvisa import constants

            # XON and XOFF are bytes of a block too.
            resource.flow_control = constants.ControlFlow.none
            resource.flush(constants.BufferOperation.discard_read_buffer)

    def _prepare(self, deadline: float, *, line: bool) -> None:
        resource = self._resource
        resource.timeout = max(1, int(_left(deadline) * 1000))
        # With the termination character on, a block is read byte by byte at every 0x0A in it.
        resource.read_termination = "\n" if line else None
        if self._serial:
            from pyvisa import constants

            # A serial line has a second notion of where input ends.
            ends = constants.SerialTermination
            resource.end_input = ends.termination_char if line else ends.none

    def _translate(self, error: Exception) -> Exception:
        from pyvisa import constants, errors

        if (
            isinstance(error, errors.VisaIOError)
            and error.error_code == constants.StatusCode.error_timeout
        ):
            return ChannelTimeout()
        return ChannelClosed(f"{type(error).__name__}: {error}")

    def send(self, data: bytes, deadline: float) -> None:
        """Send all of data."""
        self._prepare(deadline, line=False)
        try:
            self._resource.write_raw(data)
        except Exception as error:  # the backends raise whatever their sockets raise
            raise self._translate(error) from error

    def read_line(self, limit: int, deadline: float) -> bytes:
        """Read up to and without the next line feed, at most limit bytes."""
        self._prepare(deadline, line=True)
        try:
            line = bytes(self._resource.read_raw(limit + 1))
        except Exception as error:
            raise self._translate(error) from error
        if not line.endswith(b"\n") and len(line) > limit:
            raise ChannelOverrun(f"{len(line)} bytes came without a line end")
        return line.removesuffix(b"\n")

    def read_exactly(self, count: int, deadline: float) -> bytes:
        """Read count bytes, whatever they are."""
        self._prepare(deadline, line=False)
        try:
            return bytes(self._resource.read_bytes(count, break_on_termchar=False))
        except Exception as error:
            raise self._translate(error) from error

    def waiting(self) -> bool:
        """Say that nothing is known to wait: the public interface can't tell without reading."""
        return False

    def close(self) -> None:
        """Give the line back; never raises."""
        with contextlib.suppress(Exception):
            self._resource.close()
