"""Open what a bench file names: links, drivers and clock."""

import contextlib
from dataclasses import dataclass

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.oscilloscope import Oscilloscope
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.clock import BenchClock, Clock, WallClock
from pulsetally.sequencer.safety import quiet


@dataclass(frozen=True, slots=True, kw_only=True)
class Instruments:
    """Hold an open bench. generator_link is needed to go quiet over a fresh link."""

    generator: FunctionGenerator
    generator_link: VisaLink
    oscilloscope: Oscilloscope
    clock: Clock
    links: tuple[VisaLink, ...]

    def quiet(self) -> None:
        """Switch the output off and verify it. Raises OutputsNotConfirmed."""
        quiet(self.generator, self.generator_link)

    def close(self) -> None:
        """Give all lines back."""
        for link in self.links:
            link.close()


def open_instruments(bench: Bench) -> Instruments:
    """Open all links of a bench; nothing is set and nothing is switched.

    Raises LinkError or BadReply for the first instrument that is not there or no SCPI
    instrument; what was open before it is closed again.
    """
    model = bench.model
    links: list[VisaLink] = []
    try:
        for address, line in (
            (model.generator.address, bench.generator_dialect.line),
            (model.oscilloscope.address, bench.oscilloscope_dialect.line),
        ):
            # Some oscilloscopes have a generator built in: one instrument, one line.
            if not links or links[0].address != address:
                links.append(VisaLink(address, ending=line.ending, gap_seconds=line.gap_seconds))
        generator = FunctionGenerator(
            links[0],
            bench.generator_dialect,
            channel=int(model.generator.channel),
            load=model.generator.load,
            limit_volts=bench.panel_limit(),
        )
        oscilloscope = Oscilloscope(links[-1], bench.oscilloscope_dialect)
        generator.identify()
        oscilloscope.identify()
        clock: Clock = WallClock()
        if model.clock is not None:
            links.append(VisaLink(model.clock))
            clock = BenchClock(links[-1])
    except PulsetallyError:
        for link in links:
            with contextlib.suppress(Exception):
                link.close()
        raise
    return Instruments(
        generator=generator,
        generator_link=links[0],
        oscilloscope=oscilloscope,
        clock=clock,
        links=tuple(links),
    )
