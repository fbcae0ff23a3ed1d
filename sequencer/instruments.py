"""Open what a bench file names: links, drivers and clock."""

import contextlib
from collections.abc import Iterator

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import Link, VisaLink
from pulsetally.drivers.oscilloscope import Oscilloscope
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.clock import BenchClock, Clock, WallClock
from pulsetally.sequencer.errors import OutputsNotConfirmed
from pulsetally.sequencer.safety import quiet

# A simulated bench works as long as a month of cycling takes it, and a real one has no clock.
_CLOCK_SECONDS = 300.0


class Instruments:
    """The open lines, drivers and clock of a bench.

    They are opened one after the other; once the generator has answered it can be made quiet,
    also when something after it can't be opened.
    """

    generator: FunctionGenerator
    oscilloscope: Oscilloscope
    clock: Clock

    def __init__(self, bench: Bench) -> None:
        """Remember the bench; open does the rest."""
        self._bench = bench
        self._opened = contextlib.ExitStack()
        self._generator_link: VisaLink | None = None

    @property
    def reached(self) -> bool:
        """Say whether the generator has answered, so that its output is our business."""
        return self._generator_link is not None

    def open(self) -> None:
        """Open all lines; nothing is set and nothing is switched.

        Raises LinkError or BadReply for the first instrument that is not there or no SCPI
        instrument.
        """
        bench = self._bench
        link = self._opened.enter_context(contextlib.closing(_generator_link(bench)))
        self.generator = generator_of(bench, link)
        self.generator.identify()
        self._generator_link = link
        other = self._opened.enter_context(_oscilloscope_link(bench, link))
        self.oscilloscope = Oscilloscope(other, bench.oscilloscope_dialect)
        self.oscilloscope.identify()
        self.clock = WallClock()
        if bench.model.clock is not None:
            own = self._opened.enter_context(
                contextlib.closing(VisaLink(bench.model.clock, seconds=_CLOCK_SECONDS))
            )
            self.clock = BenchClock(own)
            self.clock.now()

    def quiet(self) -> None:
        """Switch the output off and verify it. Raises OutputsNotConfirmed."""
        if self._generator_link is not None:
            quiet(self.generator, self._generator_link)

    def close(self) -> None:
        """Give all lines back."""
        self._opened.close()


@contextlib.contextmanager
def open_instruments(bench: Bench) -> Iterator[Instruments]:
    """Open all lines of a bench for as long as the block runs."""
    instruments = Instruments(bench)
    with contextlib.closing(instruments):
        instruments.open()
        yield instruments


@contextlib.contextmanager
def open_links(bench: Bench) -> Iterator[tuple[VisaLink, VisaLink]]:
    """Open the lines to generator and oscilloscope for as long as the block runs."""
    with (
        contextlib.closing(_generator_link(bench)) as generator,
        _oscilloscope_link(bench, generator) as oscilloscope,
    ):
        yield generator, oscilloscope


@contextlib.contextmanager
def _oscilloscope_link(bench: Bench, generator: VisaLink) -> Iterator[VisaLink]:
    address, line = bench.model.oscilloscope.address, bench.oscilloscope_dialect.line
    if address == generator.address:
        # Some oscilloscopes have a generator built in: one instrument, one line.
        yield generator
        return
    link = VisaLink(address, ending=line.ending, gap_seconds=line.gap_seconds)
    with contextlib.closing(link):
        yield link


def quiet_bench(bench: Bench) -> None:
    """Switch a bench's output off and verify it, whatever state things are in.

    The lock of whoever uses the bench is no obstacle: quiet is what matters. Raises
    OutputsNotConfirmed.
    """
    try:
        link = _generator_link(bench, exclusive=False)
    except PulsetallyError as error:
        raise OutputsNotConfirmed(bench.model.generator.address, str(error)) from error
    with contextlib.closing(link):
        quiet(generator_of(bench, link), link)


def _generator_link(bench: Bench, *, exclusive: bool = True) -> VisaLink:
    line = bench.generator_dialect.line
    return VisaLink(
        bench.model.generator.address,
        ending=line.ending,
        gap_seconds=line.gap_seconds,
        exclusive=exclusive,
    )


def generator_of(bench: Bench, link: Link) -> FunctionGenerator:
    """Return the driver of a bench's generator on a line: its channel, load and limit."""
    section = bench.model.generator
    return FunctionGenerator(
        link,
        bench.generator_dialect,
        channel=int(section.channel),
        load=section.load,
        limit_volts=bench.panel_limit(),
    )
