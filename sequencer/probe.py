"""Find out whether a bench's instruments hold what their dialects say, without firing.

Each check sets or asks something harmless, reads it back and empties the error queue; what
fails comes with the exact exchange, so that a person can mend the dialect. Outputs are off all
the while.
"""

import statistics
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from pulsetally.drivers.dialect import CHANNEL_SETTINGS, Setting
from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.function_generator import PulseSetting
from pulsetally.drivers.instrument import Instrument, Wanted
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.oscilloscope import AcquisitionSetting, Oscilloscope
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.instruments import generator_of
from pulsetally.sequencer.safety import quiet

# Small against every coercive voltage, and nothing is fired anyway.
_LEVEL_VOLTS = 0.5
_WIDTH_SECONDS, _EDGE_SECONDS, _PERIOD_SECONDS = 100e-6, 100e-9, 1e-3
_POINTS = 2000
_WAIT_SECONDS = 2.0
_WRONG_COMMAND = ":PULSETALLY:NOSUCH 1"


@dataclass(frozen=True, slots=True, kw_only=True)
class Check:
    """One thing that was tried.

    holds: True, False, or None where it couldn't be tried. detail: what was found. exchange:
    what was sent and answered, where it failed.
    """

    instrument: str
    name: str
    holds: bool | None
    detail: str
    exchange: tuple[str, ...] = ()


@dataclass(slots=True)
class ListeningLink:
    """A link that remembers what went over it since it was last asked."""

    link: VisaLink
    heard: list[str] = field(default_factory=list)

    @property
    def address(self) -> str:
        """Return the VISA address."""
        return self.link.address

    def write(self, command: str) -> None:
        """Send one program message."""
        self.heard.append(f"> {command}")
        self.link.write(command)

    def ask(self, command: str) -> str:
        """Send one query; return its answer without the line end."""
        self.heard.append(f"> {command}")
        answer = self.link.ask(command)
        self.heard.append(f"< {answer}")
        return answer

    def ask_block(self, command: str, *, line_end: bool = True, header: bool = False) -> bytes:
        """Send one query; return the payload of the block that answers it."""
        self.heard.append(f"> {command}")
        payload = self.link.ask_block(command, line_end=line_end, header=header)
        self.heard.append(f"< a block of {len(payload)} bytes")
        return payload

    def take(self) -> tuple[str, ...]:
        """Return what was heard, and forget it."""
        heard = tuple(self.heard[-12:])
        self.heard.clear()
        return heard


class _Prober:
    """Try one instrument."""

    def __init__(self, name: str, link: VisaLink) -> None:
        self.name, self.link = name, ListeningLink(link)

    def check(self, name: str, action: Callable[[], str]) -> Check:
        self.link.take()
        try:
            detail, holds = action(), True
        except (PulsetallyError, ValueError) as error:
            detail, holds = str(error), False
        heard = self.link.take()
        if self.link.link.tainted:
            try:
                self.link.link.reopen()
            except PulsetallyError as error:
                detail += f"; and the link can't be reopened: {error}"
        exchange = () if holds else heard
        return Check(instrument=self.name, name=name, holds=holds, detail=detail, exchange=exchange)

    def shared(self, instrument: Instrument) -> Iterator[Check]:
        """Try what both instruments have."""
        yield self.check("identity", instrument.identify)

        def round_trip() -> str:
            times = []
            for _ in range(21):
                began = time.perf_counter()
                instrument.identify()
                times.append(time.perf_counter() - began)
            return f"{statistics.median(times) * 1e3:.2f} ms (median of {len(times)})"

        yield self.check("round trip", round_trip)

        def reset() -> str:
            instrument.reset()
            left = instrument.errors()
            return "the error queue is empty after it" if not left else f"it leaves {left}"

        yield self.check("reset", reset)

        def notices() -> str:
            self.link.write(_WRONG_COMMAND)
            entries = instrument.errors()
            if not instrument.has_error_queue:
                return "the dialect has no 'errors': a wrong command goes unnoticed"
            if not entries:
                raise ValueError(f"{_WRONG_COMMAND!r} made no entry; errors will go unnoticed")
            return f"a wrong command makes the entry {entries[0][0]}, {entries[0][1]!r}"

        yield self.check("error queue", notices)

    def settings(
        self, instrument: Instrument, settings: tuple[Setting, ...], wanted: Wanted, channel: int
    ) -> Iterator[Check]:
        """Try a group of coupled settings, then say of each what was read back."""

        def all_together() -> str:
            instrument.apply(settings, wanted, channel)
            found = instrument.read_back(settings, wanted, channel)
            return ", ".join(f"{name} {value:.6g}" for name, value in found.items())

        together = self.check(f"settings, channel {channel}", all_together)
        yield together
        if together.holds:
            return
        # Which of them is it? One by one, each with its own exchange.
        for setting in settings:

            def one(setting: Setting = setting) -> str:
                instrument.apply([setting], wanted, channel)
                found = instrument.read_back([setting], wanted, channel)
                return f"{found.get(setting.name, wanted[setting.name])}"

            yield self.check(f"{setting.name}, channel {channel}", one)


