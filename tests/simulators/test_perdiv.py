"""The perdiv family against its description: every header, every refusal, the bytes."""

from itertools import permutations

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.imperfections import SourceImperfections
from tests.simulators.talking import (
    Line,
    Setting,
    Talk,
    block,
    falling_edge_seconds,
    patterns_of,
)

VOLTS_PER_CODE = SourceImperfections().volts_per_code

# Written off the description of the family, not off its code. Levels have steps of 20 V
# in 14 bits, so that amplitude and offset are known to one step (A).
STEP = VOLTS_PER_CODE
GENERATOR = [
    Setting(pattern=":SOURce<1>:FUNCtion", send="SOURce1:FUNCtion PULSe", answer="PULS"),
    Setting(pattern=":SOURce<1>:VOLTage", send="SOURce1:VOLTage 3", answer=3.0, within=STEP),
    Setting(
        pattern=":SOURce<1>:VOLTage:OFFSet",
        send="SOURce1:VOLTage:OFFSet -2.5",
        answer=-2.5,
        within=STEP,
    ),
    Setting(pattern=":OUTPut<1>:POLarity", send="OUTPut1:POLarity INVerted", answer="INV"),
    Setting(pattern=":OUTPut<1>:POLarity", send="OUTPut1:POLarity NORMal", answer="NORM"),
    Setting(pattern=":SOURce<1>:FREQuency", send="SOURce1:FREQuency 250", answer=250.0),
    Setting(pattern=":SOURce<1>:FREQuency", send="SOURce1:FREQuency 2 KHZ", answer=2000.0),
    Setting(
        pattern=":SOURce<1>:FUNCtion:PULSe:WIDTh",
        send="SOURce1:FUNCtion:PULSe:WIDTh 250 US",
        answer=250e-6,
    ),
    Setting(
        pattern=":SOURce<1>:FUNCtion:PULSe:TRANsition",
        send="SOURce1:FUNCtion:PULSe:TRANsition 1E-7",
        answer=1e-7,
    ),
    Setting(pattern=":SOURce<1>:BURSt:STATe", send="SOURce1:BURSt:STATe ON", answer="1"),
    Setting(pattern=":SOURce<1>:BURSt:STATe", send="SOURce1:BURSt:STATe 1", answer="1"),
    Setting(pattern=":SOURce<1>:BURSt:STATe", send="SOURce1:BURSt:STATe OFF", answer="0"),
    Setting(pattern=":SOURce<1>:BURSt:MODE", send="SOURce1:BURSt:MODE TRIGgered", answer="TRIG"),
    Setting(pattern=":SOURce<1>:BURSt:NCYCles", send="SOURce1:BURSt:NCYCles 12", answer="12"),
    Setting(pattern=":TRIGger<1>:SOURce", send="TRIGger1:SOURce EXTernal", answer="EXT"),
    Setting(pattern=":TRIGger<1>:SOURce", send="TRIGger1:SOURce IMMediate", answer="IMM"),
    Setting(pattern=":TRIGger<1>:SOURce", send="TRIGger1:SOURce BUS", answer="BUS"),
    Setting(pattern=":OUTPut<1>[:STATe]", send="OUTPut1:STATe ON", answer="1"),
    Setting(pattern=":OUTPut<1>[:STATe]", send="OUTPut1 0", answer="0"),
    Setting(pattern=":OUTPut<1>:LOAD", send="OUTPut1:LOAD 50", answer=50.0),
    Setting(pattern=":OUTPut<1>:LOAD", send="OUTPut1:LOAD INFinity", answer="9.9E+37"),
]
OSCILLOSCOPE = [
    Setting(pattern=":CHANnel<1-2>:SCALe", send="CHANnel1:SCALe 2", answer=2.0),
    Setting(pattern=":CHANnel<1-2>:SCALe", send="CHANnel2:SCALe 0.3", answer=0.5),
    Setting(pattern=":CHANnel<1-2>:SCALe", send="CHANnel2:SCALe 6", answer=10.0),
    Setting(pattern=":CHANnel<1-2>:OFFSet", send="CHANnel2:OFFSet -1.25", answer=-1.25),
    Setting(pattern=":TIMebase:SCALe", send="TIMebase:SCALe 2E-5", answer=2e-5),
    Setting(pattern=":TIMebase:SCALe", send="TIMebase:SCALe 2.1E-5", answer=5e-5),
    Setting(pattern=":TIMebase:POSition", send="TIMebase:POSition 3E-4", answer=3e-4),
    Setting(pattern=":TIMebase:POSition", send="TIMebase:POSition -1E-4", answer=-1e-4),
    Setting(pattern=":ACQuire:POINts", send="ACQuire:POINts 2500", answer="2500"),
    Setting(pattern=":TRIGger:EDGE:SOURce", send="TRIGger:EDGE:SOURce CHANnel2", answer="CHAN2"),
    Setting(pattern=":TRIGger:EDGE:SOURce", send="TRIGger:EDGE:SOURce EXTernal", answer="EXT"),
    Setting(pattern=":TRIGger:EDGE:SOURce", send="TRIGger:EDGE:SOURce CHANnel1", answer="CHAN1"),
    Setting(pattern=":TRIGger:EDGE:LEVel", send="TRIGger:EDGE:LEVel 2.5", answer=2.5),
    Setting(pattern=":TRIGger:EDGE:SLOPe", send="TRIGger:EDGE:SLOPe NEGative", answer="NEG"),
    Setting(pattern=":TRIGger:EDGE:SLOPe", send="TRIGger:EDGE:SLOPe POSitive", answer="POS"),
    Setting(pattern=":WAVeform:SOURce", send="WAVeform:SOURce CHANnel2", answer="CHAN2"),
    Setting(pattern=":WAVeform:FORMat", send="WAVeform:FORMat ASCii", answer="ASC"),
    Setting(pattern=":WAVeform:FORMat", send="WAVeform:FORMat BYTE", answer="BYTE"),
]
# What is no setting, with its short form; what it does has a test below.
DEEDS = {
    ":SYSTem:ERRor": "SYST:ERR?",
    ":SOURce<1>:BURSt:RUNNing": "SOUR1:BURS:RUNN?",
    ":SOURce<1>:BURSt:COUNt": "SOUR1:BURS:COUN?",
    ":ABORt": "ABOR",
    ":SINGle": "SING",
    ":STOP": "STOP",
    ":FORCe": "FORC",
    ":ACQuire:STATe": "ACQ:STAT?",
    ":WAVeform:PREamble": "WAV:PRE?",
    ":WAVeform:DATA": "WAV:DATA?",
}


