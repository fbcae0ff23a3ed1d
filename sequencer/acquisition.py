"""Deliver pulses and fetch what the oscilloscope saw of them: set up, arm, fire, fetch.

The oscilloscope is known to be armed before the generator fires, and whoever records has
recorded the intent by then: it is an event, and the pulse goes out when the next one is asked
for.
"""

import math
from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass

from pulsetally.drivers.errors import InstrumentError
from pulsetally.drivers.function_generator import PulseSetting
from pulsetally.drivers.oscilloscope import AcquisitionSetting, Trace
from pulsetally.sequencer.analysis.pulses import (
    EndVoltage,
    PulseUnreadable,
    end_voltage,
    train_ends,
)
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import ShotMissing, StopRequested
from pulsetally.sequencer.events import (
    Event,
    PairsSent,
    PulseArmed,
    PulseSetUp,
    Role,
    Shot,
    ShotTaken,
    StopAsked,
    Waveform,
)
from pulsetally.sequencer.instruments import Instruments
from pulsetally.sequencer.records import Window, fitted, train_period, train_window, window_of
from pulsetally.sequencer.rounds import Cycle, Pulse
from pulsetally.sequencer.safety import StopSwitch

# What is expected later than so many polls is waited for without asking.
_WORTH_WAITING = 20
# The digitizer's range, against the swing that is expected.
_HEADROOM = 1.2
# The node's swing that is looked at, against the source's: behind a diode that blocks nothing is
# expected, and no digitizer has a range for that.
_LEAST_SHARE = 0.1
# How long one burst of a cycling lasts at most: whoever stops after the round waits for its end,
# and whoever can't wait stops at once.
_BURST_SECONDS = 86_400.0
# Whether a burst has begun is looked at where it lasts so long, for half of it and no longer
# than the second: an instrument may need a moment.
_SEEN_SECONDS, _BEGIN_SECONDS = 0.05, 1.0
# How much longer than it should a burst may take.
_MARGIN_SECONDS, _MARGIN_SHARE = 5.0, 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class Burst:
    """What one trigger sends and what is recorded of it.

    count: pulses. ends: whether end voltages are wanted. window: None where nothing is recorded.
    own_period: seconds from one pulse to the next where the pulse doesn't tell. swings: its base
    is one end of a swing, and no place for the cell to rest at.
    """

    pulse: Pulse
    window: Window | None
    count: int = 1
    ends: bool = True
    own_period: float | None = None
    swings: bool = False

    @property
    def period(self) -> float:
        """Return the time from one pulse to the next, in seconds."""
        if self.own_period is not None:
            return self.own_period
        # A pulse that is triggered by itself has its rest as the program waits.
        return train_period(self.pulse) if self.count > 1 else 2 * self.pulse.duration


def single(pulse: Pulse) -> Burst:
    """Return a burst of one pulse whose end voltage is wanted."""
    return Burst(pulse=pulse, window=window_of(pulse))


def train(pulse: Pulse, count: int) -> Burst:
    """Return a burst of several pulses in one record."""
    if count == 1:
        return single(pulse)
    return Burst(pulse=pulse, count=count, window=train_window(pulse, count))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Taken:
    """A burst's record, and the end voltage of each of its pulses."""

    shot: Shot
    ends: tuple[EndVoltage, ...]


