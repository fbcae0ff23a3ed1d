"""Serial lines and message-based instruments that answer as a test tells them to."""

import os
import select
import socket
import struct
import threading
import tty
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress

Reply = Callable[[bytes], bytes]


@contextmanager
def serial_line(converse: Callable[[int, bytes], None]) -> Iterator[str]:
    """Serve a pseudo-terminal; converse gets its descriptor and each line that comes."""
    near, far = os.openpty()
    tty.setraw(far)
    stop_read, stop_write = os.pipe()

    def serve() -> None:
        pending = b""
        while True:
            ready = select.select([near, stop_read], [], [])[0]
            if stop_read in ready:
                return
            try:
                *lines, pending = (pending + os.read(near, 4096)).split(b"\n")
                for line in lines:
                    converse(near, line)
            except OSError:
                return

    thread = threading.Thread(target=serve)
    thread.start()
    try:
        yield f"ASRL{os.ttyname(far)}::INSTR"
    finally:
        os.write(stop_write, b"x")
        thread.join()
        for each in (near, far, stop_read, stop_write):
            with suppress(OSError):
                os.close(each)


def _exactly(connection: socket.socket, count: int) -> bytes:
    data = b""
    while len(data) < count:
        part = connection.recv(count - len(data))
        if not part:
            raise EOFError
        data += part
    return data


@contextmanager
def _listening(serve: Callable[[socket.socket], None]) -> Iterator[int]:
    listener = socket.create_server(("127.0.0.1", 0))
    connections: list[socket.socket] = []
    threads: list[threading.Thread] = []

    def one(connection: socket.socket) -> None:
        with connection, suppress(OSError, EOFError):
            serve(connection)

    def accept() -> None:
        with suppress(OSError):
            while True:
                connection = listener.accept()[0]
                connections.append(connection)
                threads.append(threading.Thread(target=one, args=(connection,)))
                threads[-1].start()

    threads.append(threading.Thread(target=accept))
    threads[0].start()
    try:
        yield listener.getsockname()[1]
    finally:
        for each in (listener, *connections):
            with suppress(OSError):
                each.shutdown(socket.SHUT_RDWR)
        listener.close()
        for thread in threads:
            thread.join()


@contextmanager
def vxi11(reply: Reply) -> Iterator[str]:
    """Serve VXI-11 (VXIbus Consortium, revision 1.0, section B) without a port mapper.

    Every read returns at most what it asks for; END comes with the last byte of an answer. A
    read with nothing to say reports an I/O time-out, error 15.
    """
    answers: list[bytes] = []

    def serve(connection: socket.socket) -> None:
        while True:
            (size,) = struct.unpack(">I", _exactly(connection, 4))
            call = _exactly(connection, size & 0x7FFFFFFF)
            procedure = struct.unpack(">I", call[20:24])[0]
            # Credentials and verifier: flavour and length, both of length 0.
            body = call[40:]
            if procedure == 10:  # create_link: error, link, abort port, largest write
                result = struct.pack(">4I", 0, 1, 0, 1 << 20)
            elif procedure == 11:  # device_write: link, time-outs, flags, data
                (length,) = struct.unpack(">I", body[16:20])
                answer = reply(body[20 : 20 + length])
                if answer:
                    answers.append(answer)
                result = struct.pack(">2I", 0, length)
            elif procedure == 12:  # device_read: link, count, time-outs, flags, character
                (count,) = struct.unpack(">I", body[4:8])
                if answers:
                    data, rest = answers[0][:count], answers[0][count:]
                    answers[0] = rest
                    if not rest:
                        answers.pop(0)
                    # Reasons: 1 the count was reached, 4 END.
                    reason = (len(data) == count) | (0 if rest else 4)
                    padding = bytes(-len(data) % 4)
                    result = struct.pack(">3I", 0, reason, len(data)) + data + padding
                else:
                    result = struct.pack(">3I", 15, 0, 0)
            else:  # destroy_link and the rest
                result = struct.pack(">I", 0)
            record = call[:4] + struct.pack(">5I", 1, 0, 0, 0, 0) + result
            connection.sendall(struct.pack(">I", len(record) | 0x80000000) + record)

    with _listening(serve) as port:
        yield f"TCPIP::127.0.0.1,{port}::inst0::INSTR"


@contextmanager
def hislip(reply: Reply) -> Iterator[str]:
    """Serve HiSLIP (IVI-6.1, revision 1.1, table 4 from memory); answers end with DataEND."""

    def message(kind: int, control: int, parameter: int, payload: bytes = b"") -> bytes:
        return struct.pack(">2sBBIQ", b"HS", kind, control, parameter, len(payload)) + payload

    def serve(connection: socket.socket) -> None:
        while True:
            header = _exactly(connection, 16)
            _, kind, _, parameter, size = struct.unpack(">2sBBIQ", header)
            payload = _exactly(connection, size)
            if kind == 0:  # Initialize
                connection.sendall(message(1, 0, 0x01000001))
            elif kind == 17:  # AsyncInitialize
                connection.sendall(message(18, 0, 0))
            elif kind == 15:  # AsyncMaximumMessageSize
                connection.sendall(message(16, 0, 0, struct.pack(">Q", 1 << 20)))
            elif kind == 7:  # DataEnd
                answer = reply(payload)
                if answer:
                    connection.sendall(message(7, 0, parameter, answer))

    with _listening(serve) as port:
        yield f"TCPIP::127.0.0.1::hislip0,{port}::INSTR"
