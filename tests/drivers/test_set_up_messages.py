"""In how many messages instruments are set up, and that nothing goes unnoticed for it."""

from collections.abc import Iterator
from contextlib import closing

import pytest

from pulsetally.drivers.errors import InstrumentComplaint, SettingRefused
from pulsetally.drivers.function_generator import FunctionGenerator, PulseSetting
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.oscilloscope import AcquisitionSetting, Oscilloscope
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, simulated

FAMILIES = ("scpi99", "perdiv", "stateword")

PULSE = PulseSetting(base=0.0, level=4.0, width=1e-4, edge=1e-7, period=1e-3)
ACQUISITION = AcquisitionSetting(
    sample_interval=1e-7,
    points=2000,
    before=0.1,
    ranges={1: (-0.4, 4.4), 2: (-0.4, 4.4)},
    trigger_channel=1,
    trigger_volts=2.0,
    rising=True,
)


@pytest.fixture(params=FAMILIES)
def table(request: pytest.FixtureRequest) -> Iterator[Simulated]:
    with simulated(SimulationSettings(family=request.param)) as running:
        yield running


def exchanges(table: Simulated, instrument: str) -> int:
    with table.client(table.addresses.control) as client:
        return int(client.ask(f":FAULt:EXCHanges? {instrument}"))


def lines(table: Simulated) -> tuple[VisaLink, VisaLink]:
    bench = table.bench
    generator, oscilloscope = (
        VisaLink(address, ending=dialect.line.ending, gap_seconds=dialect.line.gap_seconds)
        for address, dialect in (
            (table.addresses.generator, bench.generator_dialect),
            (table.addresses.oscilloscope, bench.oscilloscope_dialect),
        )
    )
    return generator, oscilloscope


def test_a_set_up_takes_few_messages_in_every_language(table: Simulated) -> None:
    one, other = lines(table)
    with closing(one), closing(other):
        generator = FunctionGenerator(one, table.bench.generator_dialect, limit_volts=8.0)
        oscilloscope = Oscilloscope(other, table.bench.oscilloscope_dialect)
        generator.prepare()
        oscilloscope.prepare()
        before = exchanges(table, "GENerator")
        found = generator.set_pulse(PULSE)
        # Off and read back; set; errors and what was set.
        assert exchanges(table, "GENerator") - before == 3
        assert found["width"] == pytest.approx(1e-4, rel=2e-3)
        before = exchanges(table, "OSCilloscope")
        seen = oscilloscope.set_acquisition(ACQUISITION)
        assert exchanges(table, "OSCilloscope") - before == 2
        assert any(name.startswith("channel 1 ") for name in seen)
        assert any(name.startswith("channel 2 ") for name in seen)


def test_a_complaint_in_a_set_up_is_told_and_its_queue_emptied(table: Simulated) -> None:
    one, other = lines(table)
    with closing(one), closing(other):
        generator = FunctionGenerator(one, table.bench.generator_dialect, limit_volts=8.0)
        generator.prepare()
        with table.client(table.addresses.control) as client:
            # The message after the one that switches off.
            client.ask(":FAULt:ADD ERRor,GENerator,2,-222;:FAULt:PENDing?")
        with pytest.raises(InstrumentComplaint, match="-222"):
            generator.set_pulse(PULSE)
        assert generator.errors() == []


def test_a_value_that_was_made_something_else_is_told(table: Simulated) -> None:
    one, other = lines(table)
    with closing(one), closing(other):
        oscilloscope = Oscilloscope(other, table.bench.oscilloscope_dialect)
        oscilloscope.prepare()
        # 1 us and a bit lies between two steps of its time base, and it rounds without a word.
        odd = AcquisitionSetting(
            sample_interval=1.3e-7,
            points=2000,
            before=0.1,
            ranges={1: (-0.4, 4.4), 2: (-0.4, 4.4)},
            trigger_channel=1,
            trigger_volts=2.0,
            rising=True,
        )
        with pytest.raises(SettingRefused):
            oscilloscope.set_acquisition(odd)


class Written:
    """A line that keeps what is written to it, and answers nothing."""

    address = "TCPIP::192.0.2.1::5025::SOCKET"

    def __init__(self) -> None:
        self.messages: list[str] = []

    def write(self, command: str) -> None:
        self.messages.append(command)

    def ask(self, command: str) -> str:
        raise AssertionError(f"{command} was asked")

    def ask_block(self, command: str, *, line_end: bool = True, header: bool = False) -> bytes:
        raise AssertionError(f"{command} was asked")


def test_what_is_ended_is_the_channel_that_sends() -> None:
    with simulated(SimulationSettings(family="stateword")) as running:
        dialect = running.bench.generator_dialect
    line = Written()
    FunctionGenerator(line, dialect, channel=2, limit_volts=8.0).abort()
    assert line.messages == [":CH2:STOP"]