def probe(bench: Bench, generator_link: VisaLink, oscilloscope_link: VisaLink) -> Iterator[Check]:
    """Try both instruments of a bench. Raises OutputsNotConfirmed when that is in doubt."""
    try:
        yield from _probe_generator(bench, generator_link)
        yield from _probe_oscilloscope(bench, oscilloscope_link)
    finally:
        quiet(generator_of(bench, generator_link), generator_link)


def _probe_generator(bench: Bench, link: VisaLink) -> Iterator[Check]:
    prober = _Prober("function generator", link)
    dialect, channel = bench.generator_dialect, int(bench.model.generator.channel)
    generator = generator_of(bench, prober.link)
    quiet(generator, link)
    yield from prober.shared(generator)

    def prepare() -> str:
        generator.prepare()
        return f"{len(dialect.prepare)} commands and the load"

    yield prober.check("prepare", prepare)
    volts = min(_LEVEL_VOLTS, bench.panel_limit())
    for level in (volts, -volts):
        pulse = PulseSetting(
            base=0.0,
            level=level,
            width=_WIDTH_SECONDS,
            edge=dialect.fixed_edge or _EDGE_SECONDS,
            period=_PERIOD_SECONDS,
        )
        yield from prober.settings(generator, dialect.settings, pulse.values(), channel)

    def output() -> str:
        generator.switch(on=False)
        return "switched off and read back as off; it was never switched on here"

    yield prober.check("output", output)
    if dialect.sending is not None:
        said = {True: "sending: yes", False: "sending: no"}
        yield prober.check("sending", lambda: said[generator.is_sending()])
    if dialect.idle is None:
        yield Check(
            instrument=prober.name, name="idle", holds=None, detail="the dialect has no question"
        )
        return
    yield prober.check("idle", lambda: f"idle: {'yes' if generator.is_idle() else 'no'}")


def _probe_oscilloscope(bench: Bench, link: VisaLink) -> Iterator[Check]:
    prober = _Prober("oscilloscope", link)
    section, dialect = bench.model.oscilloscope, bench.oscilloscope_dialect
    oscilloscope = Oscilloscope(prober.link, dialect)
    yield from prober.shared(oscilloscope)

    def prepare() -> str:
        oscilloscope.prepare()
        return f"{len(dialect.prepare)} commands"

    yield prober.check("prepare", prepare)
    channels = (int(section.source_channel), int(section.node_channel))
    setting = AcquisitionSetting(
        sample_interval=oscilloscope.interval_for(2 * _WIDTH_SECONDS, _POINTS),
        points=_POINTS,
        before=0.1,
        ranges=dict.fromkeys(channels, (-1.0, 1.0)),
        trigger_channel=channels[0],
        # Nothing on a quiet bench reaches it, so armed stays armed.
        trigger_volts=0.9,
        rising=True,
    )
    each_channel = tuple(each for each in dialect.settings if each.name in CHANNEL_SETTINGS)
    whole = tuple(each for each in dialect.settings if each.name not in CHANNEL_SETTINGS)
    spans: Wanted = {"span": 2.0, "volts per division": 2.0 / dialect.divisions[0], "centre": 0.0}
    for channel in channels:
        yield from prober.settings(oscilloscope, each_channel, spans, channel)
    values = setting.values(dialect.divisions[1])
    yield from prober.settings(oscilloscope, whole, values, channels[0])

    def armed() -> str:
        oscilloscope.set_acquisition(setting)
        oscilloscope.arm()
        seconds = _wait_for(oscilloscope.is_armed, "armed")
        oscilloscope.abort()
        if oscilloscope.is_armed():
            raise ValueError("it says armed after the acquisition was ended")
        return f"armed after {seconds * 1e3:.0f} ms, and not any more when ended"

    yield prober.check("armed", armed)
    if not dialect.force:
        detail = "the dialect has no 'force trigger', so no block was fetched"
        yield Check(instrument=prober.name, name="record", holds=None, detail=detail)
        return

    def record() -> str:
        oscilloscope.set_acquisition(setting)
        oscilloscope.arm()
        _wait_for(oscilloscope.is_armed, "armed")
        oscilloscope.force()
        _wait_for(oscilloscope.is_done, "done")
        parts = []
        for channel in channels:
            began = time.perf_counter()
            trace = oscilloscope.fetch(channel)
            seconds = time.perf_counter() - began
            # A line end too many or too few after the block would shift this answer.
            oscilloscope.identify()
            parts.append(
                f"channel {channel}: {trace.codes.size} samples in {seconds * 1e3:.1f} ms,"
                f" from {trace.volts.min():.3g} V to {trace.volts.max():.3g} V"
            )
        return "; ".join(parts)

    yield prober.check("record and line end", record)


def _wait_for(condition: Callable[[], bool], word: str) -> float:
    began = time.monotonic()
    while not condition():
        if time.monotonic() - began > _WAIT_SECONDS:
            raise ValueError(f"it does not say that it is {word} within {_WAIT_SECONDS:g} s")
        time.sleep(0.01)
    return time.monotonic() - began
