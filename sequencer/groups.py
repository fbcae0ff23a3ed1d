"""Rounds that belong together: a cycling that may end early, a tune that chooses its values.

A group hears what its rounds found, decides without any instrument what comes next, and says
at its end what it came to.
"""

from collections.abc import Iterator
from typing import Protocol

from pulsetally.sequencer.analysis.counting import ReadCount
from pulsetally.sequencer.analysis.tuning import TuneStatus, Tuning
from pulsetally.sequencer.events import Event, FindingKind, Found
from pulsetally.sequencer.rounds import Cycle, Cycling, Pulse, Pund, Read, Round, Tune


class Group(Protocol):
    """What the engine tells a group, and asks it. reason: why rounds were not needed."""

    reason: str

    def holds(self, each: Round) -> bool:
        """Say whether a planned round belongs to it."""

    def next_round(self, planned: Round) -> Round | None:
        """Return the round to do in place of a planned one, or None where it isn't needed."""

    def counted(self, read: Read, count: ReadCount) -> None:
        """Hear how many pulses of a read filled the cell."""

    def switched(self, pund: Pund, coulombs: float | None) -> None:
        """Hear a switched charge; None where it could not be told."""

    def cycled(self, least: int, most: int) -> None:
        """Hear how many pairs have gone out in all, at least and at most."""

    def broken(self, why: str) -> None:
        """Hear that the run ends in the middle of the group; why is empty after a stop."""

    def ends_at_lost_contact(self, why: str) -> bool:
        """Hear that the cell is open or short; say whether that ends the group and no more."""

    def findings(self) -> Iterator[Event]:
        """Say what it came to."""


_What = tuple[str, float | None, tuple[tuple[str, float], ...]]


def _what(pulse: Pulse, settings: dict[str, float], threshold: float | None = None) -> _What:
    """Return what tells apart the measurements of a pause, whatever pairs went before it."""
    others = sorted((name, value) for name, value in settings.items() if name != "cycles")
    return pulse.name, threshold, tuple(others)


def group_of(each: Round) -> Group | None:
    """Return a new group for a round that begins one, or None."""
    if each.tune is not None:
        return TuneGroup(each.tune)
    return CyclingGroup(each.cycling) if each.cycling is not None else None