@pytest.fixture
def talk() -> Talk:
    return Talk("perdiv")


def error(line: Line) -> int:
    return int(line.say("SYST:ERR?").split(",")[0])


def check(line: Line, setting: Setting, query: str) -> None:
    answer = line.say(query)
    if isinstance(setting.answer, str):
        assert answer == setting.answer
    else:
        assert float(answer) == pytest.approx(setting.answer, rel=1e-11, abs=setting.within)
    assert error(line) == 0


def test_the_tables_here_hold_every_header(talk: Talk) -> None:
    told = {setting.pattern for setting in (*GENERATOR, *OSCILLOSCOPE)} | set(DEEDS)
    devices = (talk.generator.device, talk.oscilloscope.device)
    assert told == set().union(*map(patterns_of, devices))


@pytest.mark.parametrize("setting", GENERATOR, ids=lambda row: row.send)
def test_a_generator_setting_is_read_back(talk: Talk, setting: Setting) -> None:
    talk.generator.say(setting.send)
    check(talk.generator, setting, setting.query)
    # Capitals are the short form.
    check(talk.generator, setting, "".join(c for c in setting.query if not c.islower()))


@pytest.mark.parametrize("setting", OSCILLOSCOPE, ids=lambda row: row.send)
def test_an_oscilloscope_setting_is_read_back(talk: Talk, setting: Setting) -> None:
    talk.oscilloscope.say(setting.send)
    check(talk.oscilloscope, setting, setting.query)
    check(talk.oscilloscope, setting, "".join(c for c in setting.query if not c.islower()))


