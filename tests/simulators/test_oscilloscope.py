"""The simulated oscilloscope, through its SCPI port, fed with waveforms of a closed form."""

import math
import re
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.digitizer import first_crossing
from pulsetally.simulators.imperfections import DigitizerImperfections
from pulsetally.simulators.scope_settings import next_step
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.simulate import Bench, SimulationSettings

LINEAR = CellDescription(remanent_polarization=1e-9)
# Noise alone, so that means tell what the digitizer saw.
TRUE = DigitizerImperfections(offset_shares=(0.0, 0.0), bandwidth_hertz=math.inf)

PREAMBLE = re.compile(
    r"\(DIF\(VERSion 1999\.0\)DIMension=X\(TYPE IMPLicit SCALe (\S+) OFFSet (\S+) SIZE (\d+) "
    r'UNITs "S"\)DIMension=Y\(TYPE EXPLicit SCALe (\S+) OFFSet (\S+) SIZE 4096 UNITs "V"\)\)'
)
ERROR_QUERY = b":SYST:ERR?\n"


class Talk:
    """A bench and one connection to its oscilloscope; time moves only when told to."""

    def __init__(self) -> None:
        self.bench = Bench(SimulationSettings(cell=LINEAR, digitizer=TRUE, seed=7))
        self._engine = ScpiEngine(self.bench.oscilloscope)
        self.generator = ScpiEngine(self.bench.generator)

    def ask(self, text: str) -> bytes:
        return self._engine.receive(text.encode() + b"\n")

    def say(self, text: str) -> str:
        return self.ask(text).decode().removesuffix("\n")

    def error(self) -> int:
        return int(self.say(":SYST:ERR?").split(",")[0])

    def advance(self, seconds: float) -> None:
        self.bench.clock.advance(seconds)

    def output(self, text: str) -> None:
        self.generator.receive(text.encode() + b"\n")

    def pulse(self, volts: float = 4.0) -> None:
        """Switch the generator on and have it ready with one 100 us pulse."""
        self.output(f":VOLT:HIGH {volts};LOW 0;:PULS:WIDT 1E-4;TRAN 1E-7;TRAN:TRA 1E-7;:OUTP ON")
        self.advance(0.02)

    def preamble(self, channel: int) -> list[float]:
        match = PREAMBLE.fullmatch(self.say(f":TRAC:DATA:PRE? CHAN{channel}"))
        assert match is not None
        return [float(field) for field in match.groups()]

    def codes(self, channel: int, order: str = ">i2") -> NDArray[Any]:
        answer = self.ask(f":TRAC:DATA? CHAN{channel}")
        digits = int(answer[1:2])
        length = int(answer[2 : 2 + digits])
        assert answer[2 + digits + length :] == b"\n"
        return np.frombuffer(answer[2 + digits : 2 + digits + length], order)

    def wave(self, channel: int) -> tuple[NDArray[Any], NDArray[Any]]:
        interval, first, points, scale, offset = self.preamble(channel)
        codes = self.codes(channel)
        assert len(codes) == points
        return first + interval * np.arange(points), codes * scale + offset


@pytest.fixture
def talk() -> Talk:
    return Talk()


@pytest.mark.parametrize(
    ("setting", "value"),
    [
        (":SENSe1:VOLTage:DC:RANGe:PTPeak 16", 16),
        (":SENSe2:VOLTage:RANGe:PTPeak 9", 16),  # 9 V / 8 becomes 2 V a division
        (":SENSe1:VOLTage:RANGe:PTPeak 8", 8),
        (":SENSe1:VOLTage:RANGe:PTPeak 8.1", 16),
        (":SENSe1:VOLTage:RANGe:PTPeak 30 MV", 0.04),
        (":SENSe2:VOLTage:DC:RANGe:OFFSet -1.25", -1.25),
        (":SENSe:SWEep:POINts 2000", 2000),
        (":SENSe:SWEep:TINTerval 1E-7", 1e-7),
        (":SENSe:SWEep:TINTerval 3 NS", 5e-9),
        (":SENSe:SWEep:TINTerval 1.1E-6", 2e-6),
        (":SENSe:SWEep:OREFerence:LOCation 0.25", 0.25),
        (":TRIGger:LEVel 2.5", 2.5),
    ],
)
def test_a_setting_is_read_back_rounded_without_a_word(
    talk: Talk, setting: str, value: float
) -> None:
    talk.say(setting)
    assert float(talk.say(setting.split(" ")[0] + "?")) == pytest.approx(value, rel=1e-11)
    assert talk.error() == 0