class CyclingGroup:
    """Cycle until the last pair or until the cell is worn out."""

    def __init__(self, cycling: Cycling) -> None:
        self._cycling = cycling
        self.reason = ""
        self._least = self._most = 0
        self._lost = False
        # By what was measured: a pause may do so with several pulses or settings.
        self._first_charges: dict[_What, float] = {}
        self._first_counts: dict[_What, float] = {}
        self._last: Round | None = None

    def holds(self, each: Round) -> bool:
        """Say whether a planned round belongs to it."""
        return each.cycling is self._cycling

    def next_round(self, planned: Round) -> Round | None:
        """Return the planned round, or None once the cell is worn out."""
        if self._lost:
            return None
        if self.reason and self._last is not None:
            # The rest of a pause is still done: what it measures belongs to the cell's end.
            goes_on = any(isinstance(action, Cycle) for action in planned.actions)
            if goes_on or planned.settings["cycles"] != self._last.settings["cycles"]:
                return None
        self._last = planned
        return planned

    def counted(self, read: Read, count: ReadCount) -> None:
        """Stop where a full count is too far from the first one."""
        what, most = _what(read.pulse, read.settings, read.threshold), self._cycling.most_off
        first = self._first_counts.get(what)
        if first is None:
            if count.crossing is not None:
                self._first_counts[what] = count.crossing
            return
        if most is None or self.reason:
            return
        if count.crossing is None:
            self.reason = "the cell no longer gives a full count"
        elif abs(count.crossing - first) > most * first:
            self.reason = f"the full count is {count.crossing:.2f} and was {first:.2f} at first"

    def switched(self, pund: Pund, coulombs: float | None) -> None:
        """Stop where the switched charge is too small a share of the first one."""
        what, least = _what(pund.pulse, pund.settings), self._cycling.least_charge
        first = self._first_charges.get(what)
        if first is None:
            # Of a charge that is nothing but noise no share can be told.
            if coulombs is not None and coulombs > 0:
                self._first_charges[what] = coulombs
            return
        if least is None or self.reason:
            return
        if coulombs is None:
            self.reason = "the switched charge can't be told any more"
        elif coulombs < least * first:
            self.reason = f"the switched charge is {coulombs / first:.0%} of the first"

    def cycled(self, least: int, most: int) -> None:
        """Remember how many pairs have gone out in all."""
        self._least, self._most = least, most

    def broken(self, why: str) -> None:
        """Remember why it ends, unless it had ended before."""
        self.reason = self.reason or why.rstrip(".")

    def ends_at_lost_contact(self, why: str) -> bool:
        """Stop where the recipe says that a lost cell ends the cycling."""
        if self._cycling.contact:
            self.reason, self._lost = why, True
        return self._cycling.contact

    def findings(self) -> Iterator[Event]:
        """Say how many pairs went out, and why not more."""
        if self._last is None:
            return
        values: dict[str, float | str | None] = {
            "pairs": float(self._least),
            "planned_pairs": float(self._cycling.pairs),
            "ended": self.reason or self._without_reason(),
        }
        if self._most != self._least:
            # It was cut short where nobody could count: pairs are those that surely went out.
            values["most_pairs"] = float(self._most)
        yield Found(
            round=self._last.number,
            kind=FindingKind.CYCLING,
            pulse="",
            settings=self._last.settings,
            values=values,
        )

    def _without_reason(self) -> str:
        sent = self._least >= self._cycling.pairs
        return "all pairs were sent" if sent else "the run was stopped"


class TuneGroup:
    """Choose the value of a setting from round to round."""

    def __init__(self, tune: Tune) -> None:
        self._tune = tune
        self.reason = ""
        self._tuning = Tuning(
            low=tune.low,
            high=tune.high,
            target=tune.target,
            within=tune.within,
            at_most=tune.at_most,
            logarithmic=tune.low > 0,
        )
        self._value: float | None = None
        self._last: Round | None = None

    def holds(self, each: Round) -> bool:
        """Say whether a planned round belongs to it."""
        return each.tune is self._tune

    def next_round(self, planned: Round) -> Round | None:
        """Return the planned round at the next value, or None when the search is over."""
        self._value = self._tuning.next_value()
        if self._value is None:
            found = self._tuning.result().status is TuneStatus.FOUND
            self.reason = "the value was found before" if found else "no value in the range does it"
            return None
        self._last = planned.tuned(self._value)
        return self._last

    def counted(self, read: Read, count: ReadCount) -> None:
        """Hear how many pulses filled the cell at the present value."""
        if self._value is not None:
            self._tuning.add(self._value, count.crossing, too_many=not count.reached)

    def switched(self, pund: Pund, coulombs: float | None) -> None:
        """Take no notice: a tune measures counts."""

    def cycled(self, least: int, most: int) -> None:
        """Take no notice: a tune doesn't cycle."""

    def broken(self, why: str) -> None:
        """Take no notice: what was seen so far is no result."""

    def ends_at_lost_contact(self, why: str) -> bool:
        """Let the run end: nothing can be tuned without a cell."""
        return False

    def findings(self) -> Iterator[Event]:
        """Say which value was found, and how sure that is."""
        if self._last is None or self._tuning.next_value() is not None:
            # Stopped on the way: what was seen so far is no result.
            return
        result = self._tuning.result()
        yield Found(
            round=self._last.number,
            kind=FindingKind.TUNE,
            pulse="",
            settings=self._last.settings,
            values={
                "setting": self._tune.name,
                "wanted_count": self._tune.target,
                "status": result.status.value,
                "value": result.value,
                "uncertainty": result.uncertainty,
                "count": result.count,
                "rounds": float(result.rounds),
            },
        )
