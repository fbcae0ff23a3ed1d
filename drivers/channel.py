"""Move bytes between the program and one instrument, each read bounded in time and size.

Two channels do the same: one on the session's own socket, one on PyVISA's public interface
for every other kind of line. Both know line ends and exact counts, and nothing else. What a
library raises passes through them; errors.py says what it means.
"""

import abc
import contextlib
import select
import socket
import struct
import sys
import time
from collections.abc import Callable
from typing import Any, Protocol


class ChannelTimeout(Exception):
    """Nothing came, or nothing could be sent, before the deadline."""


class ChannelClosed(Exception):
    """The other side is gone."""


class ChannelOverrun(Exception):
    """Other bytes came than were allowed: more, or fewer before their message ended."""


# How long a read may wait in the system before it looks at its own deadlines.
SLICE_SECONDS = 0.05


class Pace:
    """Say how much longer to wait: two deadlines on the monotonic clock.

    seconds: the total, also for the first byte. idle_seconds: the longest silence after a byte
    has come, so that a transfer that died is noticed long before the total of a large one.
    began: where the total starts, in seconds of time.monotonic; now if not given.
    """

    __slots__ = ("_end", "_idle", "_quiet_end", "_seconds")

    def __init__(self, seconds: float, idle_seconds: float, began: float | None = None) -> None:
        self._end = self._quiet_end = (time.monotonic() if began is None else began) + seconds
        self._seconds, self._idle = seconds, idle_seconds

    def allow(self, seconds: float) -> None:
        """Make the total longer, for an answer that has said how long it is."""
        self._end += seconds
        self._seconds += seconds

    def moved(self) -> None:
        """Note that bytes came just now. Raises ChannelTimeout when the total is over."""
        now = time.monotonic()
        if now >= self._end:
            raise ChannelTimeout(f"no answer within {self._seconds:g} s")
        self._quiet_end = now + self._idle

    def left(self) -> float:
        """Return the seconds until the nearer deadline. Raises ChannelTimeout at its end."""
        now = time.monotonic()
        if now >= self._end:
            raise ChannelTimeout(f"no answer within {self._seconds:g} s")
        if now >= self._quiet_end:
            raise ChannelTimeout(f"the answer stopped: no byte for {self._idle:g} s")
        return min(self._end, self._quiet_end) - now


class Channel(Protocol):
    """Send bytes, and read a line, a message or an exact number of bytes."""

    @property
    def slowest(self) -> float:
        """Return the rate, in bytes per second, below which a transfer isn't worth waiting for."""

    def send(self, data: bytes, pace: Pace) -> None:
        """Send all of data."""

    def read_line(self, limit: int, pace: Pace) -> bytes:
        """Read up to and without the next line feed, at most limit bytes."""

    def read_message(self, limit: int, pace: Pace) -> bytes:
        """Read up to the end of the message, without its line feed; it may hold others."""

    def read_exactly(self, count: int, pace: Pace) -> bytes:
        """Read count bytes, whatever they are."""

    def waiting(self) -> bool:
        """Say whether bytes that nobody asked for are there, or the other side is gone."""

    def close(self) -> None:
        """Give the line back; never raises."""


# A network at its worst; with it, 10 MB may take 8 minutes as long as bytes keep coming.
_SLOWEST = 20_000.0
# A stream doesn't show where a message ends; after a line feed and this silence it has.
_QUIET_SECONDS = 0.05