@pytest.mark.parametrize(
    ("setting", "answer"),
    [
        (":TRIGger:SEQuence:SOURce INTernal1", "INT1"),
        (":TRIGger:SOURce INT2", "INT2"),
        (":TRIGger:SOURce EXTernal", "EXT"),
        (":TRIGger:SOURce BUS", "BUS"),
        (":TRIGger:SOURce IMMediate", "IMM"),
        (":TRIGger:SLOPe NEGative", "NEG"),
        (":TRIGger:SLOPe POSitive", "POS"),
        (":FORMat:DATA INTeger,16", "INT,16"),
        (":FORMat INT", "INT,16"),
        (":FORMat ASCii", "ASC,0"),
        (":FORMat:BORDer SWAPped", "SWAP"),
        (":FORMat:BORDer NORMal", "NORM"),
    ],
)
def test_a_word_is_read_back(talk: Talk, setting: str, answer: str) -> None:
    talk.say(setting)
    assert talk.say(setting.split(" ")[0] + "?") == answer
    assert talk.error() == 0


@pytest.mark.parametrize(
    ("message", "number"),
    [
        (":SENS3:VOLT:RANG:PTP 1", -114),
        (":SENS1:VOLT:RANG:PTP 81", -222),
        (":SENS:SWE:POIN 9", -222),
        (":SENS:SWE:POIN 2000001", -222),
        (":SENS:SWE:TINT 0.9 NS", -222),
        (":SENS:SWE:OREF:LOC 1.1", -222),
        (":TRIG:SOUR LINE", -224),
        (":FORM INT,8", -224),
        (":FORM:DATA INT,16;BORD SWAP;:FORM INT,16;BORD SWAP", -113),
        (":TRAC:DATA? CHAN3", -224),
        (":TRAC:DATA? CHAN1", -230),
        (":TRAC:DATA:PRE? CHAN2", -230),
        ("*TRG", -211),
        (":INIT;:INIT", -213),
    ],
)
def test_what_it_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.say(message) == ""
    assert talk.error() == number
    assert talk.error() == 0


def test_it_is_armed_only_when_the_pre_trigger_has_filled(talk: Talk) -> None:
    talk.say(":SENS:SWE:POIN 101;TINT 1E-4;OREF:LOC 0.5;:TRIG:SOUR BUS;:INIT")
    assert talk.say(":STAT:OPER:COND?") == "16"
    talk.say("*TRG")
    assert talk.error() == -211
    talk.advance(0.0049)
    assert talk.say(":STAT:OPER:COND?") == "16"
    talk.advance(0.0002)
    assert talk.say(":STAT:OPER:COND?") == "48"
    talk.say("*TRG")
    assert talk.say(":STAT:OPER:COND?") == "16"
    talk.advance(0.0049)
    assert talk.say(":STAT:OPER:COND?") == "16"
    talk.advance(0.0002)
    assert talk.say(":STAT:OPER:COND?;EVEN?") == "0;48"
    assert talk.preamble(1)[:3] == pytest.approx([1e-4, -5e-3, 101], abs=1e-4)


def test_a_trigger_before_it_is_armed_is_lost(talk: Talk) -> None:
    talk.pulse()
    talk.say(":SENS:SWE:POIN 1001;TINT 1E-6;OREF:LOC 0.5;:TRIG:SOUR INT1;LEV 2;:INIT")
    talk.output(":INIT;*TRG")
    talk.advance(0.01)
    assert talk.say(":STAT:OPER:COND?") == "48"
    talk.output(":INIT;*TRG")
    talk.advance(0.01)
    assert talk.say(":STAT:OPER:COND?") == "0"


def test_a_finished_record_is_stale_once_initiated_again(talk: Talk) -> None:
    talk.say(":INIT;*WAI")
    assert len(talk.codes(1)) == 1000
    talk.say(":TRIG:SOUR BUS;:INIT;:TRAC? CHAN1")
    assert talk.error() == -230
    talk.say(":ABOR")
    assert talk.say(":STAT:OPER:COND?") == "0"
    talk.say(":TRAC? CHAN1")
    assert talk.error() == -230


