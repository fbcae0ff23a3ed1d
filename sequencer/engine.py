"""Run a plan on a bench, as an iterator of events.

The engine knows no screen. It asks the logbook to record each event before anybody else sees
it and before the next pulse goes out; however it ends, the output is off and read back as off.
"""

from collections.abc import Callable, Generator, Iterator
from dataclasses import replace
from typing import NamedTuple

from pulsetally.drivers.errors import InstrumentError, PulsetallyError
from pulsetally.drivers.function_generator import PulseSetting
from pulsetally.drivers.oscilloscope import AcquisitionSetting, Trace
from pulsetally.sequencer.analysis.contact import ContactUnclear, Verdict, judge_contact
from pulsetally.sequencer.analysis.counting import count_read, passes
from pulsetally.sequencer.analysis.pulses import EndVoltage, PulseUnreadable, end_voltage
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import (
    ContactLost,
    LogbookError,
    OutputsNotConfirmed,
    ShotMissing,
    StopRequested,
)
from pulsetally.sequencer.events import (
    ContactChecked,
    Event,
    PulseArmed,
    PulseSetUp,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RunBegan,
    RunEnded,
    RunState,
    Shot,
    ShotTaken,
    StopAsked,
    WaitBegan,
    Waveform,
)
from pulsetally.sequencer.instruments import Instruments
from pulsetally.sequencer.logbook import Recorder
from pulsetally.sequencer.plan import (
    Contact,
    Plan,
    Preset,
    Pulse,
    Read,
    Round,
    Step,
    Wait,
    window_points,
)
from pulsetally.sequencer.safety import StopSwitch

# A round that lost a pulse starts again; one that loses it again and again has a cause.
MOST_ATTEMPTS = 3
# While a run waits, the lines are used so often, and at most so many times.
_IDLE_SECONDS, _MOST_SLICES = 30.0, 1000
# The share of a record that lies before the trigger.
_BEFORE = 0.1
# The digitizer's range, against the swing that is expected.
_HEADROOM = 1.2


