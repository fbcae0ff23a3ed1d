"""Run a plan on a bench, as an iterator of events.

The engine knows no screen. It asks the logbook to record each event before anybody else sees
it and before the next pulse goes out; however it ends, the output is off and read back as off.
"""

from collections.abc import Callable, Generator, Iterator
from dataclasses import replace
from functools import partial

from pulsetally.drivers.errors import InstrumentError, PulsetallyError
from pulsetally.sequencer import measures
from pulsetally.sequencer.acquisition import Acquisition, single, train
from pulsetally.sequencer.analysis.counting import ReadCount, count_read, passes
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import (
    ContactLost,
    LogbookError,
    OutputsNotConfirmed,
    ShotMissing,
    StopRequested,
)
from pulsetally.sequencer.events import (
    CyclingBegan,
    Event,
    PairsSent,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RoundsSkipped,
    RunBegan,
    RunEnded,
    RunState,
    WaitBegan,
)
from pulsetally.sequencer.groups import Group, group_of
from pulsetally.sequencer.instruments import Instruments
from pulsetally.sequencer.logbook import Recorder
from pulsetally.sequencer.person import Nobody, Person
from pulsetally.sequencer.plan import Plan
from pulsetally.sequencer.rounds import (
    Ask,
    Contact,
    Cycle,
    Loop,
    Preset,
    Pund,
    Read,
    Round,
    Step,
    Wait,
)
from pulsetally.sequencer.safety import StopSwitch

# A round that lost a pulse starts again; one that loses it again and again has a cause.
MOST_ATTEMPTS = 3


def run(
    plan: Plan,
    bench: Bench,
    recorder: Recorder,
    stop: StopSwitch,
    person: Person | None = None,
) -> Generator[Event, None, None]:
    """Carry out a plan; yield what happens. The last event is RunEnded, always recorded.

    person: who answers what the recipe asks; nobody, unless said.
    """
    instruments = Instruments(bench)
    state, reason = RunState.FAILED, ""
    try:
        instruments.open()
        for event in _Conductor(plan, bench, instruments, stop, person or Nobody()).events():
            recorder.record(event)
            yield event
        state = RunState.FINISHED
    except StopRequested as error:
        state, reason = RunState.STOPPED, str(error)
    except GeneratorExit:
        state, reason = RunState.STOPPED, "nobody took its events any more"
        raise
    except PulsetallyError as error:
        reason = str(error)
    except BaseException as error:
        reason = f"{type(error).__name__}: {error}"
        raise
    finally:
        ended = _end(instruments, state, reason)
        try:
            recorder.close(ended)
        except LogbookError as error:
            # The end is told even where it can't be kept, as on a full disk.
            reason = " ".join(each for each in (ended.reason, str(error)) if each)
            ended = replace(ended, state=RunState.FAILED, reason=reason)
            recorder.ended = ended
    yield ended


def _end(instruments: Instruments, state: RunState, reason: str) -> RunEnded:
    outputs_off = True if instruments.reached else None
    try:
        instruments.quiet()
    except OutputsNotConfirmed as error:
        return RunEnded(
            state=RunState.FAILED, reason=reason, outputs_off=False, unconfirmed=str(error)
        )
    finally:
        instruments.close()
    return RunEnded(state=state, reason=reason, outputs_off=outputs_off)