@pytest.mark.parametrize(("slope", "edge_seconds"), [("POS", 0.0), ("NEG", 1e-4)])
def test_the_trigger_instant_is_exact_between_the_samples(
    talk: Talk, slope: str, edge_seconds: float
) -> None:
    talk.pulse()
    talk.say(f":SENS:SWE:POIN 1000;TINT 1E-6;OREF:LOC 0.5;:TRIG:SOUR INT1;LEV 2;SLOP {slope}")
    talk.say(":SENS1:VOLT:RANG:PTP 16;:INIT")
    talk.advance(0.001234567)
    fired = talk.bench.clock.now
    talk.output(":INIT;*TRG")
    began = fired - 0.001234567
    talk.advance(0.01)
    # A: the leading edge (100 ns from 10 % to 90 %) passes its middle 62.5 ns after the
    # start; 2 V is the middle but for the source's loading by the cell (below 1 mV).
    crossing = fired + 62.5e-9 + edge_seconds
    interval, first, *_ = talk.preamble(1)
    # The first sample lies on the sample clock, which began with INITiate.
    steps = (crossing + first - began) / interval
    assert steps == pytest.approx(round(steps), abs=1e-3)
    assert -500.5 * interval < first <= -498.5 * interval


def test_levels_and_edges_are_seen_where_they_are(talk: Talk) -> None:
    talk.pulse()
    talk.say(":SENS:SWE:POIN 2000;TINT 1E-7;OREF:LOC 0.1;:TRIG:SOUR INT1;LEV 2")
    talk.say(":SENS1:VOLT:RANG:PTP 16;OFFS 2;:INIT")
    talk.advance(0.001)
    talk.output(":INIT;*TRG")
    talk.advance(0.001)
    times, volts = talk.wave(1)
    code = 16 / 4096
    top = volts[(times > 1e-6) & (times < 99e-6)]
    rest = volts[times < -1e-6]
    # Five standard errors of the mean.
    assert np.mean(rest) == pytest.approx(0, abs=5 * 1.5 * code / np.sqrt(rest.size))
    assert np.max(top) < 4 + 6 * code
    assert np.mean(top) == pytest.approx(4, abs=1.5e-3)  # 50 ohm against 220 kohm
    assert np.count_nonzero(volts > 2) == pytest.approx(1000, abs=2)  # 100 us at 50 %


def test_noise_is_one_and_a_half_codes(talk: Talk) -> None:
    talk.say(":SENS:SWE:POIN 100000;:SENS2:VOLT:RANG:OFFS 0.1;:INIT;*WAI")
    for channel in (1, 2):
        codes = talk.codes(channel)
        # Rounding adds 1/12 (A); a sample of 1e5 knows its deviation to 0.3 %.
        assert np.std(codes) == pytest.approx(np.sqrt(1.5**2 + 1 / 12), rel=0.02)
        assert abs(np.mean(codes) * 8 / 4096 - (0 if channel == 1 else -0.1)) < 1e-4
    assert abs(np.corrcoef(talk.codes(1), talk.codes(2))[0, 1]) < 0.02


@pytest.mark.parametrize(("offset", "code"), [(-3.0, 2047), (3.0, -2048)])
def test_it_clips_at_both_ends(talk: Talk, offset: float, code: int) -> None:
    talk.say(f":SENS1:VOLT:RANG:PTP 0.8;OFFS {offset};:INIT;*WAI")
    assert set(talk.codes(1).tolist()) == {code}


def test_both_byte_orders_and_text_tell_the_same(talk: Talk) -> None:
    talk.say(":SENS:SWE:POIN 200;:SENS1:VOLT:RANG:OFFS 0.5;:INIT;*WAI")
    scale, offset = talk.preamble(1)[3:]
    big = talk.codes(1)
    talk.say(":FORM:BORD SWAP")
    assert talk.codes(1, "<i2").tolist() == big.tolist()
    assert (talk.codes(1, ">i2") != big).any()
    talk.say(":FORM ASC")
    volts = [float(text) for text in talk.say(":TRAC? CHAN1").split(",")]
    assert volts == pytest.approx((big * scale + offset).tolist(), abs=1e-6)


