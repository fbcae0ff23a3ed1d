"""Whatever a line's library raises, a caller sees one of our errors."""

import struct
import termios
from collections.abc import Callable

import pytest
import serial  # type: ignore[import-untyped]  # it ships without types
from pyvisa import constants, errors

from pulsetally.drivers.channel import Channel, Pace
from pulsetally.drivers.errors import CAUSES, BadReply, LinkClosed, LinkError, NoAnswer
from pulsetally.drivers.link import VisaLink

ADDRESS = "TCPIP::192.0.2.1::5025::SOCKET"
RAISED: list[tuple[Exception, type[Exception]]] = [
    (ConnectionResetError(104, "Connection reset by peer"), LinkClosed),
    (BrokenPipeError(32, "Broken pipe"), LinkClosed),
    (OSError(5, "Input/output error"), LinkClosed),
    (EOFError("end"), LinkClosed),
    (RuntimeError("Connection was dropped by server."), LinkClosed),
    (serial.SerialException("device reports readiness to read but returned no data"), LinkClosed),
    (termios.error(5, "Input/output error"), LinkClosed),
    (struct.error("unpack requires a buffer of 4 bytes"), LinkClosed),
    (errors.VisaIOError(constants.StatusCode.error_connection_lost), LinkClosed),
    (errors.InvalidSession(), LinkClosed),
    (Exception("could not connect"), LinkClosed),
    (errors.VisaIOError(constants.StatusCode.error_timeout), NoAnswer),
    (serial.SerialTimeoutException("Write timeout"), NoAnswer),
    (TimeoutError("timed out"), NoAnswer),
    (MemoryError(), BadReply),
]


class Failing:
    """A channel whose given action raises."""

    slowest = 1e6

    def __init__(self, action: str, error: Exception) -> None:
        self._action, self._error = action, error

    def _do(self, action: str) -> None:
        if action == self._action:
            raise self._error

    def send(self, data: bytes, pace: Pace) -> None:
        self._do("write")

    def read_line(self, limit: int, pace: Pace) -> bytes:
        self._do("read")
        return b"1"

    read_message = read_line

    def read_exactly(self, count: int, pace: Pace) -> bytes:
        self._do("read")
        return b"#0"

    def waiting(self) -> bool:
        self._do("look")
        return False

    def close(self) -> None:
        """Succeed: a channel's close never raises."""


@pytest.mark.parametrize(("error", "kind"), RAISED, ids=lambda value: type(value).__name__)
@pytest.mark.parametrize("action", ["look", "write", "read"])
@pytest.mark.parametrize("ask", [VisaLink.ask, VisaLink.ask_block])
def test_every_library_error_becomes_ours_with_address_command_and_remedy(
    error: Exception, kind: type[LinkError], action: str, ask: Callable[[VisaLink, str], object]
) -> None:
    def opener(address: str, public: bool) -> Channel:
        return Failing(action, error)

    link = VisaLink(ADDRESS, exclusive=False, opener=opener)
    with pytest.raises(kind) as caught:
        ask(link, "VOLT?")
    assert type(caught.value) is kind
    assert str(caught.value).startswith(f"{ADDRESS} (after 'VOLT?'): ")
    assert "To fix it, check that" in str(caught.value)
    assert caught.value.__cause__ is error
    assert link.tainted
    link.close()


@pytest.mark.parametrize(
    "error", [row[0] for row in RAISED], ids=lambda error: type(error).__name__
)
def test_every_library_error_while_opening_becomes_ours(error: Exception) -> None:
    def opener(address: str, public: bool) -> Channel:
        raise error

    with pytest.raises(
        LinkError, match=r"can't be opened \(.+\)\. To fix it, check that"
    ) as caught:
        VisaLink(ADDRESS, exclusive=False, opener=opener)
    assert caught.value.__cause__ is error


def test_an_error_while_closing_is_no_obstacle() -> None:
    from pulsetally.drivers.channel import VisaChannel

    class Resource:
        resource_name = "TCPIP::192.0.2.1::inst0::INSTR"

        def close(self) -> None:
            raise BrokenPipeError

    VisaChannel(Resource()).close()


def test_the_last_cause_fits_everything_and_each_one_says_what_to_do() -> None:
    assert CAUSES[-1][:2] == ("Exception", "")
    for _, _, _, remedy in CAUSES:
        assert remedy.startswith(("check ", "install ", "use ", "give "))