@pytest.mark.parametrize(("pattern", "short"), DEEDS.items())
def test_what_is_no_setting_is_known_by_its_long_and_short_form(
    talk: Talk, pattern: str, short: str
) -> None:
    lines = (talk.generator, talk.oscilloscope)
    line = next(line for line in lines if pattern in patterns_of(line.device))
    long = pattern.removeprefix(":").replace("<1>", "1") + "?" * short.endswith("?")
    for message in (long, short, short.lower()):
        line.say(message)
        # Without a record there is nothing to fetch, and without arming nothing to trigger,
        # but the header is known.
        refusal = -230 if "WAV" in short else -211 if "FORC" in short else 0
        assert error(line) == refusal


def test_reset_restores_everything(talk: Talk) -> None:
    for line, rows in ((talk.generator, GENERATOR), (talk.oscilloscope, OSCILLOSCOPE)):
        initial = [line.say(row.query) for row in rows]
        for row in rows:
            line.say(row.send)
        assert [line.say(row.query) for row in rows] != initial
        line.say("*RST")
        assert [line.say(row.query) for row in rows] == initial
        assert error(line) == 0


def test_identity_and_the_sign_of_the_error_number(talk: Talk) -> None:
    for line, name in (
        (talk.generator, "FUNCTION GENERATOR"),
        (talk.oscilloscope, "OSCILLOSCOPE"),
    ):
        assert line.say("*IDN?") == f"PULSETALLY,SIMULATED {name} PERDIV,7,1"
        assert line.ask("SYSTem:ERRor?") == b'+0,"No error"\n'
    talk.generator.say("SOUR1:VOLT 21")
    assert talk.generator.ask("SYST:ERR?") == b'-222,"Data out of range"\n'


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("SOUR1:FUNC SIN", -224),
        ("SOUR1:VOLT 0", -222),
        ("SOUR1:VOLT -1", -222),
        ("SOUR1:VOLT 20.1", -222),
        ("SOUR1:VOLT:OFFS 10.1", -222),
        ("SOUR1:VOLT 4;VOLT:OFFS 9", -221),
        ("SOUR1:FREQ 3E7", -222),
        ("SOUR1:FREQ 0", -222),
        ("SOUR1:FREQ 1 V", -131),
        ("SOUR1:FUNC:PULS:WIDT 1 NS", -222),
        ("SOUR1:FUNC:PULS:WIDT 2E-3", -221),
        ("SOUR1:FUNC:PULS:WIDT 1 US;TRAN 2 US", -221),
        ("SOUR1:FREQ 9999", -221),
        ("SOUR1:BURS:MODE GATed", -224),
        ("SOUR1:BURS:NCYC 0", -222),
        ("TRIG1:SOUR LINE", -224),
        ("OUTP1:LOAD 0", -222),
        ("OUTP2 ON", -114),
        ("OUTP1:POL UP", -224),
        ("SOUR1:VOLT:HIGH 1", -113),
        ("INIT", -113),
        ("STAT:OPER:COND?", -113),
        ("*TRG", -211),
        ("SOUR1:BURS:STAT ON;:TRIG1:SOUR EXT;*TRG", -211),
        ("SOUR1:BURS:STAT ON;:TRIG1:SOUR IMM;*TRG", -211),
        ("SOUR1:BURS:STAT ON;*TRG;*TRG", -211),
        ("SOUR1:VOLT 9;VOLT:OFFS 9;:OUTP1 ON", -221),
    ],
)
def test_what_the_generator_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.generator.say(message) == ""
    assert error(talk.generator) == number
    assert talk.bench.generator_model.relay_on is False


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("CHAN1:SCAL 11", -222),
        ("CHAN3:SCAL 1", -114),
        ("CHAN1:OFFS 41", -222),
        ("TIM:SCAL 0", -222),
        ("TIM:SCAL 11", -222),
        ("ACQ:POIN 9", -222),
        ("ACQ:POIN 2000001", -222),
        ("TRIG:EDGE:SOUR BUS", -224),
        ("TRIG:EDGE:SLOP RISE", -224),
        ("TRIG:LEV 1", -113),
        ("WAV:SOUR CHAN3", -224),
        ("WAV:FORM WORD", -224),
        ("INIT", -113),
        ("*TRG", -211),
        ("WAV:DATA?", -230),
        ("WAV:PRE?", -230),
        ("SING;:WAV:DATA?", -230),
    ],
)
def test_what_the_oscilloscope_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.oscilloscope.say(message) == ""
    assert error(talk.oscilloscope) == number
    assert error(talk.oscilloscope) == 0


