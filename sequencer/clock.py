"""Tell and spend the bench's time: a real table's, or that of a simulated one.

A simulated bench has a clock of its own, so that an eight-hour recipe is rehearsed in seconds;
the engine can't tell the two apart.
"""

import math
import time
from collections.abc import Callable
from typing import Protocol

from pulsetally.drivers.errors import BadReply
from pulsetally.drivers.link import Link
from pulsetally.drivers.numbers import NumberError, parse_finite

# How soon a wait notices that it shall end.
_SLICE_SECONDS = 0.05


class Clock(Protocol):
    """Say what time it is on the bench, in seconds from any fixed moment, and let it pass.

    piece_seconds: how long a wait may be in one piece, before the lines want to be used.
    """

    @property
    def piece_seconds(self) -> float:
        """Return the longest wait in one piece, in seconds."""

    def now(self) -> float:
        """Return the time in seconds; it never goes back."""

    def sleep(self, seconds: float, ended: Callable[[], bool] = ...) -> None:
        """Let time pass; return early once ended() says so."""


def _never() -> bool:
    return False


class WallClock:
    """The time of a real table."""

    @property
    def piece_seconds(self) -> float:
        """Return how long lines may be idle: routers and instruments drop those that are longer."""
        return 30.0

    def now(self) -> float:
        """Return the time in seconds; it never goes back."""
        return time.monotonic()

    def sleep(self, seconds: float, ended: Callable[[], bool] = _never) -> None:
        """Let time pass; return early once ended() says so."""
        deadline = time.monotonic() + seconds
        while (left := deadline - time.monotonic()) > 0 and not ended():
            time.sleep(min(left, _SLICE_SECONDS))


class BenchClock:
    """The time of a simulated bench, which passes when it is told to."""

    @property
    def piece_seconds(self) -> float:
        """Return no bound: however long a wait, it is over at once."""
        return math.inf

    def __init__(self, link: Link) -> None:
        self._link = link

    def now(self) -> float:
        """Return the time in seconds; it never goes back."""
        return self._ask(":CLOCk:TIME?")

    def sleep(self, seconds: float, ended: Callable[[], bool] = _never) -> None:
        """Let time pass, at no cost."""
        if seconds > 0 and not ended():
            # The query's answer says that the time has passed.
            self._ask(f":CLOCk:ADVance {seconds:.9G};:CLOCk:TIME?")

    def _ask(self, command: str) -> float:
        answer = self._link.ask(command)
        try:
            return parse_finite(answer)
        except NumberError as error:
            raise BadReply(
                self._link.address, command, str(error), "name the clock of a simulated bench"
            ) from error