class _Buffered(abc.ABC):
    """Cut lines, messages and exact counts out of the bytes that _fetch takes in.

    They lie in one piece of memory that is used again and again: fresh memory for every
    answer costs more than the copy.
    """

    slowest = _SLOWEST

    def __init__(self) -> None:
        self._bytes = bytearray(1 << 20)
        self._room = memoryview(self._bytes)
        self._start = self._stop = 0
        # Whether the last fetch came to an end that the line itself marks, as only some do.
        self._ended = False

    @abc.abstractmethod
    def _fetch(self, most: int, pace: Pace, *, line: bool = False) -> None:
        """Take in what comes, at least one byte."""

    def _free(self, least: int) -> memoryview:
        """Return room behind the pending bytes."""
        start, stop = self._start, self._stop
        if start == stop:
            self._start = self._stop = 0
        elif len(self._bytes) - stop < least:
            pending = bytes(self._room[start:stop])
            if len(self._bytes) < len(pending) + least:
                self._bytes = bytearray(2 * (len(pending) + least))
                self._room = memoryview(self._bytes)
            self._room[: len(pending)] = pending
            self._start, self._stop = 0, len(pending)
        return self._room[self._stop :] if self._stop else self._room

    def _take_in(self, data: bytes) -> None:
        self._free(len(data))[: len(data)] = data
        self._stop += len(data)

    def _cut(self, count: int, skip: int = 0) -> bytes:
        start = self._start
        self._start = start + count + skip
        return bytes(self._room[start : start + count])

    def read_line(self, limit: int, pace: Pace) -> bytes:
        """Read up to and without the next line feed, at most limit bytes."""
        searched = 0
        while (end := self._bytes.find(b"\n", self._start + searched, self._stop)) < 0:
            searched = self._stop - self._start
            if searched > limit:
                raise ChannelOverrun(f"{searched} bytes came without a line end")
            if searched and self._ended:
                return self._cut(searched)
            self._fetch(limit + 2 - searched, pace, line=True)
        length = end - self._start
        if length > limit:
            raise ChannelOverrun(f"a line of {length} bytes came; at most {limit} are accepted")
        return self._cut(length, skip=1)

    def read_message(self, limit: int, pace: Pace) -> bytes:
        """Read up to the end of the message, without its line feed; it may hold others."""
        while not self._ended:
            wait = pace
            if self._stop > self._start and self._bytes[self._stop - 1] == 0x0A:
                wait = Pace(_QUIET_SECONDS, _QUIET_SECONDS)
            try:
                self._fetch(limit + 2 - (self._stop - self._start), wait, line=True)
            except ChannelTimeout:
                if wait is pace:
                    raise
                break
            pace.moved()
            if self._stop - self._start > limit + 1:
                raise ChannelOverrun(f"more than {limit} bytes came without an end")
        return self._cut(self._stop - self._start).removesuffix(b"\n")

    def read_exactly(self, count: int, pace: Pace) -> bytes:
        """Read count bytes, whatever they are."""
        while (missing := count - (self._stop - self._start)) > 0:
            if count > len(self._bytes) - self._start:
                self._free(count)
            self._fetch(missing, pace)
        return self._cut(count)


_NOT_WAITING = getattr(socket, "MSG_DONTWAIT", 0)
_WAIT_FOR_ALL = getattr(socket, "MSG_WAITALL", 0)
# A first read of no more, since whoever reads while the other side writes slows both down.
_FIRST_BYTES = 4096
_LARGE = 1 << 14


