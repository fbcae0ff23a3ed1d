"""Going quiet, and signals that are flags."""

import os
import signal
import socket
from collections.abc import Callable

import pytest

from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import VisaLink
from pulsetally.sequencer.errors import OutputsNotConfirmed
from pulsetally.sequencer.safety import StopSwitch, quiet, signals
from tests.drivers.misbehaving import server
from tests.simulated import scpi99


class Output:
    """A generator's output that ignores its first few commands to switch off."""

    def __init__(self, deaf_to: int = 0, closes: int = 0) -> None:
        self.on, self._deaf, self._closes = True, deaf_to, closes

    def answer(self, connection: socket.socket, line: bytes) -> None:
        if line.startswith(b":OUTPut1:STATe OFF"):
            if self._closes:
                self._closes -= 1
                connection.shutdown(socket.SHUT_RDWR)
            elif self._deaf:
                self._deaf -= 1
            else:
                self.on = False
        elif line == b":OUTPut1:STATe?":
            connection.sendall(b"1\n" if self.on else b"0\n")
        elif line == b"*IDN?":
            connection.sendall(b"A,B,C,D\n")


def go_quiet(answer: Callable[[socket.socket, bytes], None]) -> None:
    with server(answer) as address:
        link = VisaLink(address, seconds=0.2)
        try:
            quiet(FunctionGenerator(link, scpi99(), limit_volts=5.0), link)
        finally:
            link.close()


@pytest.mark.parametrize("output", [Output(), Output(deaf_to=2), Output(closes=1)])
def test_quiet_tries_again_and_over_a_fresh_link(output: Output) -> None:
    go_quiet(output.answer)
    assert not output.on


def test_an_output_that_stays_on_is_said_loudly_with_its_address() -> None:
    words = r"OUTPUTS NOT CONFIRMED OFF: .* at TCPIP::127\.0\.0\.1::\d+::SOCKET .* by hand"
    with pytest.raises(OutputsNotConfirmed, match=words):
        go_quiet(Output(deaf_to=99).answer)


def test_a_generator_that_is_gone_is_said_loudly() -> None:
    with server(Output().answer) as address:
        link = VisaLink(address, seconds=0.2)
    with pytest.raises(OutputsNotConfirmed, match="by hand"):
        quiet(FunctionGenerator(link, scpi99(), limit_volts=5.0), link)
    link.close()


def test_ctrl_c_asks_first_for_the_end_of_the_round_and_then_for_now() -> None:
    before = signal.getsignal(signal.SIGINT)
    stop = StopSwitch()
    with signals(stop):
        os.kill(os.getpid(), signal.SIGINT)
        assert (stop.after_round, stop.at_once) == (True, False)
        os.kill(os.getpid(), signal.SIGINT)
        assert stop.at_once
    assert signal.getsignal(signal.SIGINT) is before


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGQUIT])
def test_other_signals_ask_for_an_end_now(number: signal.Signals) -> None:
    stop = StopSwitch()
    with signals(stop):
        os.kill(os.getpid(), number)
        assert stop.at_once
        assert number.name in stop.reason


def test_a_signal_that_is_ignored_stays_ignored() -> None:
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        stop = StopSwitch()
        with signals(stop):
            os.kill(os.getpid(), signal.SIGHUP)
            assert not stop.after_round
        assert signal.getsignal(signal.SIGHUP) is signal.SIG_IGN
    finally:
        signal.signal(signal.SIGHUP, before)
