"""Put instruments on pseudo-terminals, which look to a client like serial ports.

A serial line has no connections, only bytes. The system does tell when the last client
has closed its end, and half a message, unread answers and changed line settings are then
dropped. What can't be noticed: a client that closes while another still has the line open,
or that closes and is followed by another within a few milliseconds (their bytes then follow
one another as on a real line), two clients at once (they share the answers), a break, and
the baud rate, which changes nothing here. There is no connection to be closed or reset:
where a fault wants that, unread answers and half a message are lost, as behind an adapter
that starts anew. An instrument without power hears nothing and says nothing.
"""

import asyncio
import os
import select
import termios
import tty
from collections.abc import Callable

from pulsetally.simulators.connection import Connection
from pulsetally.simulators.deliveries import Outbox
from pulsetally.simulators.mishaps import Mishaps
from pulsetally.simulators.scpi_device import ScpiDevice

# How often an unopened line is looked at, in real time; a first message waits that long.
LOOK_SECONDS = 0.01
# A client that sends and never reads must not fill the memory.
MOST_UNREAD_BYTES = 1 << 20
_CHUNK = 65_536


class TerminalServer:
    """One instrument that listens on one pseudo-terminal.

    after_message: called each time a complete program message has been followed.
    mishaps: the faults that happen to the instrument, if any.
    """

    def __init__(
        self,
        device: ScpiDevice,
        *,
        after_message: Callable[[], None],
        mishaps: Mishaps | None = None,
    ) -> None:
        self._device, self._after_message, self._mishaps = device, after_message, mishaps
        self._connection = Connection(device, mishaps)
        self._loop: asyncio.AbstractEventLoop | None = None
        self._look: asyncio.TimerHandle | None = None
        self._master = -1
        self._path = ""
        self._unread = bytearray()
        self._reading = False

    async def start(self) -> str:
        """Open a pseudo-terminal; return the path of the end that a client opens."""
        self._loop = asyncio.get_running_loop()
        self._outbox = Outbox(
            send=self._send,
            close=self._begin_anew,
            reset=self._begin_anew,
            later=self._loop.call_later,
            emptied=self._read_on,
        )
        if self._mishaps is not None:
            self._mishaps.power_changed.append(self._power_changed)
        self._master, client_end = os.openpty()
        self._path = os.ttyname(client_end)
        os.set_blocking(self._master, False)
        os.close(client_end)
        self._clean()
        self._wait_for_client()
        return self._path

    async def stop(self) -> None:
        """Hang up."""
        if self._master < 0:
            return
        if self._mishaps is not None:
            self._mishaps.power_changed.remove(self._power_changed)
        self._outbox.drop()
        self._leave_loop()
        os.close(self._master)
        self._master = -1

    # Nobody has the line open.

    def _clean(self) -> None:
        """Put the line back to raw bytes without echo, and drop answers nobody read.

        What a client sends is left alone: the next one may be there already.
        """
        client_end = os.open(self._path, os.O_RDWR | os.O_NOCTTY)
        try:
            tty.setraw(client_end, termios.TCSANOW)
            termios.tcflush(client_end, termios.TCIFLUSH)
        finally:
            os.close(client_end)

    def _is_deserted(self) -> bool:
        line = select.poll()
        line.register(self._master, select.POLLIN)
        return line.poll(0) == [(self._master, select.POLLHUP)]

    def _wait_for_client(self) -> None:
        assert self._loop is not None
        if self._is_deserted():
            # The loop would find such a line readable without end.
            self._look = self._loop.call_later(LOOK_SECONDS, self._wait_for_client)
        else:
            self._look = None
            self._begin_reading()

    def _hung_up(self) -> None:
        self._leave_loop()
        self._begin_anew()
        self._clean()
        self._wait_for_client()

    def _begin_anew(self) -> None:
        """Forget half a message and what nobody has read."""
        self._unread.clear()
        self._outbox.drop()
        self._connection = Connection(self._device, self._mishaps)

    def _power_changed(self, powered: bool) -> None:
        del powered  # Neither what came before it went nor what came before it was back counts.
        self._begin_anew()

    def _leave_loop(self) -> None:
        assert self._loop is not None
        if self._look is not None:
            self._look.cancel()
            self._look = None
        self._loop.remove_reader(self._master)
        self._loop.remove_writer(self._master)
        self._reading = False

    # Somebody has.

    def _begin_reading(self) -> None:
        assert self._loop is not None
        self._reading = True
        self._loop.add_reader(self._master, self._read)

    def _read(self) -> None:
        try:
            data = os.read(self._master, _CHUNK)
        except BlockingIOError:
            return
        except OSError:
            # EIO: the last client has closed its end.
            data = b""
        if not data:
            self._hung_up()
            return
        connection = self._connection
        for deliveries in connection.receive(data):
            if connection is self._connection:
                self._outbox.put(deliveries)
            # The client has its answer and can work on it while time passes here.
            self._after_message()
        self._read_on()

    def _send(self, answer: bytes) -> None:
        assert self._loop is not None
        was_empty = not self._unread
        self._unread += answer
        if self._unread and was_empty:
            self._write()
            if self._unread:
                self._loop.add_writer(self._master, self._write)

    def _read_on(self) -> None:
        """Read no more while too much waits to be read by the client; go on afterwards."""
        if self._look is not None:
            # Nobody has the line open.
            return
        assert self._loop is not None
        is_full = len(self._unread) + self._outbox.held_bytes > MOST_UNREAD_BYTES
        if is_full and self._reading:
            self._loop.remove_reader(self._master)
            self._reading = False
        elif not is_full and not self._reading:
            self._begin_reading()

    def _write(self) -> None:
        assert self._loop is not None
        try:
            sent = os.write(self._master, self._unread[:_CHUNK])
        except BlockingIOError:
            # A full line without a client would be found writable without end.
            if self._is_deserted():
                self._hung_up()
            return
        del self._unread[:sent]
        if self._unread:
            return
        self._loop.remove_writer(self._master)
        self._read_on()