class SocketChannel(_Buffered):
    """Read and write the socket of a raw socket session directly.

    Through the library's own calls a block costs several times as much, and a peer that
    closes is noticed only at the time-out.
    """

    def __init__(self, connection: socket.socket, close: Callable[[], object]) -> None:
        super().__init__()
        self._socket, self._close = connection, close
        # Routers drop idle connections, some after five minutes; a night has pauses.
        connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
        for option in ("TCP_KEEPIDLE", "TCP_KEEPINTVL"):
            if hasattr(socket, option):
                connection.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), 60)
        # One wait inside the read itself is a tenth quicker than a wait and then a read.
        self._waits_inside = sys.platform == "linux"
        connection.setblocking(self._waits_inside)
        if self._waits_inside:
            wait = struct.pack("@ll", 0, round(SLICE_SECONDS * 1e6))
            connection.setsockopt(socket.SOL_SOCKET, socket.SO_RCVTIMEO, wait)
        self._readable = _waiter(connection, for_writing=False)
        # The quickest look there is; a call more or less shows in the time of an exchange.
        self._poll: Callable[[float], object] = self._readable
        if sys.platform != "win32":
            poll = select.poll()
            poll.register(connection, select.POLLIN)
            self._poll = poll.poll
        self._writable = _waiter(connection, for_writing=True)

    @property
    def can_begin(self) -> bool:
        """Say whether begin can wait inside the system, with a limit."""
        return self._waits_inside

    def begin(self, data: bytes, expected: int = 0) -> bytes | None:
        """Send data and return what comes first within one slice, without looking at a clock.

        expected: length of the whole answer, if that is known; then all of it is waited for.
        Most exchanges end with that. Returns None if nothing was done, since bytes wait that
        nobody asked for or no more can be sent; no bytes if nothing came.
        """
        if self._start != self._stop or self._poll(0):
            return None
        try:
            sent = self._socket.send(data, _NOT_WAITING)
        except BlockingIOError:
            return None
        if sent < len(data):
            raise ChannelTimeout("the other side takes no more bytes")
        try:
            if expected > _FIRST_BYTES:
                first = self._socket.recv(expected, _WAIT_FOR_ALL)
            else:
                first = self._socket.recv(_FIRST_BYTES)
        except BlockingIOError:
            return b""
        if not first:
            raise ChannelClosed("the other side closed the connection")
        return first

    def put_back(self, data: bytes) -> None:
        """Keep bytes that begin returned for the next read."""
        self._take_in(data)

    def send(self, data: bytes, pace: Pace) -> None:
        """Send all of data."""
        try:
            sent = self._socket.send(data, _NOT_WAITING)
        except BlockingIOError:
            sent = 0
        while sent < len(data):
            if self._writable(pace.left()):
                with contextlib.suppress(BlockingIOError):
                    sent += self._socket.send(data[sent:], _NOT_WAITING)

    def _fetch(self, most: int, pace: Pace, *, line: bool = False) -> None:
        # More than was asked for, since a header's block may have arrived along with it.
        room = self._free(4096)
        count = -1
        if self._waits_inside and pace.left() > SLICE_SECONDS:
            try:
                count = self._socket.recv_into(room)
            except BlockingIOError:
                count = -1
        while count < 0:
            if self._readable(pace.left()):
                with contextlib.suppress(BlockingIOError):
                    count = self._socket.recv_into(room, 0, _NOT_WAITING)
        if count == 0:
            raise ChannelClosed("the other side closed the connection")
        self._stop += count
        pace.moved()

    def read_exactly(self, count: int, pace: Pace) -> bytes:
        """Read count bytes, whatever they are."""
        missing = count - (self._stop - self._start)
        if missing < _LARGE:
            return super().read_exactly(count, pace)
        # Each part is received into memory of its own, so that it is copied only once.
        parts = [self._cut(count - missing)]
        while missing:
            part = self._receive(missing, pace)
            missing -= len(part)
            parts.append(part)
        return b"".join(parts)

    def _receive(self, most: int, pace: Pace) -> bytes:
        part: bytes | None = None
        if self._waits_inside and pace.left() > SLICE_SECONDS:
            try:
                # The system collects until all is there, or the slice is over.
                part = self._socket.recv(most, _WAIT_FOR_ALL)
            except BlockingIOError:
                part = None
        while part is None:
            if self._readable(pace.left()):
                with contextlib.suppress(BlockingIOError):
                    part = self._socket.recv(min(most, 1 << 20), _NOT_WAITING)
        if not part:
            raise ChannelClosed("the other side closed the connection")
        pace.moved()
        return part

    def waiting(self) -> bool:
        """Say whether bytes that nobody asked for are there, or the other side is gone."""
        return self._stop != self._start or self._readable(0)

    def close(self) -> None:
        """Give the line back; never raises."""
        with contextlib.suppress(Exception):
            self._close()


if sys.platform == "win32":

    def _waiter(connection: socket.socket, *, for_writing: bool) -> Callable[[float], bool]:
        ends = [connection]

        def wait(seconds: float) -> bool:
            reading, writing = ([], ends) if for_writing else (ends, [])
            return any(select.select(reading, writing, [], seconds))

        return wait

else:

    def _waiter(connection: socket.socket, *, for_writing: bool) -> Callable[[float], bool]:
        # Not select: it refuses the files of a process that has many open.
        poll = select.poll()
        poll.register(connection, select.POLLOUT if for_writing else select.POLLIN)

        def wait(seconds: float) -> bool:
            return bool(poll.poll(seconds * 1000))

        return wait


