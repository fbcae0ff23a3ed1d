"""Say which faults the simulated bench is to have, and decide at which exchange each happens.

An exchange is one complete program message that an instrument gets, by whatever connection;
exchanges are counted from 1 for each instrument. What a fault does is in mishaps.py.

A fault is due from its exchange on and happens at the first one that has what it spoils: an
answer to be cut, a trigger to be ignored. Others happen at that very exchange. At most one
fault of the line happens in an exchange; another that is due waits for the next one.
"""

import math
from collections.abc import Collection, Iterable
from dataclasses import dataclass, replace

import numpy as np

INSTRUMENTS = ("generator", "oscilloscope")

# No number, no block, no text that any instrument would answer.
GARBAGE = "\x15\x81~?\xfe%%;;\n"

# Beyond this nobody waits for an answer, and an instrument would rather be repaired.
LONGEST_SECONDS = 86_400.0
SMALLEST_SHORT_OHMS, LARGEST_SHORT_OHMS = 1e-3, 1e6
_LONGEST_MESSAGE = 65_536
_LARGEST_ERROR = 32_767


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """What there is to know of one kind of fault.

    word: its name on the control port, the short form in capitals.
    takes: the values of a Fault that it has a use for; the control port sets the first.
    breaks_cell: it happens to the cell, so that an instant can be its occasion too.
    """

    word: str
    takes: tuple[str, ...] = ()
    breaks_cell: bool = False