def test_the_preamble_keeps_what_the_record_was_taken_with(talk: Talk) -> None:
    talk.say(":SENS1:VOLT:RANG:PTP 16;OFFS 1;:INIT;*WAI;:SENS1:VOLT:RANG:PTP 8;OFFS 0")
    talk.say(":SENS:SWE:POIN 50")
    assert talk.preamble(1)[2:] == pytest.approx([1000, 16 / 4096, 1])


def test_sources_other_than_the_inputs(talk: Talk) -> None:
    talk.pulse()
    talk.say(":SENS:SWE:POIN 100;:TRIG:SOUR EXT;:INIT")
    talk.advance(0.01)
    assert talk.say(":STAT:OPER:COND?") == "48"
    fired = talk.bench.clock.now
    talk.output(":INIT;*TRG")
    talk.advance(0.001)
    assert talk.say(":STAT:OPER:COND?") == "0"
    assert fired + talk.preamble(1)[1] == pytest.approx(fired, abs=1e-6)
    talk.say(":TRIG:SOUR INT2;LEV 1;:INIT")
    talk.output("*WAI;:INIT;*TRG")
    talk.advance(0.001)
    assert talk.say(":STAT:OPER:COND?") == "0"
    times, volts = talk.wave(2)
    assert volts[0] == pytest.approx(1, abs=0.06)
    assert times[0] < 1e-6


def test_waiting_without_a_trigger_is_a_deadlock(talk: Talk) -> None:
    assert talk.say(":TRIG:SOUR INT1;LEV 3;:INIT;*OPC?") == ""
    assert talk.error() == -214


def test_waiting_jumps_to_the_end_of_the_record(talk: Talk) -> None:
    began = talk.bench.clock.now
    assert talk.say(":SENS:SWE:POIN 1000;TINT 1E-5;OREF:LOC 0.5;:INIT;*OPC?") == "1"
    assert talk.bench.clock.now - began >= 999e-5
    assert talk.preamble(1)[1] == pytest.approx(-5e-3, abs=2e-5)


def test_the_opc_bit_comes_with_the_record(talk: Talk) -> None:
    talk.say("*CLS;:INIT;*OPC")
    assert talk.say("*ESR?") == "0"
    talk.advance(0.01)
    assert talk.say("*ESR?") == "1"


def test_the_same_seed_gives_the_same_noise() -> None:
    first, second = Talk(), Talk()
    for talk in (first, second):
        talk.say(":INIT;*WAI")
    assert first.codes(1).tolist() == second.codes(1).tolist()


def test_long_waits_keep_no_more_than_the_window(talk: Talk) -> None:
    talk.pulse()
    talk.say(":SENS:SWE:POIN 100;TINT 1E-6;OREF:LOC 0.5;:TRIG:SOUR INT1;LEV 3.99;SLOP NEG;:INIT")
    for _ in range(50):
        talk.advance(0.001)
    assert talk.bench.digitizer.is_acquiring
    assert talk.bench.digitizer.kept_stretches <= 3


@pytest.mark.parametrize(
    ("asked", "given"),
    [
        (1e-9, 1e-9),
        (1.01e-9, 2e-9),
        (2e-9, 2e-9),
        (3e-6, 5e-6),
        (0.5, 0.5),
        (0.51, 1),
        (6, 10),
        (9.99e-4, 1e-3),
        (1e-3, 1e-3),
        (10, 10),
    ],
)
def test_one_two_five_steps(asked: float, given: float) -> None:
    assert next_step(asked) == given


def test_crossings_are_found_between_samples_and_at_jumps() -> None:
    times = np.array([0.0, 1.0, 2.0, 2.0, 3.0, 4.0])
    volts = np.array([0.0, 1.0, 1.0, 5.0, 0.0, 4.0])

    def found(level: float, rising: bool, start: float = 0.0) -> float | None:
        return first_crossing(times, volts, level_volts=level, rising=rising, from_seconds=start)

    assert found(0.25, True) == 0.25
    assert found(3.0, True) == 2.0
    assert found(2.5, False) == 2.5
    assert found(2.0, True, start=2.1) == 3.5
    assert found(6.0, True) is None
    assert found(0.25, True, start=0.3) == 3.0625
