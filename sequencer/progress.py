"""Follow a run by its events: what a view needs to know, and nothing of how it looks."""

import time
from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from pulsetally.sequencer.analysis.counting import CountStatistics, full_count
from pulsetally.sequencer.events import (
    ContactChecked,
    CyclingBegan,
    Event,
    FindingKind,
    Found,
    PairsSent,
    PersonAnswered,
    PersonAsked,
    PulseArmed,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RoundsSkipped,
    RunBegan,
    RunEnded,
    ShotTaken,
    StopAsked,
    WaitBegan,
)
from pulsetally.sequencer.quantities import show_duration, show_quantity


@dataclass(slots=True)
class Progress:
    """How a run stands.

    rounds: planned; done: finished. seconds: as planned, None where nobody knows. round: the
    one that goes on. ends: end voltages of its current read, volts. crossings: full counts so
    far at this setting, pulses. asking: what a person is asked for, or empty. lines: what was
    said, oldest first.
    """

    rounds: int
    seconds: float | None
    clock: Callable[[], float] = time.monotonic
    done: int = 0
    round: int = 0
    attempt: int = 1
    swept: tuple[str, ...] = ()
    units: Mapping[str, str] = field(default_factory=dict)
    setting: str = ""
    pulses: int = 0
    stepped: int = 0
    doing: str = "connecting"
    threshold: float | None = None
    level: float = 0.0
    at_most: int = 0
    ends: list[float] = field(default_factory=list)
    crossings: list[float] = field(default_factory=list)
    counts: Counter[int] = field(default_factory=Counter)
    stopping: bool = False
    asking: str = ""
    ended: RunEnded | None = None
    lines: list[str] = field(default_factory=list)
    _began: float = 0.0
    _preset: bool = False
    _pending: ReadFinished | None = None

    def __post_init__(self) -> None:
        self._began = self.clock()

    @property
    def statistics(self) -> CountStatistics | None:
        """Return mean and scatter of the full counts so far."""
        return full_count(self.crossings)

    @property
    def seconds_left(self) -> float | None:
        """Estimate the time left, from the pace so far or, before there is one, the plan."""
        if self.ended:
            return 0.0
        elapsed = self.clock() - self._began
        if not self.done:
            return None if self.seconds is None else max(0.0, self.seconds - elapsed)
        return elapsed / self.done * (self.rounds - self.done)

    def take(self, event: Event) -> list[str]:
        """Take in an event; return the lines it is worth."""
        said = self._said(event)
        self.lines += said
        del self.lines[:-100]
        return said

    def _said(self, event: Event) -> list[str]:
        match event:
            case RunBegan():
                return [f"{role}: {who}" for role, who in event.identities.items()]
            case RoundBegan():
                return self._begin(event)
            case PulseArmed():
                self.doing = {
                    Role.PRESET: "presetting",
                    Role.STEP: "stepping",
                    Role.READ: "reading",
                    Role.CONTACT: "looking for contact",
                    Role.PUND: "measuring the switched charge",
                    Role.LOOP: "measuring a loop",
                    Role.CYCLE: "cycling",
                }[event.role]
                if event.role is not Role.READ:
                    self.ends.clear()
                    self.threshold = None
            case ShotTaken():
                self._shot(event)
            case WaitBegan():
                self.doing = f"waiting for {show_duration(event.seconds)}"
                self.ends.clear()
                return [f"round {event.round}: {self.doing}"] if event.seconds >= 60 else []
            case ReadFinished():
                return [self._read(event)]
            case ContactChecked():
                return _contact_lines(event)
            case Found():
                return [finding_line(event.round, event.kind, event.values, self.units)]
            case CyclingBegan():
                pairs = "1 pair" if event.pairs == 1 else f"{event.pairs:,} pairs"
                self.doing = f"cycling {pairs}"
                self.ends.clear()
                return [
                    f"round {event.round}: {self.doing} after {event.done:,}, which takes"
                    f" {show_duration(event.seconds)}"
                ]
            case PairsSent():
                self.doing = f"cycling: {event.done:,} of {event.planned:,} pairs sent"
            case PersonAsked():
                self.asking = event.message
                return [
                    f"round {event.round}: the output is off. {event.message} Then press Enter;"
                    f" there are {show_duration(event.seconds)}."
                ]
            case PersonAnswered():
                self.asking = ""
                return [f"round {event.round}: " + ("answered" if event.answered else "no answer")]
            case RoundsSkipped():
                self.rounds -= event.count
                return [f"{event.count} rounds are not needed: {event.reason}"]
            case RoundFinished():
                self.done += 1
                if self._pending is not None:
                    # Only now is it known that the round counts.
                    self.counts[self._pending.count] += 1
                    if self._pending.crossing is not None:
                        self.crossings.append(self._pending.crossing)
                self._pending = None
            case RoundSpoiled():
                # Whoever was asked isn't any more.
                self._pending, self.asking = None, ""
                return [f"round {event.round} is spoiled: {event.reason}"]
            case StopAsked():
                self.stopping = True
                return [
                    "stopping now"
                    if event.at_once
                    else "stopping after this round; press Ctrl-C again to stop at once"
                ]
            case RunEnded():
                self.ended, self.asking = event, ""
                self.doing = event.state.value
        return []

    def _begin(self, event: RoundBegan) -> list[str]:
        self.round, self.attempt, self.stepped = event.round.number, event.attempt, 0
        self.ends.clear()
        self.threshold = None
        self._set(event.round.settings)
        self._preset, self._pending = event.round.fills, None
        again = f" again (attempt {event.attempt})" if event.attempt > 1 else ""
        return [f"round {self.round} begins{again}"] if again else []

    def _set(self, settings: Mapping[str, float]) -> None:
        setting = ", ".join(
            f"{name} = {show_setting(name, settings[name], self.units)}"
            for name in self.swept
            if name in settings
        )
        if setting != self.setting:
            # Counts at different settings have no common mean.
            self.setting = setting
            self.crossings.clear()
            self.counts.clear()

    def _shot(self, event: ShotTaken) -> None:
        sent = max(1, len(event.ends))
        self.pulses += sent
        if event.role is Role.STEP:
            self.stepped += sent
        if event.role is Role.READ and event.ends:
            self.ends += [each.volts for each in event.ends]
            self.threshold = event.threshold
            self.at_most = event.at_most or 0

    def _read(self, event: ReadFinished) -> str:
        self._set(event.settings)
        begin = f"round {event.round} of {self.rounds}"
        if self.setting:
            begin += f" ({self.setting})"
        if not event.reached:
            return f"{begin}: {show_quantity(event.threshold, 'V')} not reached in {event.count}"
        count = "not to be interpolated" if event.crossing is None else f"{event.crossing:.2f}"
        if event.stepped == 0 and event.first:
            if self._preset and event.reached:
                self._pending = event
            return f"{begin}: full after {_many(event.count, 'pulse')}, crossing {count}"
        before = f"after {event.stepped} stepped, " if event.stepped else ""
        return f"{begin}: {before}{event.count} remaining, crossing {count}"