def run(
    plan: Plan, bench: Bench, recorder: Recorder, stop: StopSwitch
) -> Generator[Event, None, None]:
    """Carry out a plan; yield what happens. The last event is RunEnded, always recorded."""
    instruments = Instruments(bench)
    state, reason = RunState.FAILED, ""
    try:
        instruments.open()
        for event in _Conductor(plan, bench, instruments, stop).events():
            recorder.record(event)
            yield event
        state = RunState.FINISHED
    except StopRequested:
        state, reason = RunState.STOPPED, stop.reason
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
        self, plan: Plan, bench: Bench, instruments: Instruments, stop: StopSwitch
    ) -> None:
        self._plan, self._bench, self._stop = plan, bench, stop
        self._generator, self._oscilloscope = instruments.generator, instruments.oscilloscope
        self._instruments, self._clock = instruments, instruments.clock
        self._ready_for: Pulse | None = None
        self._next_at = 0.0
        self._stop_announced = False
        self._record_seconds = 0.0

    def events(self) -> Iterator[Event]:
        identities = {
            "function generator": self._generator.identify(),
            "oscilloscope": self._oscilloscope.identify(),
        }
        self._instruments.quiet()
        self._generator.prepare()
        self._oscilloscope.prepare()
        yield RunBegan(
            rounds=len(self._plan.rounds),
            most_pulses=self._plan.most_pulses,
            seconds=self._plan.seconds,
            identities=identities,
        )
        for each in self._plan.rounds:
            # Also before the first: somebody may have asked while the lines were opened.
            if self._stop.after_round:
                raise StopRequested(self._stop.reason)
            yield from self._attempts(each)

    def _attempts(self, each: Round) -> Iterator[Event]:
        for attempt in range(1, MOST_ATTEMPTS + 1):
            yield RoundBegan(round=each, attempt=attempt)
            try:
                yield from self._round(each)
            except ShotMissing as error:
                reason = self._explain(error)
                yield RoundSpoiled(round=each.number, reason=reason)
                if not each.repeatable or attempt == MOST_ATTEMPTS:
                    raise ShotMissing(error.order, reason) from error
                continue
            except (InstrumentError, StopRequested, ContactLost) as error:
                yield RoundSpoiled(round=each.number, reason=self._cut(error))
                raise
            yield RoundFinished(round=each.number)
            return

    def _cut(self, error: PulsetallyError) -> str:
        return self._stop.reason if isinstance(error, StopRequested) else str(error)

    def _explain(self, error: ShotMissing) -> str:
        # What the instruments say about it belongs to the reason, and leaves their queues.
        words = [error.problem]
        for instrument in (self._generator, self._oscilloscope):
            for number, text in instrument.errors():
                words.append(f"{instrument.address} reports {number}, {text!r}")
        self._oscilloscope.abort()
        self._generator.abort()
        self._ready_for = None
        return "; ".join(words)

    def _round(self, each: Round) -> Iterator[Event]:
        order, stepped, first = 0, 0, True
        for action in each.actions:
            match action:
                case Wait():
                    yield WaitBegan(round=each.number, seconds=action.seconds)
                    yield from self._wait(action.seconds)
                case Preset():
                    order += 1
                    yield from self._pulse(each, order, Role.PRESET, action.pulse)
                case Contact():
                    order += 1
                    yield from self._contact(each, order, action.pulse)
                case Step():
                    for _ in range(action.count):
                        order += 1
                        yield from self._pulse(each, order, Role.STEP, action.pulse)
                    stepped += action.count
                case Read():
                    order = yield from self._read(each, order, stepped, first, action)
                    first = False
        self._generator.raise_errors("")
        self._oscilloscope.raise_errors("")

    def _read(
        self, each: Round, order: int, stepped: int, first: bool, action: Read
    ) -> Generator[Event, None, int]:
        rising = action.pulse.rising
        ends: list[float] = []
        while len(ends) < action.at_most:
            order += 1
            taken = yield from self._pulse(each, order, Role.READ, action.pulse, action)
            ends.append(taken.end.volts)
            if passes(taken.end.volts, action.threshold, rising=rising):
                break
        count = count_read(ends, action.threshold, rising=rising)
        yield ReadFinished(
            round=each.number,
            pulse=action.pulse.name,
            threshold=action.threshold,
            count=count.count,
            crossing=count.crossing,
            reached=count.reached,
            stepped=stepped,
            first=first,
            settings=action.settings,
            end_voltages=tuple(ends),
        )
        return order

    def _pulse(
        self, each: Round, order: int, role: Role, pulse: Pulse, read: Read | None = None
    ) -> Generator[Event, None, "_Taken"]:
        """Deliver one pulse and record it: arm, know that it is armed, fire, fetch."""
        if self._unannounced:
            yield self._announce()
        # The rest is spent at the base of the pulse before; only then comes the next one's.
        self._pause(self._next_at - self._clock.now())
        yield from self._set_up(pulse)
        if self._stop.at_once:
            raise StopRequested(self._stop.reason)
        self._oscilloscope.arm()
        armed, done = self._oscilloscope.armed, self._oscilloscope.done
        patience = armed.limit_seconds + 2 * _BEFORE * self._record_seconds
        if not self._until(self._oscilloscope.is_armed, patience, armed.poll_seconds):
            raise InstrumentError(
                self._oscilloscope.address,
                "",
                f"it did not arm within {patience:.3g} s, so nothing was fired",
                "look whether its screen waits for a person",
            )
        threshold = read.threshold if read else None
        yield PulseArmed(
            round=each.number, order=order, role=role, pulse=pulse.name, threshold=threshold
        )
        self._generator.fire()
        patience = done.limit_seconds + self._record_seconds
        if not self._until(self._oscilloscope.is_done, patience, done.poll_seconds):
            self._oscilloscope.abort()
            raise ShotMissing(order, f"pulse {order} was fired and the oscilloscope saw no trigger")
        shot, node = self._fetch()
        self._next_at = shot.bench_seconds + pulse.rest
        end, problem = self._reduce(shot, node, pulse)
        yield ShotTaken(
            round=each.number,
            order=order,
            role=role,
            pulse=pulse.name,
            shot=shot,
            end=end,
            threshold=threshold,
            at_most=read.at_most if read else None,
        )
        if end is None:
            raise ShotMissing(order, f"the record of pulse {order} can't be used: {problem}")
        return _Taken(shot, end)

    def _contact(self, each: Round, order: int, pulse: Pulse) -> Generator[Event, None, None]:
        shot = (yield from self._pulse(each, order, Role.CONTACT, pulse)).shot
        bench = self._bench
        try:
            result = judge_contact(
                shot.times,
                shot.source.volts,
                shot.node.volts,
                base=bench.terminal_volts(pulse.base),
                level=bench.terminal_volts(pulse.level),
                node_base=bench.cell_volts(pulse.base),
                ramp=pulse.ramp,
                reached_volts=bench.cell_volts(pulse.level),
                probe_tau=bench.probe_tau(),
                expected_tau=bench.cell_tau(),
            )
        except (ContactUnclear, PulseUnreadable) as error:
            raise ContactLost(
                f"contact can't be judged: {error}. To fix it, use a longer pulse."
            ) from error
        yield ContactChecked(round=each.number, pulse=pulse.name, result=result)
        if result.verdict is not Verdict.GOOD:
            raise ContactLost(
                f"the cell looks {result.verdict}: the node goes to {result.final_volts:.3g} V with"
                f" a time constant of {result.tau:.3g} s. To fix it, look at probes, socket and"
                " cell, then start again."
            )

    def _set_up(self, pulse: Pulse) -> Iterator[Event]:
        if pulse == self._ready_for:
            return
        self._ready_for = None
        generated = self._generator.set_pulse(
            PulseSetting(
                base=pulse.base,
                level=pulse.level,
                width=pulse.width,
                edge=pulse.edge,
                # Each pulse is triggered by itself, so that the rest is no business of it.
                period=2 * pulse.duration,
            )
        )
        acquisition = self._acquisition(pulse)
        acquired = self._oscilloscope.set_acquisition(acquisition)
        self._record_seconds = acquisition.points * acquisition.sample_interval
        self._generator.switch(on=True)
        self._clock.sleep(self._generator.settle_seconds)
        self._ready_for = pulse
        yield PulseSetUp(
            pulse=pulse.name,
            settings={
                **{f"generator {name}": value for name, value in generated.items()},
                **{f"oscilloscope {name}": value for name, value in acquired.items()},
            },
        )

    def _acquisition(self, pulse: Pulse) -> AcquisitionSetting:
        oscilloscope = self._bench.model.oscilloscope
        levels = (pulse.base, pulse.level)
        source = [self._bench.terminal_volts(volts) for volts in levels]
        node = [self._bench.cell_volts(volts) for volts in levels]
        points = window_points()
        # As much time after the pulse as it lasts: there the cell gives back what it didn't keep.
        span = pulse.duration * 2 / (1 - _BEFORE)
        return AcquisitionSetting(
            sample_interval=self._oscilloscope.interval_for(span, points),
            points=points,
            before=_BEFORE,
            ranges={
                int(oscilloscope.source_channel): _range(source),
                int(oscilloscope.node_channel): _range(node),
            },
            trigger_channel=int(oscilloscope.source_channel),
            trigger_volts=sum(source) / 2,
            rising=pulse.rising,
        )

    def _fetch(self) -> tuple[Shot, Trace]:
        oscilloscope = self._bench.model.oscilloscope
        source = self._oscilloscope.fetch(int(oscilloscope.source_channel))
        node = self._oscilloscope.fetch(int(oscilloscope.node_channel))
        shot = Shot(
            source=_waveform(source),
            node=_waveform(node),
            sample_interval=source.sample_interval,
            first_seconds=source.first_seconds,
            clipped=source.clipped or node.clipped,
            bench_seconds=self._clock.now(),
        )
        return shot, node

    def _reduce(self, shot: Shot, node: Trace, pulse: Pulse) -> tuple[EndVoltage | None, str]:
        try:
            return end_voltage(
                shot.times,
                shot.source.volts,
                shot.node.volts,
                base=self._bench.terminal_volts(pulse.base),
                level=self._bench.terminal_volts(pulse.level),
                ramp=pulse.ramp,
                seen=node.range_volts,
            ), ""
        except PulseUnreadable as error:
            return None, str(error)

    def _wait(self, seconds: float) -> Iterator[Event]:
        """Leave the cell alone, and ask the instruments something now and then.

        Routers and instruments drop a line that is idle for long; a dropped one is better
        noticed now than when the cell is due. Who asks for a stop meanwhile is answered at once.
        """
        end = self._clock.now() + seconds
        part = max(_IDLE_SECONDS, seconds / _MOST_SLICES)
        while (left := end - self._clock.now()) > 0:
            self._clock.sleep(min(left, part), lambda: self._stop.at_once or self._unannounced)
            if self._stop.at_once:
                raise StopRequested(self._stop.reason)
            if self._unannounced:
                yield self._announce()
            elif left > part:
                self._generator.output_is_on()
                self._oscilloscope.identify()

    @property
    def _unannounced(self) -> bool:
        return self._stop.after_round and not self._stop_announced

    def _announce(self) -> StopAsked:
        self._stop_announced = True
        return StopAsked(at_once=self._stop.at_once)

    def _pause(self, seconds: float) -> None:
        if seconds > 0:
            self._clock.sleep(seconds, lambda: self._stop.at_once)
        if self._stop.at_once:
            raise StopRequested(self._stop.reason)

    def _until(self, condition: Callable[[], bool], seconds: float, poll_seconds: float) -> bool:
        if condition():
            return True
        deadline = self._clock.now() + seconds
        while self._clock.now() < deadline:
            self._clock.sleep(poll_seconds)
            if condition():
                return True
        return False


class _Taken(NamedTuple):
    """A pulse's record, and its end voltage."""

    shot: Shot
    end: EndVoltage


def _range(levels: list[float]) -> tuple[float, float]:
    # Around the pulse and not around zero: a pulse goes one way only, and an 8-bit digitizer
    # has no codes to give away.
    middle, half = sum(levels) / 2, abs(levels[1] - levels[0]) / 2
    return middle - _HEADROOM * half, middle + _HEADROOM * half


def _waveform(trace: Trace) -> Waveform:
    return Waveform(codes=trace.codes, scale=trace.volts_per_code, offset=trace.volts_at_zero)