class Acquisition:
    """Take the instruments of a bench from burst to burst."""

    def __init__(self, bench: Bench, instruments: Instruments, stop: StopSwitch) -> None:
        self._bench, self._stop = bench, stop
        self.generator, self.oscilloscope = instruments.generator, instruments.oscilloscope
        self.clock = instruments.clock
        self._ready_for: Burst | None = None
        self._next_at = 0.0
        self._stop_announced = False
        self._record_seconds = 0.0
        self._swung = False
        # Of the present cycling or the last one: how many pairs have gone out at least and at most.
        self.pairs_out = 0, 0

    def deliver(
        self,
        burst: Burst,
        *,
        number: int,
        order: int,
        role: Role,
        threshold: float | None = None,
        at_most: int | None = None,
    ) -> Generator[Event, None, Taken]:
        """Deliver a burst and record it: arm, know that it is armed, fire, fetch.

        number: of the round. order: of its first pulse. Raises ShotMissing when it was fired and
        its record isn't there.
        """
        pulse = burst.pulse
        yield from self.tell_stop()
        # The rest is spent at the base of the pulse before; only then comes the next one's.
        self._pause(self._next_at - self.clock.now())
        yield from self._set_up(burst)
        if self._stop.at_once:
            raise StopRequested(self._stop.reason)
        self.oscilloscope.arm()
        before = burst.window.before if burst.window else 0.0
        armed, done = self.oscilloscope.armed, self.oscilloscope.done
        patience = armed.limit_seconds + 2 * before * self._record_seconds
        expected = before * self._record_seconds
        if not self._until(self.oscilloscope.is_armed, patience, armed.poll_seconds, expected):
            raise InstrumentError(
                self.oscilloscope.address,
                "",
                f"it did not arm within {patience:.3g} s, so nothing was fired",
                "look whether its screen waits for a person",
            )
        yield PulseArmed(
            round=number,
            order=order,
            role=role,
            pulse=pulse.name,
            threshold=threshold,
            count=burst.count,
            period=burst.period if burst.count > 1 else None,
        )
        self.generator.fire()
        patience = done.limit_seconds + self._record_seconds
        expected = (1 - before) * self._record_seconds
        if not self._until(self.oscilloscope.is_done, patience, done.poll_seconds, expected):
            self.oscilloscope.abort()
            if not self.generator.output_is_on():
                # Somebody wants it off; to switch it on again would be the wrong answer.
                raise InstrumentError(
                    self.generator.address,
                    "",
                    f"its output was found off after pulse {order} was due, so somebody or an"
                    " overload has switched it off",
                    "find out why before you run again",
                )
            raise ShotMissing(order, "it was fired and the oscilloscope saw no trigger")
        shot, node = self._fetch()
        self._next_at = shot.bench_seconds + pulse.rest
        ends, problem = self._reduce(shot, node, burst)
        yield ShotTaken(
            round=number,
            order=order,
            role=role,
            pulse=pulse.name,
            shot=shot,
            ends=ends,
            threshold=threshold,
            at_most=at_most,
        )
        if problem:
            raise ShotMissing(order, f"the record of pulse {order} can't be used: {problem}")
        return Taken(shot=shot, ends=ends)

    def cycle(self, action: Cycle, *, number: int, order: int) -> Generator[Event, None, None]:
        """Have the generator send pairs by itself, in bursts, and wait for their ends.

        Yields PulseArmed before each burst. A stop in the middle of one aborts it; StopRequested
        says how many pairs may have gone out then, and pairs_out does after any error.
        """
        left, pulse = action.pairs, action.pulse
        self.pairs_out = action.done, action.done
        most = max(1, int(min(self.generator.most_count, _BURST_SECONDS / action.period)))
        self._pause(self._next_at - self.clock.now())
        while left:
            sent = action.done + action.pairs - left
            if self._stop.after_round and left < action.pairs:
                raise StopRequested(f"{self._stop.reason}; {sent:,} pairs have gone out")
            count = min(left, most)
            burst = Burst(
                pulse=pulse,
                count=count,
                window=None,
                ends=False,
                own_period=action.period,
                swings=True,
            )
            yield from self._set_up(burst)
            yield PulseArmed(
                round=number,
                order=order,
                role=Role.CYCLE,
                pulse=pulse.name,
                count=count,
                period=action.period,
            )
            if self._stop.at_once:
                raise StopRequested(f"{self._stop.reason}; {sent:,} pairs have gone out")
            self.pairs_out = sent, sent + count
            self.generator.fire()
            fired = self.clock.now()
            seconds = count * action.period
            margin = _MARGIN_SECONDS + _MARGIN_SHARE * seconds
            self._see_begin(count, seconds, sent)
            try:
                yield from self.wait(fired + seconds - self.clock.now())
                if not self.generator.tells_idle:
                    # It may have begun late, and nobody would know that it still goes on.
                    yield from self.wait(margin)
            except StopRequested as error:
                self.generator.abort()
                # Its answer says that the generator has heard the abort too: until then it sends.
                self.generator.output_is_on()
                # The pair that was going on may have been cut anywhere.
                begun = math.ceil((self.clock.now() - fired) / action.period) + 1
                most_sent = sent + min(count, begun)
                self.pairs_out = sent, most_sent
                raise StopRequested(
                    f"{error}; from {sent:,} to {most_sent:,} pairs may have gone out"
                ) from error
            if not self._until(self.generator.is_idle, margin, 2e-3):
                self.generator.abort()
                raise self._not_cycling(
                    f"its burst of {count} pulse pairs should have taken {seconds:.6g} s and goes"
                    " on after that",
                    "compare its period and count with the recipe",
                )
            if not self.generator.output_is_on():
                raise self._not_cycling(
                    f"its output went off while it sent {count} pulse pairs, so that nobody knows"
                    " how many reached the cell",
                    "look at its front panel for an overload",
                )
            left -= count
            order += 1
            self.pairs_out = sent + count, sent + count
            yield PairsSent(round=number, done=action.pairs - left, planned=action.pairs)
        self._next_at = self.clock.now()

    def _see_begin(self, count: int, seconds: float, sent: int) -> None:
        """Raise where the generator says that it sends nothing though it was triggered."""
        if seconds <= _SEEN_SECONDS or not self.generator.tells_sending:
            return
        deadline = self.clock.now() + min(seconds / 2, _BEGIN_SECONDS)
        while not self.generator.is_sending():
            if self.clock.now() >= deadline:
                self.generator.abort()
                self.pairs_out = sent, sent
                raise self._not_cycling(
                    f"its burst of {count} pulse pairs did not start when it was triggered",
                    "look at its front panel, and whether its dialect fires as its manual says",
                )
            self.clock.sleep(2e-3)

    def _not_cycling(self, problem: str, remedy: str) -> InstrumentError:
        return InstrumentError(self.generator.address, "", problem, remedy)

    def explain(self, problem: str) -> str:
        """Return a problem with what the instruments say about it; make them ready again."""
        words = [problem]
        for instrument in (self.generator, self.oscilloscope):
            for number, text in instrument.errors():
                words.append(f"{instrument.address} reports {number}, {text!r}")
        self.oscilloscope.abort()
        self.generator.abort()
        self._ready_for = None
        return "; ".join(words)

    def switch_off(self) -> None:
        """Switch the output off and read that back, until the next burst is set up."""
        self._ready_for = None
        self.generator.switch(on=False)
        self._swung = False

    def release(self) -> None:
        """Switch the output off where it would hold the cell at one end of a loop or cycling."""
        if self._swung:
            self.switch_off()

    def stay_off(self) -> None:
        """Look whether the output is still off, and switch it off if somebody switched it on.

        This also keeps the lines from being dropped as idle.
        """
        if self.generator.output_is_on():
            self.generator.switch(on=False)
        self.oscilloscope.identify()

    def check_errors(self) -> None:
        """Raise what is in the instruments' error queues."""
        self.generator.raise_errors("")
        self.oscilloscope.raise_errors("")

    # Setting up.

    def _set_up(self, burst: Burst) -> Iterator[Event]:
        if burst == self._ready_for:
            return
        self._ready_for = None
        pulse = burst.pulse
        generated = self.generator.set_pulse(
            PulseSetting(
                base=pulse.base,
                level=pulse.level,
                width=pulse.width,
                edge=pulse.edge,
                period=burst.period,
                count=burst.count,
            )
        )
        acquired: dict[str, float] = {}
        if burst.window is not None:
            acquisition = self._acquisition(pulse, burst.window)
            acquired = self.oscilloscope.set_acquisition(acquisition)
            self._record_seconds = acquisition.points * acquisition.sample_interval
        self._swung = burst.swings and pulse.base != 0
        self.generator.switch(on=True)
        self.clock.sleep(self.generator.settle_seconds)
        self._ready_for = burst
        yield PulseSetUp(
            pulse=pulse.name,
            settings={
                **{f"generator {name}": value for name, value in generated.items()},
                **{f"oscilloscope {name}": value for name, value in acquired.items()},
            },
        )

    def _acquisition(self, pulse: Pulse, window: Window) -> AcquisitionSetting:
        oscilloscope = self._bench.model.oscilloscope
        window = fitted(window, self._bench.oscilloscope_dialect.most_points)
        levels = (pulse.base, pulse.level)
        source = [self._bench.terminal_volts(volts) for volts in levels]
        node = [self._bench.cell_volts(volts) for volts in levels]
        return AcquisitionSetting(
            sample_interval=self.oscilloscope.interval_for(window.seconds, window.points),
            points=window.points,
            before=window.before,
            ranges={
                int(oscilloscope.source_channel): _range(source),
                int(oscilloscope.node_channel): _range(
                    node, least=_LEAST_SHARE * abs(source[1] - source[0])
                ),
            },
            trigger_channel=int(oscilloscope.source_channel),
            trigger_volts=sum(source) / 2,
            rising=pulse.rising,
        )

    # Records.

    def _fetch(self) -> tuple[Shot, Trace]:
        oscilloscope = self._bench.model.oscilloscope
        source = self.oscilloscope.fetch(int(oscilloscope.source_channel))
        node = self.oscilloscope.fetch(int(oscilloscope.node_channel))
        shot = Shot(
            source=_waveform(source),
            node=_waveform(node),
            sample_interval=source.sample_interval,
            first_seconds=source.first_seconds,
            clipped=source.clipped or node.clipped,
            bench_seconds=self.clock.now(),
        )
        return shot, node

    def _reduce(self, shot: Shot, node: Trace, burst: Burst) -> tuple[tuple[EndVoltage, ...], str]:
        if not burst.ends:
            return (), ""
        pulse, bench = burst.pulse, self._bench
        base, level = bench.terminal_volts(pulse.base), bench.terminal_volts(pulse.level)
        arrays = shot.times, shot.source.volts, shot.node.volts
        seen = node.range_volts
        try:
            if burst.count == 1:
                end = end_voltage(*arrays, base=base, level=level, ramp=pulse.ramp, seen=seen)
                return (end,), ""
            return train_ends(
                *arrays,
                base=base,
                level=level,
                ramp=pulse.ramp,
                seen=seen,
                count=burst.count,
                period=burst.period,
            ), ""
        except PulseUnreadable as error:
            return (), str(error)

    # Time.

    def wait(self, seconds: float) -> Iterator[Event]:
        """Leave the cell alone, and ask the instruments something now and then.

        Routers and instruments drop a line that is idle for long; a dropped one is better
        noticed now than when the cell is due. Who asks for a stop meanwhile is answered at once.
        """
        end = self.clock.now() + seconds
        part = self.clock.piece_seconds
        while (left := end - self.clock.now()) > 0:
            self.clock.sleep(min(left, part), lambda: self._stop.at_once or self._unannounced)
            if self._stop.at_once:
                raise StopRequested(self._stop.reason)
            if self._unannounced:
                yield self._announce()
            elif left > part:
                self.generator.output_is_on()
                self.oscilloscope.identify()

    def tell_stop(self) -> Iterator[Event]:
        """Tell, once, that somebody has asked for an end."""
        if self._unannounced:
            yield self._announce()

    @property
    def _unannounced(self) -> bool:
        return self._stop.after_round and not self._stop_announced

    def _announce(self) -> StopAsked:
        self._stop_announced = True
        return StopAsked(at_once=self._stop.at_once)

    def _pause(self, seconds: float) -> None:
        if seconds > 0:
            self.clock.sleep(seconds, lambda: self._stop.at_once)
        if self._stop.at_once:
            raise StopRequested(self._stop.reason)

    def _until(
        self,
        condition: Callable[[], bool],
        seconds: float,
        poll_seconds: float,
        expected_seconds: float = 0.0,
    ) -> bool:
        """Ask until a condition holds, seconds at most; it can't hold before it is expected."""
        if condition():
            return True
        deadline = self.clock.now() + seconds
        if expected_seconds > _WORTH_WAITING * poll_seconds:
            # A record of a minute is no reason to ask thirty thousand times.
            self.clock.sleep(expected_seconds, lambda: self._stop.at_once)
        while True:
            self.clock.sleep(poll_seconds)
            if condition():
                return True
            if self.clock.now() >= deadline:
                return False


def _range(levels: list[float], *, least: float = 0.0) -> tuple[float, float]:
    # Around the pulse and not around zero: a pulse goes one way only, and an 8-bit digitizer
    # has no codes to give away.
    middle, half = sum(levels) / 2, max(abs(levels[1] - levels[0]), least) / 2
    return middle - _HEADROOM * half, middle + _HEADROOM * half


def _waveform(trace: Trace) -> Waveform:
    return Waveform(codes=trace.codes, scale=trace.volts_per_code, offset=trace.volts_at_zero)