def _contact_lines(event: ContactChecked) -> list[str]:
    result = event.result
    tau = (
        f"time constant {show_quantity(result.tau, 's', 3)}"
        if result.tau
        else f"time constant below {show_quantity(result.resolution, 's', 3)}"
    )
    if result.expected_tau is not None:
        tau += f", expected {show_quantity(result.expected_tau, 's', 3)}"
    lines = [f"round {event.round}: contact {result.verdict}, {tau}"]
    return [*lines, f"round {event.round}: {result.note}"] if result.note else lines


def finding_line(
    round_number: int,
    kind: FindingKind,
    values: Mapping[str, object],
    units: Mapping[str, str],
) -> str:
    """Write what was measured beside a count as one line."""
    begin = f"round {round_number}: "
    if "problem" in values:
        return f"{begin}{kind.value} can't be told: {values['problem']}"
    match kind:
        case FindingKind.PUND:
            density = show_quantity(_number(values, "switched_polarization") * 1e2, "", 4)
            charge = show_quantity(_number(values, "switched_coulombs"), "C", 4)
            return f"{begin}switched charge {charge}, {density} uC/cm2"
        case FindingKind.LOOP:
            remanent = show_quantity(_number(values, "remanent_polarization") * 1e2, "", 4)
            up, down = (
                show_quantity(_number(values, f"coercive_{way}_volts"), "V", 3)
                for way in ("up", "down")
            )
            return f"{begin}remanent polarization {remanent} uC/cm2, coercive {up} and {down}"
        case FindingKind.CYCLING:
            return f"{begin}{pairs_words(values)} pairs: {values['ended']}"
        case FindingKind.TUNE:
            value = values["value"]
            if value is None:
                return f"{begin}{values['setting']} was not found: {values['status']}"
            shown = show_setting(str(values["setting"]), _number(values, "value"), units)
            words = f"{begin}{values['setting']} = {shown} ({values['status']})"
            count = values["count"]
            return words if count is None else f"{words}, full count {count:.2f}"


def pairs_words(values: Mapping[str, object]) -> str:
    """Write how many pairs went out, as a range where a cycling was cut short."""
    least = f"{_number(values, 'pairs'):,.0f}"
    if "most_pairs" not in values:
        return least
    return f"{least} to {_number(values, 'most_pairs'):,.0f}"


def _many(count: int, thing: str) -> str:
    return f"{count:,} {thing}" if count == 1 else f"{count:,} {thing}s"


def _number(values: Mapping[str, object], name: str) -> float:
    value = values[name]
    return value if isinstance(value, float) else 0.0


def show_setting(name: str, value: float, units: Mapping[str, str]) -> str:
    """Write a swept setting's value with its unit. units: of parameters; pulses' are known."""
    from pulsetally.sequencer.steps import PULSE_KINDS

    if name == "cycles":
        return f"{value:,.0f}"
    kind = PULSE_KINDS.get(name.rpartition(".")[2]) if "." in name else None
    return show_quantity(value, kind.unit if kind else units.get(name, ""))


def printable(text: str, most: int = 500) -> str:
    """Make a text from a file or an instrument harmless: no control character survives.

    Escape sequences, bells, line ends and marks that turn the direction of writing become
    visible stand-ins; texts over so many characters are cut.
    """
    shown = "".join(each if each.isprintable() else "\N{REPLACEMENT CHARACTER}" for each in text)
    return shown if len(shown) <= most else shown[: most - 1] + "…"