class _Conductor:
    """Take the instruments through the rounds of a plan."""

    def __init__(
        self, plan: Plan, bench: Bench, instruments: Instruments, stop: StopSwitch, person: Person
    ) -> None:
        self._plan, self._bench, self._stop, self._person = plan, bench, stop, person
        self._instruments = instruments
        self._acquisition = Acquisition(bench, instruments, stop)
        # What the rounds of the present cycling or tune have found so far.
        self._group: Group | None = None
        # What the present round has found, told to its group once the round counts.
        self._heard: list[Callable[[Group], None]] = []

    def events(self) -> Iterator[Event]:
        generator, oscilloscope = self._acquisition.generator, self._acquisition.oscilloscope
        identities = {
            "function generator": generator.identify(),
            "oscilloscope": oscilloscope.identify(),
        }
        self._instruments.quiet()
        generator.prepare()
        oscilloscope.prepare()
        yield RunBegan(
            rounds=len(self._plan.rounds),
            most_pulses=self._plan.most_pulses,
            seconds=self._plan.seconds,
            identities=identities,
        )
        skipped = 0
        for planned in self._plan.rounds:
            # Also before the first: somebody may have asked while the lines were opened.
            if self._stop.after_round:
                yield from self._acquisition.tell_stop()
                yield from self._leave_group(skipped)
                raise StopRequested(self._stop.reason)
            if self._group is None or not self._group.holds(planned):
                skipped = yield from self._leave_group(skipped)
                self._group = group_of(planned)
            each = self._group.next_round(planned) if self._group else planned
            if each is None:
                skipped += 1
                continue
            try:
                yield from self._attempts(each)
            except PulsetallyError as error:
                if self._group is not None:
                    stopped = isinstance(error, StopRequested)
                    self._group.broken("" if stopped else f"the run failed: {error}")
                    yield from self._group.findings()
                raise
        yield from self._leave_group(skipped)

    def _leave_group(self, skipped: int) -> Generator[Event, None, int]:
        """Say what a cycling or a tune came to, and which of its rounds weren't needed."""
        if self._group is not None:
            yield from self._group.findings()
            if skipped:
                yield RoundsSkipped(count=skipped, reason=self._group.reason)
        self._group = None
        return 0

    def _attempts(self, each: Round) -> Iterator[Event]:
        for attempt in range(1, MOST_ATTEMPTS + 1):
            self._heard.clear()
            yield RoundBegan(round=each, attempt=attempt)
            try:
                yield from self._round(each)
            except ShotMissing as error:
                reason = self._acquisition.explain(error.problem)
                yield RoundSpoiled(round=each.number, reason=reason)
                if not each.repeatable or attempt == MOST_ATTEMPTS:
                    raise ShotMissing(error.order, reason) from error
                continue
            except ContactLost as error:
                yield RoundSpoiled(round=each.number, reason=str(error))
                if self._group is None or not self._group.ends_at_lost_contact(str(error)):
                    raise
                return
            except (InstrumentError, StopRequested) as error:
                yield RoundSpoiled(round=each.number, reason=str(error))
                raise
            if self._group is not None:
                for tell in self._heard:
                    tell(self._group)
            yield RoundFinished(round=each.number)
            return

    def _round(self, each: Round) -> Iterator[Event]:
        acquisition, number = self._acquisition, each.number
        order, stepped, first = 1, 0, True
        preset = False
        for action in each.actions:
            match action:
                case Wait():
                    acquisition.release()
                    yield WaitBegan(round=number, seconds=action.seconds)
                    yield from acquisition.wait(action.seconds)
                case Preset():
                    yield from acquisition.deliver(
                        single(action.pulse), number=number, order=order, role=Role.PRESET
                    )
                    order, stepped, first, preset = order + 1, 0, True, True
                case Contact():
                    yield from measures.contact(
                        acquisition, self._bench, action, number=number, order=order
                    )
                    order += 1
                case Step():
                    order = yield from self._step(number, order, action)
                    stepped += action.count
                case Read():
                    order, count = yield from self._read(number, order, stepped, first, action)
                    if first and stepped == 0 and preset:
                        self._heard.append(partial(_tell_count, action, count))
                    first = False
                case Pund():
                    charge = yield from measures.pund(
                        acquisition, self._bench, action, number=number, order=order
                    )
                    self._heard.append(partial(_tell_charge, action, charge))
                    # Its pulses drive down as far as they do, which need not be all the way.
                    order, preset = order + 5, False
                case Loop():
                    yield from measures.loop(
                        acquisition, self._bench, action, number=number, order=order
                    )
                    order, preset = order + 2, False
                case Ask():
                    yield from measures.ask(
                        acquisition, self._stop, self._person, action, number=number
                    )
                case Cycle():
                    order = yield from self._cycle(each, order, action)
        acquisition.check_errors()

    def _step(self, number: int, order: int, action: Step) -> Generator[Event, None, int]:
        left = action.count
        while left:
            count = min(left, action.train)
            yield from self._acquisition.deliver(
                train(action.pulse, count), number=number, order=order, role=Role.STEP
            )
            order, left = order + count, left - count
        return order

    def _read(
        self, number: int, order: int, stepped: int, first: bool, action: Read
    ) -> Generator[Event, None, tuple[int, ReadCount]]:
        rising = action.pulse.rising
        ends: list[float] = []
        while len(ends) < action.at_most:
            count = min(action.train, action.at_most - len(ends))
            taken = yield from self._acquisition.deliver(
                train(action.pulse, count),
                number=number,
                order=order,
                role=Role.READ,
                threshold=action.threshold,
                at_most=action.at_most,
            )
            order += count
            ends += [each.volts for each in taken.ends]
            if any(passes(each.volts, action.threshold, rising=rising) for each in taken.ends):
                break
        found = count_read(ends, action.threshold, rising=rising)
        yield ReadFinished(
            round=number,
            pulse=action.pulse.name,
            threshold=action.threshold,
            count=found.count,
            crossing=found.crossing,
            reached=found.reached,
            stepped=stepped,
            first=first,
            settings=action.settings,
            end_voltages=tuple(ends),
        )
        return order, found

    def _cycle(self, each: Round, order: int, action: Cycle) -> Generator[Event, None, int]:
        planned = each.cycling.pairs if each.cycling else action.pairs
        yield CyclingBegan(
            round=each.number,
            pairs=action.pairs,
            done=action.done,
            seconds=action.pairs * action.period,
        )
        try:
            for event in self._acquisition.cycle(action, number=each.number, order=order):
                if isinstance(event, PairsSent):
                    event = replace(event, done=action.done + event.done, planned=planned)
                    order += 1
                yield event
        finally:
            # Also of a cycling that was cut short it is known how many may have gone out.
            if self._group is not None:
                self._group.cycled(*self._acquisition.pairs_out)
        return order


def _tell_count(read: Read, count: ReadCount, group: Group) -> None:
    group.counted(read, count)


def _tell_charge(pund: Pund, coulombs: float | None, group: Group) -> None:
    group.switched(pund, coulombs)