class VisaChannel(_Buffered):
    """Read and write through PyVISA's public interface: serial lines, HiSLIP, VXI-11, USB.

    Raw sockets work too, at a few times the cost. The backend may overstep the deadline of
    one call by what it adds itself (VXI-11: 1 s), and a write to a raw socket whose other side
    reads nothing waits until the system's buffer has room.
    """

    # The first read of an exchange asks for little where the backend would go on waiting for
    # the full count while bytes drip in; the next ones ask for more as long as they are quick.
    _first_raw_read = 16
    # Odd, since VXI-11 mistakes an answer of exactly what was asked for for a part of one.
    _first_message_read, _largest_read = 65_537, 1_048_577
    _slice_seconds = 0.05

    def __init__(self, resource: Any) -> None:
        super().__init__()
        from pyvisa import constants, errors

        self._resource, self._constants, self._error = resource, constants, errors.VisaIOError
        name = str(getattr(resource, "resource_name", "")).upper()
        self._serial = name.startswith("ASRL")
        self._raw = name.endswith("::SOCKET")
        self._first = self._first_raw_read if self._raw else self._first_message_read
        self._size = self._first
        self._line: bool | None = None
        if self._serial:
            # XON and XOFF are bytes of a block too, and so is what looks like an end of input.
            resource.flow_control = constants.ControlFlow.none
            resource.end_input = constants.SerialTermination.none
            resource.flush(constants.BufferOperation.discard_read_buffer)
            # Ten bits make a byte; half of what the line can do.
            self.slowest = resource.baud_rate / 20
        else:
            with contextlib.suppress(Exception):  # not every kind of line has it
                resource.set_visa_attribute(constants.ResourceAttribute.tcpip_keepalive, True)
        if self._raw:
            # Otherwise what came before a time-out is lost.
            resource.set_visa_attribute(constants.ResourceAttribute.suppress_end_enabled, False)

    def send(self, data: bytes, pace: Pace) -> None:
        """Send all of data."""
        self._size, self._ended = self._first, False
        self._resource.timeout = _milliseconds(pace.left())
        self._resource.write_raw(data)

    def _read(self, count: int, seconds: float) -> bytes:
        """Read once; return nothing after a time-out."""
        resource, codes = self._resource, self._constants.StatusCode
        resource.timeout = _milliseconds(seconds)
        try:
            with resource.ignore_warning(
                codes.success_device_not_present, codes.success_max_count_read
            ):
                data, status = resource.visalib.read(resource.session, count)
        except self._error as error:
            if error.error_code == codes.error_timeout:
                return b""
            raise
        if not self._serial and not self._raw:
            self._ended = status != codes.success_max_count_read
            if not data:
                raise ChannelOverrun("the message ended too early")
        return bytes(data)

    def _fetch(self, most: int, pace: Pace, *, line: bool = False) -> None:
        if self._serial:
            data = self._read(1, pace.left())
            if not data:
                pace.left()
                return
            there = min(most - 1, self._resource.bytes_in_buffer)
            if there > 0:
                data += self._read(there, pace.left())
            self._take_in(data)
            pace.moved()
            return
        if self._raw and line is not self._line:
            # With it on, a block is read byte by byte at every 0x0A in it.
            self._resource.read_termination = "\n" if line else None
            self._line = line
        while True:
            seconds = pace.left()
            if self._raw:
                seconds = min(seconds, self._slice_seconds)
            wall, work = time.monotonic(), time.thread_time()
            data = self._read(min(most, self._size), seconds)
            wall, work = time.monotonic() - wall, time.thread_time() - work
            if data:
                break
            # To the backend a closed connection is one that is always ready with nothing: it
            # asks again and again, while real silence costs next to no processor time.
            if self._raw and wall > 0.01 and work > 0.2 * wall:
                raise ChannelClosed("the other side closed the connection")
        if wall > self._slice_seconds / 4:
            self._size = self._first
        elif len(data) == self._size:
            self._size = min(self._size * 4 | 1, self._largest_read)
        self._take_in(data)
        pace.moved()

    def waiting(self) -> bool:
        """Say whether bytes that nobody asked for are there.

        Lines with messages of their own (HiSLIP, VXI-11, USB) drop such bytes themselves.
        """
        if self._stop == self._start and self._serial:
            return bool(self._resource.bytes_in_buffer)
        if self._stop == self._start and self._raw:
            self._take_in(self._read(1, 0.001))
        return self._stop > self._start

    def close(self) -> None:
        """Give the line back; never raises."""
        with contextlib.suppress(Exception):
            self._resource.close()


def _milliseconds(seconds: float) -> int:
    return max(1, round(seconds * 1000))
