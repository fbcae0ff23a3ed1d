"""End safely: outputs off and verified, and signals that ask for an end without breaking a read."""

import contextlib
import signal
from collections.abc import Iterator
from types import FrameType

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import VisaLink
from pulsetally.sequencer.errors import OutputsNotConfirmed

_ATTEMPTS = 3


def quiet(generator: FunctionGenerator, link: VisaLink) -> None:
    """Switch the output off and read that back, over a fresh link if need be.

    Raises OutputsNotConfirmed, naming the instrument, when a few attempts did not do it.
    """
    problem = ""
    for attempt in range(_ATTEMPTS):
        try:
            if attempt or link.tainted:
                link.reopen()
            generator.switch(on=False, joined=False)
        except PulsetallyError as error:
            problem = str(error)
            continue
        # What it was about to send doesn't matter any more; a complaint about it neither.
        with contextlib.suppress(PulsetallyError):
            generator.abort()
        return
    raise OutputsNotConfirmed(generator.address, problem)


class StopSwitch:
    """Remember that somebody asked for an end.

    A flag and not an exception: an exception in the middle of an exchange would leave the
    instrument's answer on the line.
    """

    def __init__(self) -> None:
        self.after_round = False
        self.at_once = False
        self.reason = ""

    def press(self, reason: str) -> None:
        """Ask for an end after this round; asked a second time, at once."""
        self.at_once = self.after_round
        self.after_round, self.reason = True, reason

    def press_hard(self, reason: str) -> None:
        """Ask for an end at once."""
        self.after_round = self.at_once = True
        self.reason = reason


_NAMES = {
    signal.SIGINT: "Ctrl-C",
    signal.SIGTERM: "the system asked it to end (SIGTERM)",
    signal.SIGHUP: "the terminal was closed (SIGHUP)",
    signal.SIGQUIT: "somebody asked it to quit (SIGQUIT)",
}


@contextlib.contextmanager
def signals(stop: StopSwitch) -> Iterator[None]:
    """Turn Ctrl-C, SIGTERM, SIGHUP and SIGQUIT into presses of the switch while the block runs."""

    def handle(number: int, frame: FrameType | None) -> None:
        reason = _NAMES[signal.Signals(number)]
        if number == signal.SIGINT:
            stop.press(reason)
        else:
            stop.press_hard(reason)

    # A signal that is ignored stays so: whoever started us with nohup wants it that way.
    ours = [number for number in _NAMES if signal.getsignal(number) is not signal.SIG_IGN]
    before = {number: signal.signal(number, handle) for number in ours}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