# A: high = offset + amplitude/2, low = offset - amplitude/2, each rounded once to the
# nearest of 2^14 steps over 20 V, whatever came first.
@pytest.mark.parametrize(
    "order", list(permutations(("SOUR1:VOLT 4", "SOUR1:VOLT:OFFS 2", "OUTP1:POL NORM")))
)
def test_amplitude_and_offset_make_the_levels_in_any_order(
    talk: Talk, order: tuple[str, ...]
) -> None:
    for message in order:
        talk.generator.say(message)
    wanted = talk.bench.generator_model.wanted
    assert wanted.high_volts == round(4 / STEP) * STEP
    assert wanted.low_volts == 0
    talk.generator.say("OUTP1 ON")
    talk.advance(0.02)
    talk.generator.say("OUTP1:POL INV")
    talk.advance(0.02)
    assert talk.bench.table.terminal_volts == pytest.approx(4, abs=2e-3)


def test_a_changed_load_rescales_the_panel_and_leaves_the_levels_alone(talk: Talk) -> None:
    talk.generator.say("OUTP1:LOAD 50;:SOUR1:VOLT 10;VOLT:OFFS 0")
    before = talk.bench.generator_model.wanted
    talk.generator.say("OUTP1:LOAD INF")
    after = talk.bench.generator_model.wanted
    assert (after.high_volts, after.low_volts) == (before.high_volts, before.low_volts)
    assert float(talk.generator.say("SOUR1:VOLT?")) == pytest.approx(20, abs=2 * STEP)  # LOAD-1
    assert error(talk.generator) == 0


def test_one_trigger_fires_one_burst(talk: Talk) -> None:
    say = talk.generator.say
    say("SOUR1:VOLT 4;VOLT:OFFS 2;:SOUR1:BURS:STAT ON;NCYC 3;:OUTP1 ON")
    talk.advance(0.02)
    say("*TRG")
    assert say("SOUR1:BURS:RUNN?") == "1"
    talk.advance(0.0015)
    assert say("SOUR1:BURS:RUNN?") == "1"
    talk.advance(0.0015)
    assert say("SOUR1:BURS:RUNN?") == "0"
    assert talk.bench.table.delivered == 3
    assert say("*TRG;*OPC?") == "1"
    assert talk.bench.table.delivered == 6
    assert error(talk.generator) == 0


def test_abort_ends_a_burst(talk: Talk) -> None:
    say = talk.generator.say
    say("SOUR1:VOLT 4;VOLT:OFFS 2;:SOUR1:BURS:STAT ON;NCYC 9;:OUTP1 ON")
    talk.advance(0.02)
    say("*TRG")
    talk.advance(0.0025)
    say("ABORt")
    assert say("SOUR1:BURS:RUNN?") == "0"
    talk.advance(0.02)
    assert talk.bench.table.delivered == 3


def preamble(line: Line) -> list[float]:
    fields = line.say("WAV:PRE?").split(",")
    assert len(fields) == 10
    return [float(field) for field in fields]


def shoot(talk: Talk, setup: str) -> None:
    """Fire one 4 V pulse of 100 us into a single acquisition, triggered by the sync output."""
    talk.generator.say("SOUR1:VOLT 4;VOLT:OFFS 2;:SOUR1:FUNC:PULS:WIDT 1E-4;TRAN 1E-7")
    talk.generator.say("SOUR1:BURS:STAT ON;:OUTP1 ON")
    talk.advance(0.02)
    talk.oscilloscope.say("TRIG:EDGE:SOUR EXT;:CHAN1:SCAL 1;OFFS 1")
    talk.oscilloscope.say(setup)
    talk.oscilloscope.say("SING")
    talk.advance(0.02)
    talk.generator.say("*TRG")
    talk.advance(0.02)
    assert talk.oscilloscope.say("ACQ:STAT?") == "4"


