"""Follow one HiSLIP client's messages without doing I/O.

From memory of IVI-6.1, as hislip_messages.py. What is offered is protocol version 1.0 in
synchronized mode; overlap mode is never agreed to. An answer carries the message ID of the
message that completed the query, and each program message's answer ends with a DataEnd.
Service requests are not sent, and bit 6 of a status answer is the master summary. There is
no front panel, so that remote and local are acknowledged and change nothing. A lock that is
released is free at once, whatever is still under way on the synchronous channel.
"""

import struct
from collections.abc import Callable, Iterator
from typing import Protocol

from pulsetally.simulators.connection import Connection
from pulsetally.simulators.deliveries import Cancellable, Delivery, Send
from pulsetally.simulators.hislip_locks import LockAnswer, LockTable
from pulsetally.simulators.hislip_messages import (
    FIRST_MESSAGE_BYTES,
    HEADER_BYTES,
    Channel,
    ErrorCode,
    FatalCode,
    Message,
    MessageType,
    Oversized,
    complaint,
    error,
    fatal,
    fragments,
)
from pulsetally.simulators.scpi_device import ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError

# Most payload bytes of a message; the SCPI engine has a lower limit for a program message.
LIMITS = {Channel.SYNCHRONOUS: 1 << 20, Channel.ASYNCHRONOUS: 256}
_SIZE = struct.Struct("!Q")
_OPENING = (MessageType.INITIALIZE, MessageType.ASYNC_INITIALIZE)
_PROGRAM = (MessageType.DATA, MessageType.DATA_END, MessageType.TRIGGER)


class Wire(Protocol):
    """What carries a session's messages."""

    def tell(self, channel: Channel, message: Message) -> None:
        """Send a message at once."""

    def deliver(self, deliveries: list[Delivery]) -> None:
        """Make deliveries on the synchronous channel, each in its turn."""

    def drop(self) -> None:
        """Forget deliveries that were not made yet."""

    def clear(self) -> None:
        """Forget deliveries that were not made yet, and messages under way."""

    def end(self) -> None:
        """Close both channels behind what was sent."""

    def later(self, seconds: float, do: Callable[[], None]) -> Cancellable:
        """Do something after so many real seconds."""

    def locks_changed(self) -> None:
        """Have every session look at the locks again."""

    def pass_time(self) -> None:
        """Let the time of one exchange pass."""


