"""Whoever may answer what a recipe asks: a person at a terminal, nobody, or a rehearsal."""

import contextlib
import os
import select
import sys
from typing import Protocol


class Person(Protocol):
    """Somebody who may answer."""

    def ask(self) -> None:
        """Forget what was said before; an answer counts from now on."""

    def answered(self) -> bool:
        """Say whether the person has answered since."""


class Nobody:
    """Nobody is there: what is asked is never answered."""

    def ask(self) -> None:
        """Do nothing."""

    def answered(self) -> bool:
        """Say that nobody has answered."""
        return False


class AlwaysReady:
    """Somebody who answers at once, as in a rehearsal."""

    def ask(self) -> None:
        """Do nothing."""

    def answered(self) -> bool:
        """Say that somebody has answered."""
        return True


class AtTerminal:
    """A person who presses Enter at the terminal that standard input comes from."""

    def ask(self) -> None:
        """Forget what was typed before: it was no answer to this."""
        self._read()

    def answered(self) -> bool:
        """Say whether a line has been typed since."""
        return b"\n" in self._read()

    @staticmethod
    def _read() -> bytes:
        typed = b""
        # The system stops a program in the background that reads from its terminal, and so would
        # end a night's run; a terminal that has gone says nothing either.
        with contextlib.suppress(OSError):
            while os.tcgetpgrp(0) == os.getpgrp() and select.select([0], [], [], 0)[0]:
                # Not through Python's own buffer, which select can't look into.
                more = os.read(0, 4096)
                if not more:
                    break
                typed += more
        return typed


def whoever_is_there() -> Person:
    """Return the person at this terminal, or nobody where there is none."""
    return AtTerminal() if sys.stdin is not None and sys.stdin.isatty() else Nobody()