def wave(line: Line) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return times and volts as the description says they are to be computed."""
    _, _, points, _, xinc, xorigin, xref, yinc, yorigin, yref = preamble(line)
    codes = np.frombuffer(block(line.ask("WAV:DATA?"), behind=b"\n"), np.uint8).astype(np.float64)
    assert codes.size == points
    index = np.arange(codes.size, dtype=np.float64)
    return (index - xref) * xinc + xorigin, (codes - yref) * yinc + yorigin


def test_the_states_of_an_acquisition(talk: Talk) -> None:
    say = talk.oscilloscope.say
    say("TIM:SCAL 1E-3;POS 0;:ACQ:POIN 1000;:TRIG:EDGE:SOUR EXT")
    assert say("ACQ:STAT?") == "0"
    say("SING")
    assert say("ACQ:STAT?") == "1"
    talk.advance(0.0049)
    assert say("ACQ:STAT?") == "1"
    talk.advance(0.0002)
    assert say("ACQ:STAT?") == "2"
    say("SINGle")  # once more: no error, and the pre-trigger fills anew
    assert say("ACQ:STAT?") == "1"
    say("STOP")
    assert say("ACQ:STAT?") == "0"
    say("SING")
    talk.advance(0.006)
    talk.generator.say("SOUR1:BURS:STAT ON;*TRG")
    assert say("ACQ:STAT?") == "3"
    talk.advance(0.0049)
    assert say("ACQ:STAT?") == "3"
    talk.advance(0.0002)
    assert say("ACQ:STAT?") == "4"
    say("STOP")
    assert say("ACQ:STAT?") == "4"
    say("SING")
    assert say("ACQ:STAT?") == "1"
    assert error(talk.oscilloscope) == error(talk.generator) == 0


def test_the_preamble_has_ten_numbers(talk: Talk) -> None:
    shoot(talk, "TIM:SCAL 5E-5;:ACQ:POIN 2000;:CHAN2:SCAL 0.5;OFFS 1.5;:WAV:SOUR CHAN2")
    # A: 10 divisions in 2000 points; 8 divisions in 256 codes.
    expected = [0, 0, 2000, 1, 10 * 5e-5 / 2000, -2.5e-4, 0, 8 * 0.5 / 256, 1.5, 128]
    assert preamble(talk.oscilloscope) == pytest.approx(expected, abs=3e-7)
    talk.oscilloscope.say("CHAN2:SCAL 1;OFFS 0;:TIM:SCAL 1;:ACQ:POIN 10")
    assert preamble(talk.oscilloscope) == pytest.approx(expected, abs=3e-7)
    talk.oscilloscope.say("WAV:SOUR CHAN1")
    assert preamble(talk.oscilloscope)[7:] == pytest.approx([8 / 256, 1, 128])


def test_levels_and_edges_are_seen_where_they_are(talk: Talk) -> None:
    shoot(talk, "TIM:SCAL 2E-5;POS 8E-5;:ACQ:POIN 2000")
    times, volts = wave(talk.oscilloscope)
    code = 8 / 256
    on_top, at_rest = (times > 1e-6) & (times < 99e-6), times < -1e-6
    # Half a code of noise and rounding (A: sqrt(1/4 + 1/12) codes), five standard errors.
    for where, level in ((on_top, 4.0), (at_rest, 0.0)):
        assert np.std(volts[where]) == pytest.approx(np.sqrt(1 / 4 + 1 / 12) * code, rel=0.3)
        error_volts = 5 * 0.6 * code / np.sqrt(np.count_nonzero(where)) + 2e-3
        assert np.mean(volts[where]) == pytest.approx(level, abs=error_volts)
    # A: from the start of the ramp to its middle 62.5 ns, then 100 us at 50 %.
    assert falling_edge_seconds(times, volts) == pytest.approx(100.0625e-6, abs=1e-7)


@pytest.mark.parametrize(
    ("position", "first_seconds"),
    [
        (0.0, -1e-4),  # the trigger in the middle
        (1e-4, 0.0),  # at the left edge
        (1.5e-4, 5e-5),  # before the record, which begins within the pulse
        (-1e-4, -2e-4),  # at the right edge
    ],
)
def test_the_position_is_the_middle_of_the_record(
    talk: Talk, position: float, first_seconds: float
) -> None:
    shoot(talk, f"TIM:SCAL 2E-5;POS {position};:ACQ:POIN 2000")
    times, volts = wave(talk.oscilloscope)
    assert times[0] == pytest.approx(first_seconds, abs=1.01e-7)
    assert times[-1] - times[0] == pytest.approx(1999e-7)
    if position >= 0:
        assert np.count_nonzero(volts > 2) > 450
    if position > 0:
        assert falling_edge_seconds(times, volts) == pytest.approx(100.0625e-6, abs=1e-7)
    if position < 0:
        assert np.max(volts) < 0.5


def test_a_record_never_ends_before_its_trigger(talk: Talk) -> None:
    shoot(talk, "TIM:SCAL 2E-5;POS -1;:ACQ:POIN 2000")
    told = float(talk.oscilloscope.say("TIM:POS?"))
    assert told == pytest.approx(-999.5 * 1e-7)
    times, _ = wave(talk.oscilloscope)
    assert times[-1] == pytest.approx(0, abs=1.01e-7)


@pytest.mark.parametrize("points", [10, 333, 3000])
def test_the_interval_is_ten_divisions_by_points_in_any_order(talk: Talk, points: int) -> None:
    for order in (
        ("TIM:SCAL 1E-4", f"ACQ:POIN {points}"),
        (f"ACQ:POIN {points}", "TIM:SCAL 1E-4"),
    ):
        shoot(talk, order[0])
        shoot(talk, order[1])
        fields = preamble(talk.oscilloscope)
        assert fields[2] == points
        assert fields[4] == pytest.approx(1e-3 / points)
        talk.oscilloscope.say("*RST")


def test_a_fast_sweep_has_fewer_points_than_asked_for(talk: Talk) -> None:
    # A: 10 divisions of 20 ns at one sample a nanosecond.
    talk.oscilloscope.say("ACQ:POIN 1000;:TIM:SCAL 2E-8")
    assert talk.oscilloscope.say("ACQ:POIN?") == "200"
    talk.oscilloscope.say("TIM:SCAL 1E-6")
    assert talk.oscilloscope.say("ACQ:POIN?") == "1000"
    assert error(talk.oscilloscope) == 0


@pytest.mark.parametrize(("offset", "code"), [(-3.0, 255), (3.0, 0)])
def test_it_clips_at_both_ends(talk: Talk, offset: float, code: int) -> None:
    shoot(talk, f"CHAN2:SCAL 0.1;OFFS {offset};:TIM:POS -5E-4;:WAV:SOUR CHAN2")
    data = block(talk.oscilloscope.ask("WAV:DATA?"), behind=b"\n")
    assert set(data) == {code}


def test_text_tells_what_the_bytes_do(talk: Talk) -> None:
    shoot(talk, "TIM:SCAL 2E-5;:ACQ:POIN 500")
    _, volts = wave(talk.oscilloscope)
    talk.oscilloscope.say("WAV:FORM ASC")
    assert preamble(talk.oscilloscope)[0] == 1
    told = [float(text) for text in talk.oscilloscope.say("WAV:DATA?").split(",")]
    assert told == pytest.approx(volts.tolist(), abs=1e-6)


def test_a_forced_trigger_is_taken_only_when_armed(talk: Talk) -> None:
    say = talk.oscilloscope.say
    say("TIM:SCAL 1E-3;POS 0;:ACQ:POIN 1000;:TRIG:EDGE:SOUR EXT;:SING;:FORC")
    assert error(talk.oscilloscope) == -211
    assert say("ACQ:STAT?") == "1"
    talk.advance(0.006)
    say("FORC")
    talk.advance(0.006)
    assert say("ACQ:STAT?") == "4"
    assert error(talk.oscilloscope) == 0
