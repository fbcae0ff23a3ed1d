"""Follow SCPI program messages without doing I/O: bytes in, bytes out.

What IEEE Std 488.2 says and a byte stream can't show: an answer is sent as soon as its
message ends, and the engine never learns whether anybody read it. So a query is never
found interrupted (-410, which a transport that knows better can report), and nobody can
ask for an answer that was not made (-420). What is left is -440, a query behind an answer
without an end of its own, and -430, a message whose answers together are more than an
instrument holds.
"""

from collections.abc import Iterator

from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_message import (
    Element,
    MessageReader,
    WordElement,
    read_elements,
    split_header,
    split_units,
)
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import Number, Parameter, Value

_COMMAND_ERRORS = range(-199, -99)


class ScpiEngine:
    """Follow the messages of one connection to an instrument.

    device: the instrument; several engines may share one.
    limit: most bytes of one message; a longer one is -363 and is left out.
    answer_limit: most bytes of all answers to one message. With more, -430: they are all
    forgotten, and the message's further queries are left out (IEEE 488.2 6.3.1.7, from
    memory).
    """

    def __init__(
        self, device: ScpiDevice, *, limit: int = 65_536, answer_limit: int = 1 << 26
    ) -> None:
        self._device, self._answer_limit = device, answer_limit
        self._reader = MessageReader(limit)

    def receive(self, data: bytes) -> bytes:
        """Take newly arrived bytes, however cut; return what the instrument answers."""
        return b"".join(self.answers(data))

    @property
    def amid_message(self) -> bool:
        """Whether a program message has begun and not ended."""
        return self._reader.amid_message

    def answers(self, data: bytes, *, end: bool = False) -> Iterator[bytes]:
        """Take newly arrived bytes; follow each message they complete when its turn comes.

        Yields one item a message, b"" for one without an answer, so that the caller can
        send it and let time pass before the next message is looked at. end: the transport
        marked the last byte as the end of a message, with or without a newline.
        """
        for message in self.messages(data, end=end):
            yield self.follow(message)

    def messages(self, data: bytes, *, end: bool = False) -> Iterator[bytes]:
        """Take newly arrived bytes; yield each message they complete, not yet followed."""
        for message in self._reader.feed(data):
            if isinstance(message, ScpiError):
                self._device.status.report(message)
            else:
                yield message
        if end and (rest := self._reader.end()) is not None:
            yield rest

    def follow(self, message: bytes) -> bytes:
        """Follow one whole message; return its answer, b"" for none."""
        device = self._device
        device.refresh()
        device.begin_message()
        answers: list[bytes] = []
        path: tuple[str, ...] = ()
        endless = unterminated = deadlocked = False
        held_bytes = 0
        for unit in split_units(message):
            try:
                header, data = split_header(unit)
                if not header:
                    continue
                query = header.endswith("?")
                mnemonics, path = _walk(header.removesuffix("?"), path)
                command, suffixes = device.table.find(mnemonics)
                if (command.answer if query else command.execute) is None:
                    raise ScpiError(-113, header)
                elements = read_elements(data)
                if not command.coupled:
                    self._end_coupled()
                if query and endless:
                    raise ScpiError(-440)
                if query and deadlocked:
                    continue
                answer = self._do(command, query, suffixes, elements, bool(answers))
                if answer is not None:
                    if device.manner.echoes and not header.startswith("*"):
                        answer = b"%s %s" % (":".join(mnemonics).upper().encode("ascii"), answer)
                    answers.append(answer)
                    endless, unterminated = command.indefinite, command.unterminated
                    held_bytes += len(answer)
                device.refresh()
                if held_bytes > self._answer_limit:
                    answers.clear()
                    held_bytes, endless, deadlocked = 0, False, True
                    raise ScpiError(-430)
            except ScpiError as error:
                device.status.report(error)
                if error.number in _COMMAND_ERRORS:
                    # The parser lost its place: what follows may mean anything.
                    break
        self._end_coupled()
        device.refresh()
        if not answers:
            return b""
        return b";".join(answers) + (b"" if unterminated else b"\n")

    def _end_coupled(self) -> None:
        try:
            self._device.end_coupled()
        except ScpiError as error:
            self._device.status.report(error)

    def _do(
        self,
        command: Command,
        query: bool,
        suffixes: tuple[int, ...],
        elements: list[Element],
        output_waiting: bool,
    ) -> bytes | None:
        if query and (limit := _asked_limit(command, elements)) is not None:
            return limit.encode("ascii")
        parameters = command.query_parameters if query else command.parameters
        required = None if query else command.required
        call = Call(
            suffixes=suffixes,
            values=_accept(parameters, required, elements),
            output_waiting=output_waiting,
        )
        if query and command.answer is not None:
            answer = command.answer(call)
            return answer.encode("ascii") if isinstance(answer, str) else answer
        if command.execute is not None:
            command.execute(call)
        return None


def _walk(header: str, path: tuple[str, ...]) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Return a header's full mnemonics and the path that the next header starts from."""
    if header.startswith("*"):
        return (header,), path
    written = tuple(header.removeprefix(":").split(":"))
    full = written if header.startswith(":") else path + written
    return full, full[:-1]


def _asked_limit(command: Command, elements: list[Element]) -> str | None:
    """Return the answer to '<header>? MIN', MAX or DEF; None when it is another query."""
    if command.query_parameters or len(command.parameters) != 1 or len(elements) != 1:
        return None
    parameter, element = command.parameters[0], elements[0]
    if not isinstance(parameter, Number) or not isinstance(element, WordElement):
        return None
    value = parameter.limit(element.text)
    return format_integer(int(value)) if parameter.whole else format_real(value)


def _accept(
    parameters: tuple[Parameter, ...], required: int | None, elements: list[Element]
) -> tuple[Value, ...]:
    if len(elements) > len(parameters):
        raise ScpiError(-108)
    if len(elements) < (len(parameters) if required is None else required):
        raise ScpiError(-109)
    return tuple(
        parameter.accept(element) for parameter, element in zip(parameters, elements, strict=False)
    )
