"""The control port: virtual time and ground truth."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsetally.simulators import control
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.faults import KINDS
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.talking import patterns_of


class Talk:
    def __init__(self) -> None:
        self.bench = Bench(SimulationSettings(cell=CellDescription()))
        self._engine = ScpiEngine(self.bench.control)
        self._generator = ScpiEngine(self.bench.generator)

    def say(self, text: str) -> str:
        return self._engine.receive(text.encode() + b"\n").decode().removesuffix("\n")

    def number(self, query: str) -> float:
        return float(self.say(query))

    def output(self, text: str) -> None:
        self._generator.receive(text.encode() + b"\n")


@pytest.fixture
def talk() -> Talk:
    return Talk()


def test_the_clock_moves_as_told(talk: Talk) -> None:
    assert talk.number(":CLOC:TIME?") == 0
    talk.say(":CLOCk:ADVance 1.5;ADV 250 MS")
    assert talk.number(":CLOC:TIME?") == pytest.approx(1.75, rel=1e-15)
    talk.say(":CLOC:ADV -1")
    assert talk.say(":SYST:ERR?").startswith("-222,")


def test_the_cell_starts_fully_down_and_nothing_is_on(talk: Talk) -> None:
    assert talk.number(":TRUTh:POLarization?") == pytest.approx(-0.25)
    assert talk.number(":TRUT:UP?") == 0
    assert talk.say(":TRUT:OUTP?;DEL?") == "0;0"
    assert talk.number(":TRUT:NODE?") == talk.number(":TRUT:TERM?") == 0
    assert talk.number(":TRUT:MAX?") == talk.number(":TRUT:HIGH?") == 0


# FE-23 scaled (A): eps0 500 1e-8 m2 / 150 nm = 295.1396 pF, and 12 pF of probe.
def test_the_capacitance_is_that_of_cell_and_probe(talk: Talk) -> None:
    assert talk.number(":TRUT:CAP?") == pytest.approx(221.3547e-12 * 200 / 150 + 12e-12, rel=1e-6)


def test_a_pulse_is_seen_in_every_truth(talk: Talk) -> None:
    talk.output(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 100 US;TRAN 100 NS;TRAN:TRA 100 NS;:OUTP ON")
    talk.say(":CLOC:ADV 0.02")
    assert talk.say(":TRUT:OUTP?") == "1"
    talk.output(":INIT;*TRG")
    talk.say(":CLOC:ADV 90 US")
    assert talk.number(":TRUT:TERM?") == pytest.approx(4, abs=2e-3)
    node = talk.number(":TRUT:NODE?")
    assert 0.5 < node < 4
    talk.say(":CLOC:ADV 0.01")
    assert talk.number(":TRUT:MAX?") == pytest.approx(4, abs=1e-3)
    # The node rises until the pulse's end, 10 us after it was looked at, and falls from there.
    assert node < talk.number(":TRUT:HIGH?") < 4
    assert talk.number(":TRUT:NODE?") < 0.5
    assert talk.say(":TRUT:DEL?") == "1"
    up = talk.number(":TRUT:UP?")
    assert up > 0.01
    # A: P = P_r (2 u - 1).
    assert talk.number(":TRUT:POL?") == pytest.approx(0.25 * (2 * up - 1), abs=1e-9)


def test_truth_cannot_be_set(talk: Talk) -> None:
    talk.say(":TRUT:POL 0.1")
    assert talk.say(":SYST:ERR?").startswith("-113,")


def test_the_page_of_the_control_port_names_every_command_and_kind(talk: Talk) -> None:
    page = control.__doc__ or ""
    for pattern in patterns_of(talk.bench.control):
        if not pattern.startswith((":STAT", ":SYST")):
            *root, last = pattern.removeprefix(":").split(":")
            assert last in page, pattern
            assert f":{root[0]}:" in page, pattern
    for kind in KINDS.values():
        assert f"    {kind.word}" in page or f", {kind.word}" in page, kind


# Messages in any order to the three instruments: 0 generator, 1 oscilloscope, 2 control.
MESSAGES = [
    (0, ":VOLT:HIGH 4;LOW 0"),
    (0, ":VOLT:HIGH -2"),
    (0, ":VOLT:LOW -5"),
    (0, ":PULS:POL INV"),
    (0, ":PULS:WIDT 1 MS;COUN 3"),
    (0, ":OUTP1:LOAD 50"),
    (0, ":OUTP ON"),
    (0, ":OUTP OFF"),
    (0, ":INIT"),
    (0, "*TRG"),
    (0, ":INIT;*TRG"),
    (0, "*WAI"),
    (0, ":ABOR"),
    (0, "*RST"),
    (1, ":TRIG:SOUR INT1;LEV 1"),
    (1, ":TRIG:SOUR BUS"),
    (1, ":TRIG:SOUR EXT"),
    (1, ":SENS:SWE:POIN 100;OREF:LOC 0.5"),
    (1, ":INIT"),
    (1, "*TRG"),
    (1, "*WAI"),
    (1, ":ABOR"),
    (1, "*RST"),
    (2, ":CLOC:ADV 20 US"),
    (2, ":CLOC:ADV 2 MS"),
    (2, ":CLOC:ADV 15 MS"),
]


@settings(deadline=None, max_examples=60)
@given(st.lists(st.sampled_from(MESSAGES), max_size=15))
def test_any_order_of_messages_keeps_the_bench_whole(messages: list[tuple[int, str]]) -> None:
    bench = Bench(SimulationSettings(cell=CellDescription(regions=4)))
    generator, oscilloscope, truth = (
        ScpiEngine(device) for device in (bench.generator, bench.oscilloscope, bench.control)
    )
    for index, message in messages:
        assert (generator, oscilloscope, truth)[index].receive(f"{message}\n".encode()) == b""
        high, low = map(float, generator.receive(b":VOLT:HIGH?;LOW?\n").split(b";"))
        assert high > low
        condition = int(generator.receive(b":STAT:OPER:COND?\n"))
        assert condition & (8 + 32) != 8 + 32  # never waiting and running at once
        measuring = int(oscilloscope.receive(b":STAT:OPER:COND?\n"))
        assert measuring in (0, 16, 48)
        assert 0 <= bench.table.up_fraction <= 1
        assert abs(bench.table.terminal_volts) <= 10
    generator.receive(b"*RST\n")
    oscilloscope.receive(b":ABOR\n")
    assert truth.receive(b":TRUT:OUTP?\n") == b"0\n"
    assert oscilloscope.receive(b"*CLS;*RST;:INIT;*WAI;*OPC?;:SYST:ERR?\n") == b'1;0,"No error"\n'
