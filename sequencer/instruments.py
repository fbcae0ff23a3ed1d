"""Open what a bench file names: links, drivers and clock."""

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.oscilloscope import Oscilloscope
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.clock import BenchClock, Clock, WallClock
from pulsetally.sequencer.errors import OutputsNotConfirmed
from pulsetally.sequencer.safety import quiet


@dataclass(frozen=True, slots=True, kw_only=True)
class Instruments:
    """Hold an open bench.

    generator_link is needed to go quiet over a fresh link; opened closes all of them.
    """

    generator: FunctionGenerator
    generator_link: VisaLink
    oscilloscope: Oscilloscope
    clock: Clock
    opened: contextlib.ExitStack

    def quiet(self) -> None:
        """Switch the output off and verify it. Raises OutputsNotConfirmed."""
        quiet(self.generator, self.generator_link)

    def close(self) -> None:
        """Give all lines back."""
        self.opened.close()


def open_instruments(bench: Bench) -> Instruments:
    """Open all links of a bench; nothing is set and nothing is switched.

    Raises LinkError or BadReply for the first instrument that is not there or no SCPI
    instrument; what was open before it is closed again.
    """
    model = bench.model
    with contextlib.ExitStack() as on_failure:
        link, other = on_failure.enter_context(open_links(bench))
        generator = _generator(bench, link)
        oscilloscope = Oscilloscope(other, bench.oscilloscope_dialect)
        generator.identify()
        oscilloscope.identify()
        clock: Clock = WallClock()
        if model.clock is not None:
            own = on_failure.enter_context(contextlib.closing(VisaLink(model.clock)))
            clock = BenchClock(own)
        return Instruments(
            generator=generator,
            generator_link=link,
            oscilloscope=oscilloscope,
            clock=clock,
            opened=on_failure.pop_all(),
        )


@contextlib.contextmanager
def open_links(bench: Bench) -> Iterator[tuple[VisaLink, VisaLink]]:
    """Open the lines to generator and oscilloscope for as long as the block runs.

    Some oscilloscopes have a generator built in: then both are the same line.
    """
    with contextlib.ExitStack() as opened:
        generator = opened.enter_context(contextlib.closing(_generator_link(bench)))
        address, line = bench.model.oscilloscope.address, bench.oscilloscope_dialect.line
        if address == generator.address:
            yield generator, generator
            return
        oscilloscope = VisaLink(address, ending=line.ending, gap_seconds=line.gap_seconds)
        yield generator, opened.enter_context(contextlib.closing(oscilloscope))


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
        quiet(_generator(bench, link), link)


def _generator_link(bench: Bench, *, exclusive: bool = True) -> VisaLink:
    line = bench.generator_dialect.line
    return VisaLink(
        bench.model.generator.address,
        ending=line.ending,
        gap_seconds=line.gap_seconds,
        exclusive=exclusive,
    )


def _generator(bench: Bench, link: VisaLink) -> FunctionGenerator:
    section = bench.model.generator
    return FunctionGenerator(
        link,
        bench.generator_dialect,
        channel=int(section.channel),
        load=section.load,
        limit_volts=bench.panel_limit(),
    )
