"""Speak HiSLIP with bare sockets: every byte laid out here, from memory of IVI-6.1."""

import socket
import struct
from dataclasses import dataclass

INITIALIZE, INITIALIZE_RESPONSE, FATAL_ERROR, ERROR = range(4)
ASYNC_LOCK, ASYNC_LOCK_RESPONSE, DATA, DATA_END = range(4, 8)
DEVICE_CLEAR_COMPLETE, DEVICE_CLEAR_ACKNOWLEDGE = 8, 9
ASYNC_REMOTE_LOCAL_CONTROL, ASYNC_REMOTE_LOCAL_RESPONSE, TRIGGER = 10, 11, 12
INTERRUPTED, ASYNC_INTERRUPTED = 13, 14
ASYNC_MAXIMUM_MESSAGE_SIZE, ASYNC_MAXIMUM_MESSAGE_SIZE_RESPONSE = 15, 16
ASYNC_INITIALIZE, ASYNC_INITIALIZE_RESPONSE, ASYNC_DEVICE_CLEAR = 17, 18, 19
ASYNC_SERVICE_REQUEST, ASYNC_STATUS_QUERY, ASYNC_STATUS_RESPONSE = 20, 21, 22
ASYNC_DEVICE_CLEAR_ACKNOWLEDGE, ASYNC_LOCK_INFO, ASYNC_LOCK_INFO_RESPONSE = 23, 24, 25

FIRST_ID = 0xFFFFFF00
PATIENCE_SECONDS = 10.0


@dataclass(frozen=True, kw_only=True)
class Heard:
    """A message that came, or the end of the connection where type is None."""

    type: int | None
    control: int = 0
    parameter: int = 0
    payload: bytes = b""


GONE = Heard(type=None)


def raw(kind: int, control: int = 0, parameter: int = 0, payload: bytes = b"") -> bytes:
    """Return a message as it goes over the wire."""
    return (
        b"HS"
        + bytes((kind, control))
        + parameter.to_bytes(4, "big")
        + len(payload).to_bytes(8, "big")
        + payload
    )


class Wire:
    """One bare connection."""

    def __init__(self, port: int) -> None:
        self.socket = socket.create_connection(("127.0.0.1", port), timeout=PATIENCE_SECONDS)
        self.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def send(self, data: bytes) -> None:
        self.socket.sendall(data)

    def hear(self) -> Heard:
        """Return the next message, GONE when the connection has ended."""
        header = self._exactly(16)
        if not header:
            return GONE
        assert header[:2] == b"HS"
        return Heard(
            type=header[2],
            control=header[3],
            parameter=int.from_bytes(header[4:8], "big"),
            payload=self._exactly(int.from_bytes(header[8:], "big")),
        )

    def _exactly(self, count: int) -> bytes:
        found = b""
        while len(found) < count:
            data = self.socket.recv(count - len(found))
            if not data:
                assert not found, f"the connection ended behind {found!r}"
                return b""
            found += data
        return found

    def close(self) -> None:
        self.socket.close()

    def reset(self) -> None:
        """Go away as a machine does whose program died."""
        self.socket.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
        self.socket.close()


def port_of(address: str) -> int:
    """Return the port of a HiSLIP address."""
    return int(address.split("::")[2].split(",")[1])


class Dialogue:
    """A session: both channels, and message IDs as a client counts them."""

    def __init__(self, address: str, *, sub_address: bytes = b"hislip0") -> None:
        self.port = port_of(address)
        self.next_id = FIRST_ID
        # An answer has been read to its end since that was last told (RMT-delivered).
        self.delivered = False
        self.sync = Wire(self.port)
        self.sync.send(raw(INITIALIZE, 0, 0x0100_0000 | int.from_bytes(b"xx", "big"), sub_address))
        answer = self.sync.hear()
        assert answer.type == INITIALIZE_RESPONSE
        # Synchronized mode, protocol version 1.0.
        assert answer.control == 0
        assert answer.parameter >> 16 == 0x0100
        assert answer.payload == b""
        self.number = answer.parameter & 0xFFFF
        self.aside = Wire(self.port)
        self.aside.send(raw(ASYNC_INITIALIZE, 0, self.number))
        assert self.aside.hear() == Heard(type=ASYNC_INITIALIZE_RESPONSE)

    def __enter__(self) -> "Dialogue":
        return self

    def __exit__(self, *_: object) -> None:
        self.sync.close()
        self.aside.close()

    def write(self, text: str, *, kind: int = DATA_END) -> int:
        """Send program text; return its message ID."""
        sent, delivered = self.next_id, self.delivered
        self.delivered = False
        self.sync.send(raw(kind, delivered, sent, text.encode()))
        self.next_id = (self.next_id + 2) & 0xFFFF_FFFF
        return sent

    def read(self) -> str:
        """Return a whole answer without its newline; its ID must be that of the last message."""
        found = b""
        while True:
            heard = self.sync.hear()
            assert heard.type in (DATA, DATA_END), heard
            assert heard.control == 0
            assert heard.parameter == (self.next_id - 2) & 0xFFFF_FFFF
            found += heard.payload
            if heard.type == DATA_END:
                self.delivered = True
                return found.decode().removesuffix("\n")

    def ask(self, text: str) -> str:
        """Ask; return the answer without its newline."""
        self.write(text)
        return self.read()

    def ask_aside(
        self, kind: int, control: int = 0, parameter: int = 0, payload: bytes = b""
    ) -> Heard:
        """Send a message on the asynchronous channel; return what comes back on it."""
        self.aside.send(raw(kind, control, parameter, payload))
        return self.aside.hear()

    def status(self) -> int:
        """Return the status byte."""
        delivered, self.delivered = self.delivered, False
        answer = self.ask_aside(ASYNC_STATUS_QUERY, delivered, self.next_id - 2)
        assert answer.type == ASYNC_STATUS_RESPONSE
        return answer.control

    def accept(self, most_bytes: int) -> int:
        """Say how long messages may be; return what the server says of itself."""
        answer = self.ask_aside(ASYNC_MAXIMUM_MESSAGE_SIZE, payload=most_bytes.to_bytes(8, "big"))
        assert answer.type == ASYNC_MAXIMUM_MESSAGE_SIZE_RESPONSE
        assert len(answer.payload) == 8
        return int.from_bytes(answer.payload, "big")