class Session:
    """One client of one instrument: two channels, one half-finished message.

    connect: gives a new connection to the instrument. locks: of all its clients.
    both_channels: whether the asynchronous channel is there as well.
    """

    def __init__(
        self,
        device: ScpiDevice,
        *,
        connect: Callable[[], Connection],
        locks: LockTable,
        wire: Wire,
    ) -> None:
        self._device, self._connect, self._locks, self._wire = device, connect, locks, wire
        self._connection = connect()
        self._most_bytes = FIRST_MESSAGE_BYTES
        self._message_id = 0
        # An answer was sent, and the client has not said that it was read to its end.
        self._unread = False
        self._clearing = False
        self._wanted_key: bytes | None = None
        self._patience: Cancellable | None = None
        self.both_channels = False

    # The synchronous channel.

    def must_wait(self, message: Message | Oversized) -> bool:
        """Say whether a message can't be looked at because others have locked the instrument."""
        return message.type in _PROGRAM and not self._clearing and not self._locks.may_speak(self)

    def synchronous(self, message: Message | Oversized) -> Iterator[None]:
        """Follow a message of the synchronous channel; yield behind each program message."""
        if not self._is_plausible(message, Channel.SYNCHRONOUS) or isinstance(message, Oversized):
            return
        if message.type == MessageType.DEVICE_CLEAR_COMPLETE:
            self._finish_clearing()
        elif message.type in _PROGRAM and not self._clearing:
            yield from self._follow(message)

    def _is_plausible(self, message: Message | Oversized, channel: Channel) -> bool:
        """Say whether a message is to be followed; complain or end where it is not."""
        if message.type == MessageType.FATAL_ERROR:
            self._wire.end()
            return False
        if not self.both_channels:
            self.fail(channel, FatalCode.CHANNELS_MISSING, "send AsyncInitialize first")
            return False
        if message.type in _OPENING:
            self.fail(channel, FatalCode.BAD_INITIALIZATION, "this session is initialized")
            return False
        problem = complaint(message, channel, LIMITS[channel])
        if problem is not None:
            self._wire.tell(channel, problem)
        return problem is None

    def fail(self, channel: Channel, code: FatalCode, text: str) -> None:
        """Tell a fatal error and end the session."""
        self._wire.tell(channel, fatal(code, text))
        self._wire.end()

    def _follow(self, message: Message) -> Iterator[None]:
        self._interrupt_unless_delivered(message)
        self._message_id = message.parameter
        content, ends = message.payload, message.type != MessageType.DATA
        if message.type == MessageType.TRIGGER:
            if self._connection.amid_message:
                # IEEE 488.2 section 6.1.6: a trigger inside a program message is an error,
                # and the parser starts anew.
                self._device.status.report(ScpiError(-105))
                self._connection = self._connect()
                return
            content = b"*TRG"
        for deliveries in self._connection.receive(content, end=ends):
            self._wire.deliver([self._packed(each) for each in deliveries])
            self._wire.pass_time()
            yield

    def _interrupt_unless_delivered(self, message: Message) -> None:
        """Drop an answer that the client has not read before it went on (IEEE 488.2, 6.3.2.3)."""
        if self._unread and not message.control & 1:
            self._wire.drop()
            self._device.status.report(ScpiError(-410))
            for channel, kind in (
                (Channel.SYNCHRONOUS, MessageType.INTERRUPTED),
                (Channel.ASYNCHRONOUS, MessageType.ASYNC_INTERRUPTED),
            ):
                self._wire.tell(channel, Message(type=kind, parameter=message.parameter))
        self._unread = False

    def _packed(self, delivery: Delivery) -> Delivery:
        if not isinstance(delivery, Send):
            return delivery
        messages = fragments(
            delivery.content,
            message_id=self._message_id,
            most_bytes=self._most_bytes,
            ends=delivery.whole,
        )
        return Send(b"".join(message.encoded() for message in messages))

    def answer_sent(self) -> None:
        """Note that an answer, or a part of one, has just been sent."""
        self._unread = True

    def _finish_clearing(self) -> None:
        if not self._clearing:
            text = "no device clear is under way; send AsyncDeviceClear first"
            self._wire.tell(Channel.SYNCHRONOUS, error(ErrorCode.UNIDENTIFIED, text))
            return
        self._clearing = False
        # Control code 0: synchronized mode, whatever the client would like.
        self._wire.tell(Channel.SYNCHRONOUS, Message(type=MessageType.DEVICE_CLEAR_ACKNOWLEDGE))

    # The asynchronous channel.

    def asynchronous(self, message: Message | Oversized) -> None:
        """Follow a message of the asynchronous channel."""
        if not self._is_plausible(message, Channel.ASYNCHRONOUS) or isinstance(message, Oversized):
            return
        match message.type:
            case MessageType.ASYNC_MAXIMUM_MESSAGE_SIZE:
                self._agree_on_size(message)
            case MessageType.ASYNC_STATUS_QUERY:
                self._tell_status(message)
            case MessageType.ASYNC_DEVICE_CLEAR:
                self._clear()
            case MessageType.ASYNC_LOCK if message.control:
                self._lock(message)
            case MessageType.ASYNC_LOCK:
                self._answer_lock(self._locks.release(self))
            case MessageType.ASYNC_LOCK_INFO:
                self._answer(
                    MessageType.ASYNC_LOCK_INFO_RESPONSE,
                    control=int(self._locks.is_exclusive),
                    parameter=self._locks.holders,
                )
            case MessageType.ASYNC_REMOTE_LOCAL_CONTROL:
                self._answer(MessageType.ASYNC_REMOTE_LOCAL_RESPONSE)

    def _answer(
        self, kind: MessageType, *, control: int = 0, parameter: int = 0, payload: bytes = b""
    ) -> None:
        message = Message(type=kind, control=control, parameter=parameter, payload=payload)
        self._wire.tell(Channel.ASYNCHRONOUS, message)

    def _agree_on_size(self, message: Message) -> None:
        if len(message.payload) != _SIZE.size:
            text = f"a message size has {_SIZE.size} bytes, not {len(message.payload)}"
            self.fail(Channel.ASYNCHRONOUS, FatalCode.BAD_HEADER, text)
            return
        (most,) = _SIZE.unpack(message.payload)
        if most <= HEADER_BYTES:
            text = f"messages of {most} bytes carry nothing; accept at least {HEADER_BYTES + 1}"
            self._wire.tell(Channel.ASYNCHRONOUS, error(ErrorCode.UNIDENTIFIED, text))
            return
        self._most_bytes = most
        # A client that counts the header in sends a little less than it might.
        self._answer(
            MessageType.ASYNC_MAXIMUM_MESSAGE_SIZE_RESPONSE,
            payload=_SIZE.pack(LIMITS[Channel.SYNCHRONOUS]),
        )

    def _tell_status(self, message: Message) -> None:
        if message.control & 1:
            self._unread = False
        self._device.refresh()
        byte = self._device.status.byte(message_available=self._unread)
        self._answer(MessageType.ASYNC_STATUS_RESPONSE, control=byte)
        # Whoever asks until a bit comes up must see time pass.
        self._wire.pass_time()

    def _clear(self) -> None:
        self._clearing, self._unread = True, False
        self._connection = self._connect()
        self._wire.clear()
        self._device.want_completion(False)
        self._answer(MessageType.ASYNC_DEVICE_CLEAR_ACKNOWLEDGE)

    # Locks.

    def _lock(self, message: Message) -> None:
        if self._wanted_key is not None:
            self._answer_lock(LockAnswer.INVALID)
            return
        answer = self._locks.request(self, message.payload)
        if answer is None and message.parameter:
            self._wanted_key = message.payload
            self._patience = self._wire.later(message.parameter / 1000, self._give_up_lock)
            return
        self._answer_lock(LockAnswer.FAILURE if answer is None else answer)

    def retry_lock(self) -> None:
        """Ask for the lock that is waited for, now that locks have changed."""
        if self._wanted_key is None:
            return
        answer = self._locks.request(self, self._wanted_key)
        if answer is not None:
            self._stop_waiting()
            self._answer_lock(answer)

    def _give_up_lock(self) -> None:
        self._stop_waiting()
        self._answer_lock(LockAnswer.FAILURE)

    def _stop_waiting(self) -> None:
        self._wanted_key = None
        if self._patience is not None:
            self._patience.cancel()
            self._patience = None

    def _answer_lock(self, answer: LockAnswer) -> None:
        self._answer(MessageType.ASYNC_LOCK_RESPONSE, control=answer)
        if answer in (LockAnswer.SUCCESS, LockAnswer.SHARED_RELEASED):
            self._wire.locks_changed()

    def leave(self) -> None:
        """Give back what the client holds: it has gone."""
        self._stop_waiting()
        self._locks.leave(self)
        self._wire.locks_changed()
