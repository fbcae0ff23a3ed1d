"""A server on loopback that answers as a test tells it to: late, cut, closed, or garbage."""

import socket
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress

Answer = Callable[[socket.socket, bytes], None]


@contextmanager
def server(answer: Answer) -> Iterator[str]:
    """Serve connections one after another; answer is called with each line that comes."""
    listener = socket.create_server(("127.0.0.1", 0))
    open_now: list[socket.socket] = []
    ended = threading.Event()

    def serve() -> None:
        while not ended.is_set():
            try:
                connection, _ = listener.accept()
            except OSError:
                return
            open_now.append(connection)
            with connection:
                if not ended.is_set():
                    _converse(connection, answer)

    thread = threading.Thread(target=serve)
    thread.start()
    try:
        yield f"TCPIP::127.0.0.1::{listener.getsockname()[1]}::SOCKET"
    finally:
        ended.set()
        # A client that is still there must not keep the server waiting for its next line.
        for each in (listener, *open_now):
            with suppress(OSError):
                each.shutdown(socket.SHUT_RDWR)
        listener.close()
        thread.join()


def _converse(connection: socket.socket, answer: Answer) -> None:
    pending = b""
    while True:
        try:
            data = connection.recv(4096)
        except OSError:
            return
        if not data:
            return
        *lines, pending = (pending + data).split(b"\n")
        for line in lines:
            try:
                answer(connection, line)
            except OSError:
                return