KINDS: dict[str, Kind] = {
    "no answer": Kind(word="NOANswer", takes=("followed",)),
    "late answer": Kind(word="LATE", takes=("seconds",)),
    "cut block": Kind(word="CUT", takes=("share",)),
    "closed connection": Kind(word="CLOSe", takes=("followed",)),
    "reset connection": Kind(word="RESet", takes=("followed",)),
    "garbage": Kind(word="GARBage", takes=("message",)),
    "error entry": Kind(word="ERRor", takes=("number", "message")),
    "trigger ignored": Kind(word="TRIGger"),
    "power lost": Kind(word="POWer", takes=("seconds",)),
    "cell opens": Kind(word="OPEN", breaks_cell=True),
    "cell shorts": Kind(word="SHORt", takes=("ohms",), breaks_cell=True),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One fault that is to happen.

    kind: a key of KINDS.
    instrument: one of INSTRUMENTS, whose exchanges are meant: at the exchange-th one, from
    1, once; or at each one with this chance, above 0 to 1, again and again.
    at_seconds: instead of these, for a fault of the cell: virtual time, s.

    What a kind has no use for stays at its default:
    seconds: real time by which an answer is late, above 0. For power: how long it is away,
    by the wall clock or by the virtual one, whichever gets there first.
    share: of an answer's bytes that still come, from 0 to below 1.
    followed: whether the instrument does what the message says before the line fails.
    number, message: an error's number (-32768 to 32767, not 0) and what it adds to the text;
    garbage: the characters, each of them one byte; '' for GARBAGE.
    ohms: the short across the cell, 1e-3 to 1e6.
    Raises ValueError.
    """

    kind: str
    instrument: str | None = None
    exchange: int | None = None
    chance: float | None = None
    at_seconds: float | None = None
    seconds: float = 1.0
    share: float = 0.5
    followed: bool = True
    number: int = -310
    message: str = ""
    ohms: float = 5.0

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise ValueError(f"kind is {self.kind!r}; it must be one of {', '.join(KINDS)}")
        self._check_occasion()
        self._check_values()

    def _check_occasion(self) -> None:
        occasions = [
            name for name in ("exchange", "chance", "at_seconds") if getattr(self, name) is not None
        ]
        if len(occasions) != 1:
            found = " and ".join(occasions) or "none"
            raise self._wrong(
                f"has {found} of exchange, chance and at_seconds; give exactly one of them"
            )
        if self.at_seconds is not None:
            if not KINDS[self.kind].breaks_cell:
                raise self._wrong("has at_seconds; only a fault of the cell may, give an exchange")
            if self.instrument is not None:
                raise self._wrong("has at_seconds and an instrument; leave the instrument out")
            if not 0 <= self.at_seconds < math.inf:
                raise self._wrong(f"has at_seconds {self.at_seconds}; it must be 0 or more")
            return
        if self.instrument not in INSTRUMENTS:
            raise self._wrong(
                f"has instrument {self.instrument!r}; it must be one of {', '.join(INSTRUMENTS)}"
            )
        if self.exchange is not None and self.exchange < 1:
            raise self._wrong(f"has exchange {self.exchange}; they are counted from 1")
        if self.chance is not None and not 0 < self.chance <= 1:
            raise self._wrong(f"has chance {self.chance}; it must be above 0, and 1 at most")

    def _check_values(self) -> None:
        takes = KINDS[self.kind].takes
        for name in ("seconds", "share", "followed", "number", "message", "ohms"):
            default = type(self).__dataclass_fields__[name].default
            if name not in takes and getattr(self, name) != default:
                allowed = f"it takes {', '.join(takes)}" if takes else "it takes none"
                raise self._wrong(f"has no use for a value of {name}; {allowed}")
        if not 0 < self.seconds <= LONGEST_SECONDS:
            raise self._wrong(
                f"has seconds {self.seconds}; it must be above 0, and {LONGEST_SECONDS:g} at most"
            )
        if not 0 <= self.share < 1:
            raise self._wrong(f"has share {self.share}; it must be from 0 to below 1")
        if not -_LARGEST_ERROR - 1 <= self.number <= _LARGEST_ERROR or self.number == 0:
            raise self._wrong(
                f"has number {self.number}; it must be from -32768 to 32767 and not 0"
            )
        if not SMALLEST_SHORT_OHMS <= self.ohms <= LARGEST_SHORT_OHMS:
            raise self._wrong(
                f"has ohms {self.ohms}; it must be from {SMALLEST_SHORT_OHMS:g} "
                f"to {LARGEST_SHORT_OHMS:g}"
            )
        if len(self.message) > _LONGEST_MESSAGE or any(ord(c) > 255 for c in self.message):
            raise self._wrong(
                f"has a message that is no {_LONGEST_MESSAGE} bytes at most; "
                "write characters up to \\xff, one for each byte"
            )

    def _wrong(self, problem: str) -> ValueError:
        return ValueError(f"the fault {self.kind!r} {problem}")


class _Entry:
    """A fault that waits for its occasion."""

    def __init__(self, fault: Fault, random: np.random.Generator) -> None:
        self.fault, self._random = fault, random
        self.is_due = False

    def come(self, exchange: int) -> None:
        fault = self.fault
        if fault.chance is not None:
            # Drawn also where an earlier one still waits: what comes later must not depend
            # on what was there to be spoiled.
            self.is_due |= self._random.random() < fault.chance
        elif fault.exchange is not None:
            self.is_due |= fault.exchange <= exchange


class FaultSchedule:
    """Decide what happens at each exchange; it does nothing itself.

    seed: of the chances. Each fault has draws of its own, one at each exchange of its
    instrument, so that one more fault changes nothing about the others.
    happened: the faults so far, each with the exchange at which it happened (None for an
    instant).
    """

    def __init__(self, faults: Iterable[Fault] = (), *, seed: int = 1) -> None:
        self._seed = seed
        self._added = 0
        self._entries: list[_Entry] = []
        self._exchanges = dict.fromkeys(INSTRUMENTS, 0)
        self.happened: list[tuple[Fault, int | None]] = []
        for fault in faults:
            self.add(fault)

    def add(self, fault: Fault) -> None:
        """Add a fault; an exchange that has passed counts as the next one."""
        # A stream of its own: noise and domains are the same with and without faults. Of a
        # spawn key, since a 0 at the end of (seed, 2, 0) makes no difference to (seed, 2).
        spawned = np.random.SeedSequence(self._seed, spawn_key=(self._added,))
        random = np.random.default_rng(spawned)
        self._entries.append(_Entry(fault, random))
        self._added += 1

    def add_from_now(self, fault: Fault) -> None:
        """Add a fault whose exchange is counted from now; 1 is the next one."""
        if fault.instrument is None or fault.exchange is None:
            raise ValueError("only the exchange of an instrument can be counted from now")
        passed = self._exchanges[fault.instrument]
        self.add(replace(fault, exchange=passed + fault.exchange))

    def clear(self) -> None:
        """Let no fault happen any more; what happened stays counted."""
        self._entries.clear()

    @property
    def pending(self) -> int:
        """How many faults may still happen; one with a chance always may."""
        return len(self._entries)

    def exchanges(self, instrument: str) -> int:
        """Return how many program messages an instrument has got."""
        return self._exchanges[instrument]

    def begin_exchange(self, instrument: str) -> None:
        """Count a program message that has just come."""
        self._exchanges[instrument] += 1
        for entry in self._entries:
            if entry.fault.instrument == instrument:
                entry.come(self._exchanges[instrument])

    def take(
        self, instrument: str, kinds: Collection[str], *, unfollowed: bool = False
    ) -> Fault | None:
        """Have the first due fault of these kinds happen now; return it, None without one.

        unfollowed: only one that keeps the message from being followed.
        """
        for entry in self._entries:
            fault = entry.fault
            if (
                entry.is_due
                and fault.instrument == instrument
                and fault.kind in kinds
                and not (unfollowed and fault.followed)
            ):
                entry.is_due = False
                self._note(entry)
                return fault
        return None

    def take_timed(self, fault: Fault) -> bool:
        """Have a fault with an instant happen now; False when it was cleared."""
        for entry in self._entries:
            if entry.fault is fault:
                self._note(entry)
                return True
        return False

    def _note(self, entry: _Entry) -> None:
        fault = entry.fault
        if fault.chance is None:
            self._entries.remove(entry)
        passed = None if fault.instrument is None else self._exchanges[fault.instrument]
        self.happened.append((fault, passed))
