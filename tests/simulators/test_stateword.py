"""The stateword family against its description: every header, every refusal, the bytes."""

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.simulators.talking import (
    Line,
    Setting,
    Talk,
    block,
    falling_edge_seconds,
    patterns_of,
)

# Written off the description of the family, not off its code. 2.5 V and -5 V are whole
# steps of 20 V in 14 bits (A: 2048 and -4096), so that they are read back exactly.
GENERATOR = [
    Setting(pattern=":CH<1>:WAVE", send="CH1:WAVE PULSE", answer="CH1:WAVE PULSE"),
    Setting(pattern=":CH<1>:HIGH", send="CH1:HIGH 2.5", answer="CH1:HIGH 2.500000E+00"),
    # A: 4 V is 3276.8 steps, so 3277 steps of 20/16384 V.
    Setting(pattern=":CH<1>:HIGH", send="CH1:HIGH 4", answer="CH1:HIGH 4.000244E+00"),
    Setting(pattern=":CH<1>:LOW", send="CH1:LOW -5", answer="CH1:LOW -5.000000E+00"),
    Setting(pattern=":CH<1>:POLARITY", send="CH1:POLARITY INV", answer="CH1:POLARITY INV"),
    Setting(pattern=":CH<1>:POLARITY", send="CH1:POLARITY NORM", answer="CH1:POLARITY NORM"),
    Setting(pattern=":CH<1>:PERIOD", send="CH1:PERIOD 0.02", answer="CH1:PERIOD 2.000000E-02"),
    Setting(pattern=":CH<1>:WIDTH", send="CH1:WIDTH 250 US", answer="CH1:WIDTH 2.500000E-04"),
    Setting(pattern=":CH<1>:RISE", send="CH1:RISE 1E-7", answer="CH1:RISE 1.000000E-07"),
    Setting(pattern=":CH<1>:FALL", send="CH1:FALL 2E-7", answer="CH1:FALL 2.000000E-07"),
    Setting(pattern=":CH<1>:CYCLES", send="CH1:CYCLES 12", answer="CH1:CYCLES 12"),
    Setting(pattern=":CH<1>:LOAD", send="CH1:LOAD 50", answer="CH1:LOAD 5.000000E+01"),
    Setting(pattern=":CH<1>:LOAD", send="CH1:LOAD HIZ", answer="CH1:LOAD HIZ"),
    Setting(pattern=":CH<1>:OUTPUT", send="CH1:OUTPUT 1", answer="CH1:OUTPUT 1"),
    Setting(pattern=":CH<1>:OUTPUT", send="CH1:OUTPUT 0", answer="CH1:OUTPUT 0"),
    Setting(pattern=":CH<1>:TRIGMODE", send="CH1:TRIGMODE EXT", answer="CH1:TRIGMODE EXT"),
    Setting(pattern=":CH<1>:TRIGMODE", send="CH1:TRIGMODE FREE", answer="CH1:TRIGMODE FREE"),
    Setting(pattern=":CH<1>:TRIGMODE", send="CH1:TRIGMODE SOFT", answer="CH1:TRIGMODE SOFT"),
]
OSCILLOSCOPE = [
    Setting(pattern=":CH<1-2>:RANGE", send="CH1:RANGE 16", answer="CH1:RANGE 1.600000E+01"),
    Setting(pattern=":CH<1-2>:RANGE", send="CH2:RANGE 9", answer="CH2:RANGE 1.600000E+01"),
    Setting(pattern=":CH<1-2>:RANGE", send="CH2:RANGE 0.03", answer="CH2:RANGE 4.000000E-02"),
    Setting(
        pattern=":CH<1-2>:POSITION", send="CH2:POSITION -1.25", answer="CH2:POSITION -1.250000E+00"
    ),
    Setting(pattern=":HOR:RATE", send="HOR:RATE 1E7", answer="HOR:RATE 1.000000E+07"),
    Setting(pattern=":HOR:RATE", send="HOR:RATE 9.9E6", answer="HOR:RATE 5.000000E+06"),
    Setting(pattern=":HOR:RATE", send="HOR:RATE 3E6", answer="HOR:RATE 2.000000E+06"),
    Setting(pattern=":HOR:LENGTH", send="HOR:LENGTH 2000", answer="HOR:LENGTH 2000"),
    Setting(pattern=":HOR:DELAY", send="HOR:DELAY -1E-4", answer="HOR:DELAY -1.000000E-04"),
    Setting(pattern=":HOR:DELAY", send="HOR:DELAY 0.003", answer="HOR:DELAY 3.000000E-03"),
    Setting(pattern=":TRIG:CHANNEL", send="TRIG:CHANNEL CH2", answer="TRIG:CHANNEL CH2"),
    Setting(pattern=":TRIG:CHANNEL", send="TRIG:CHANNEL EXT", answer="TRIG:CHANNEL EXT"),
    Setting(pattern=":TRIG:CHANNEL", send="TRIG:CHANNEL CH1", answer="TRIG:CHANNEL CH1"),
    Setting(pattern=":TRIG:LEVEL", send="TRIG:LEVEL 2.5", answer="TRIG:LEVEL 2.500000E+00"),
    Setting(pattern=":TRIG:SLOPE", send="TRIG:SLOPE FALL", answer="TRIG:SLOPE FALL"),
    Setting(pattern=":TRIG:SLOPE", send="TRIG:SLOPE RISE", answer="TRIG:SLOPE RISE"),
    Setting(pattern=":TRIG:MODE", send="TRIG:MODE SINGLE", answer="TRIG:MODE SINGLE"),
    Setting(pattern=":TRIG:MODE", send="TRIG:MODE HALT", answer="TRIG:MODE HALT"),
    Setting(pattern=":DATA:SOURCE", send="DATA:SOURCE CH2", answer="DATA:SOURCE CH2"),
    Setting(pattern=":DATA:SOURCE", send="DATA:SOURCE CH1", answer="DATA:SOURCE CH1"),
]
# What is no setting and has a test below.
DEEDS = {
    ":ERROR",
    ":CH<1>:ARM",
    ":CH<1>:FIRE",
    ":CH<1>:STATE",
    ":CH<1>:SENT",
    ":CH<1>:STOP",
    ":TRIG:STATE",
    ":TRIG:FORCE",
    ":DATA:GAIN",
    ":DATA:ZERO",
    ":DATA:STEP",
    ":DATA:START",
    ":DATA:COUNT",
    ":DATA:SAMPLES",
}


@pytest.fixture
def talk() -> Talk:
    return Talk("stateword")


def error(line: Line) -> int:
    return int(line.say("ERROR?").removeprefix("ERROR ").split(",")[0])


def test_the_tables_here_hold_every_header(talk: Talk) -> None:
    told = {setting.pattern for setting in (*GENERATOR, *OSCILLOSCOPE)} | DEEDS
    devices = (talk.generator.device, talk.oscilloscope.device)
    assert told == set().union(*map(patterns_of, devices))


@pytest.mark.parametrize("setting", GENERATOR, ids=lambda row: row.send)
def test_a_generator_setting_is_echoed_with_its_header(talk: Talk, setting: Setting) -> None:
    talk.generator.say(setting.send)
    assert talk.generator.say(setting.query) == setting.answer
    assert talk.generator.say(setting.query.lower()) == setting.answer
    assert error(talk.generator) == 0


@pytest.mark.parametrize("setting", OSCILLOSCOPE, ids=lambda row: row.send)
def test_an_oscilloscope_setting_is_echoed_with_its_header(talk: Talk, setting: Setting) -> None:
    talk.oscilloscope.say(setting.send)
    assert talk.oscilloscope.say(setting.query) == setting.answer
    assert talk.oscilloscope.say(setting.query.lower()) == setting.answer
    assert error(talk.oscilloscope) == 0


def test_reset_restores_everything(talk: Talk) -> None:
    for line, rows in ((talk.generator, GENERATOR), (talk.oscilloscope, OSCILLOSCOPE)):
        initial = [line.say(row.query) for row in rows]
        for row in rows:
            line.say(row.send)
        assert [line.say(row.query) for row in rows] != initial
        line.say("*RST")
        assert [line.say(row.query) for row in rows] == initial
        assert error(line) == 0


def test_common_commands_are_not_echoed(talk: Talk) -> None:
    for line, name in (
        (talk.generator, "FUNCTION GENERATOR"),
        (talk.oscilloscope, "OSCILLOSCOPE"),
    ):
        assert line.ask("*IDN?") == f"PULSETALLY,SIMULATED {name} STATEWORD,7,1\n".encode()
        assert line.ask("*OPC?") == b"1\n"


def test_several_answers_are_echoed_each_with_its_whole_header(talk: Talk) -> None:
    assert talk.generator.ask("CH1:HIGH 2.5;LOW -5;HIGH?;LOW?;*OPC?;STATE?") == (
        b"CH1:HIGH 2.500000E+00;CH1:LOW -5.000000E+00;1;CH1:STATE IDLE\n"
    )


def test_errors_have_no_quotes_and_no_details(talk: Talk) -> None:
    assert talk.generator.ask("ERROR?") == b"ERROR 0,No error\n"
    talk.generator.say("CH1:HIGH 11")
    talk.generator.say("CH1:HIGH -3")
    assert talk.generator.ask("ERROR?") == b"ERROR -222,Data out of range\n"
    assert talk.generator.ask("ERROR?") == b"ERROR -221,Settings conflict\n"
    assert talk.generator.ask("ERROR?") == b"ERROR 0,No error\n"


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("CH1:WAVE SINE", -224),
        ("CH1:HIGH 10.1", -222),
        ("CH1:LOW -10.1", -222),
        ("CH1:HIGH 1;LOW 2", -221),
        ("CH1:POLARITY INVERTED", -224),
        ("CH1:PERIOD 1 NS", -222),
        ("CH1:WIDTH 2E-3", -221),
        ("CH1:WIDTH 1 US;RISE 3 US", -221),
        ("CH1:RISE 1 NS", -222),
        ("CH1:CYCLES 0", -222),
        ("CH1:LOAD 0", -222),
        ("CH1:LOAD INF", -141),
        ("CH1:OUTPUT ON", -141),
        ("CH1:OUTPUT 2", -222),
        ("CH2:OUTPUT 1", -114),
        ("CH1:TRIGMODE BUS", -224),
        ("CH1:FIRE", -211),
        ("*TRG", -211),
        ("CH1:TRIGMODE EXT;ARM", -221),
        ("CH1:TRIGMODE FREE;ARM", -221),
        ("CH1:ARM;ARM", -213),
        ("CH1:ARM;FIRE;FIRE", -211),
        ("CH1:ARM;FIRE;ARM", -213),
        ("CH1:HIGH -3;OUTPUT 1", -221),
        ("CH1:HIGH -3;ARM", -221),
        ("CH1:POL INV", -113),
        ("SYST:ERR?", -113),
        ("STATUS:OPERATION:CONDITION?", -113),
    ],
)
def test_what_the_generator_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.generator.say(message) == ""
    assert error(talk.generator) == number
    assert talk.bench.generator_model.relay_on is False


@pytest.mark.parametrize(
    ("message", "number"),
    [
        ("CH1:RANGE 81", -222),
        ("CH3:RANGE 1", -114),
        ("CH1:POSITION 41", -222),
        ("HOR:RATE 0", -222),
        ("HOR:RATE 1.1E9", -222),
        ("HOR:LENGTH 9", -222),
        ("HOR:LENGTH 2000001", -222),
        ("HOR:DELAY 1E5", -222),
        ("TRIG:CHANNEL BUS", -224),
        ("TRIG:SLOPE POS", -224),
        ("TRIG:MODE SING", -224),
        ("TRIG:MODE SINGLE;MODE SINGLE", -213),
        ("TRIG:STATE READY", -113),
        ("DATA:SAMP?", -113),
        ("*TRG", -211),
        ("DATA:SAMPLES?", -230),
        ("DATA:GAIN?", -230),
        ("DATA:ZERO?", -230),
        ("DATA:STEP?", -230),
        ("DATA:START?", -230),
        ("DATA:COUNT?", -230),
        ("TRIG:MODE SINGLE;:DATA:SAMPLES?", -230),
    ],
)
def test_what_the_oscilloscope_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.oscilloscope.say(message) == ""
    assert error(talk.oscilloscope) == number
    assert error(talk.oscilloscope) == 0


def test_the_states_of_a_burst(talk: Talk) -> None:
    say = talk.generator.say
    say("CH1:HIGH 4;LOW 0;CYCLES 3;OUTPUT 1")
    talk.advance(0.02)
    assert say("CH1:STATE?") == "CH1:STATE IDLE"
    say("CH1:ARM")
    assert say("CH1:STATE?") == "CH1:STATE READY"
    say("CH1:FIRE")
    assert say("CH1:STATE?") == "CH1:STATE RUN"
    talk.advance(0.003)
    assert say("CH1:STATE?") == "CH1:STATE IDLE"
    assert talk.bench.table.delivered == 3
    say("CH1:ARM;STOP")
    assert say("CH1:STATE?") == "CH1:STATE IDLE"
    say("CH1:ARM;*TRG")
    talk.advance(0.0015)
    say("CH1:STOP")
    assert say("CH1:STATE?") == "CH1:STATE IDLE"
    talk.advance(0.02)
    assert talk.bench.table.delivered == 5
    assert error(talk.generator) == 0


def test_the_states_of_an_acquisition(talk: Talk) -> None:
    say = talk.oscilloscope.say
    say("HOR:RATE 1E5;LENGTH 1001;DELAY -5E-3;:TRIG:CHANNEL EXT")
    assert say("TRIG:STATE?") == "TRIG:STATE HALT"
    say("TRIG:MODE SINGLE")
    assert say("TRIG:STATE?") == "TRIG:STATE PREFILL"
    talk.advance(0.0049)
    assert say("TRIG:STATE?") == "TRIG:STATE PREFILL"
    talk.advance(0.0002)
    assert say("TRIG:STATE?") == "TRIG:STATE READY"
    say("TRIG:MODE HALT")
    assert say("TRIG:STATE?;MODE?") == "TRIG:STATE HALT;TRIG:MODE HALT"
    say("TRIG:MODE SINGLE")
    talk.advance(0.006)
    talk.generator.say("CH1:ARM;FIRE")
    assert say("TRIG:STATE?") == "TRIG:STATE ACQ"
    talk.advance(0.0049)
    assert say("TRIG:STATE?") == "TRIG:STATE ACQ"
    talk.advance(0.0002)
    assert say("TRIG:STATE?;MODE?") == "TRIG:STATE DONE;TRIG:MODE HALT"
    assert error(talk.oscilloscope) == error(talk.generator) == 0


def shoot(talk: Talk, setup: str) -> None:
    """Fire one 4 V pulse of 100 us into a single acquisition, triggered by the sync output."""
    talk.generator.say("CH1:HIGH 4;LOW 0;WIDTH 1E-4;RISE 1E-7;FALL 1E-7;OUTPUT 1")
    talk.advance(0.02)
    talk.oscilloscope.say("TRIG:CHANNEL EXT;:CH1:RANGE 8;POSITION 1;:HOR:RATE 1E7;LENGTH 2000")
    talk.oscilloscope.say(setup)
    talk.oscilloscope.say("TRIG:MODE SINGLE")
    talk.advance(0.02)
    talk.generator.say("CH1:ARM;FIRE")
    talk.advance(0.02)
    assert talk.oscilloscope.say("TRIG:STATE?") == "TRIG:STATE DONE"


def told(line: Line, name: str) -> float:
    return float(line.say(f"DATA:{name}?").removeprefix(f"DATA:{name} "))


def codes(line: Line) -> NDArray[np.float64]:
    answer = line.ask("DATA:SAMPLES?")
    assert answer.startswith(b"DATA:SAMPLES #")
    payload = block(answer.removeprefix(b"DATA:SAMPLES "), behind=b"")
    return np.frombuffer(payload, "<i2").astype(np.float64)


def wave(line: Line) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return times and volts as the description says they are to be computed."""
    samples = codes(line)
    assert samples.size == told(line, "COUNT")
    times = told(line, "START") + told(line, "STEP") * np.arange(samples.size, dtype=np.float64)
    return times, samples * told(line, "GAIN") + told(line, "ZERO")


def test_no_newline_follows_the_block_but_one_follows_an_answer_behind_it(talk: Talk) -> None:
    shoot(talk, "HOR:LENGTH 1000")
    answer = talk.oscilloscope.ask("DATA:SAMPLES?")
    assert answer[:19] == b"DATA:SAMPLES #42000"
    assert len(answer) == 19 + 2000
    longer = talk.oscilloscope.ask("DATA:SAMPLES?;COUNT?")
    assert longer == answer + b";DATA:COUNT 1000\n"
    assert talk.oscilloscope.ask("DATA:COUNT?") == b"DATA:COUNT 1000\n"


def test_samples_are_multiples_of_sixteen(talk: Talk) -> None:
    shoot(talk, "HOR:DELAY -1E-5")
    samples = codes(talk.oscilloscope)
    assert np.all(samples % 16 == 0)
    # The noise of 1.5 twelve-bit codes shows every step around a level.
    assert np.min(np.diff(np.unique(samples))) == 16
    # A: 8 V in 2^16 codes.
    assert talk.oscilloscope.say("DATA:GAIN?;ZERO?;STEP?") == (
        "DATA:GAIN 1.220703E-04;DATA:ZERO 1.000000E+00;DATA:STEP 1.000000E-07"
    )


def test_what_is_told_belongs_to_the_record(talk: Talk) -> None:
    shoot(talk, "CH2:RANGE 4;POSITION 1.5;:HOR:DELAY -1E-5;:DATA:SOURCE CH2")
    query = "DATA:GAIN?;ZERO?;STEP?;START?;COUNT?"
    before = talk.oscilloscope.say(query)
    assert "DATA:ZERO 1.500000E+00;" in before
    talk.oscilloscope.say("CH2:RANGE 8;POSITION 0;:HOR:RATE 1E3;LENGTH 10;DELAY 0")
    assert talk.oscilloscope.say(query) == before


def test_levels_and_edges_are_seen_where_they_are(talk: Talk) -> None:
    shoot(talk, "HOR:DELAY -1E-5")
    times, volts = wave(talk.oscilloscope)
    code = 8 / 4096
    on_top, at_rest = (times > 1e-6) & (times < 99e-6), times < -1e-6
    # 1.5 codes of noise, five standard errors; and 50 ohm against 220 kohm.
    for where, level in ((on_top, 4.0), (at_rest, 0.0)):
        assert np.std(volts[where]) == pytest.approx(np.sqrt(1.5**2 + 1 / 12) * code, rel=0.3)
        error_volts = 5 * 1.55 * code / np.sqrt(np.count_nonzero(where)) + 1.5e-3
        assert np.mean(volts[where]) == pytest.approx(level, abs=error_volts)
    # A: from the start of the ramp to its middle 62.5 ns, then 100 us at 50 %.
    assert falling_edge_seconds(times, volts) == pytest.approx(100.0625e-6, abs=1e-7)


@pytest.mark.parametrize("delay", [-1.5e-4, -1e-5, 0.0, 5e-5])
def test_the_delay_is_from_the_trigger_to_the_first_sample(talk: Talk, delay: float) -> None:
    shoot(talk, f"HOR:DELAY {delay}")
    times, volts = wave(talk.oscilloscope)
    assert times[0] == pytest.approx(delay, abs=1.01e-7)
    if times[-1] > 101e-6:
        assert falling_edge_seconds(times, volts) == pytest.approx(100.0625e-6, abs=1e-7)
    # A: the pulse is high for 100 us, of which this part lies in the record.
    high = min(times[-1], 100.0625e-6) - max(times[0], 0.0625e-6)
    assert np.count_nonzero(volts > 2) == pytest.approx(high / 1e-7, abs=2)


def test_a_record_never_ends_before_its_trigger(talk: Talk) -> None:
    shoot(talk, "HOR:DELAY -1")
    # A: 1999 intervals of 100 ns lie between the first sample and the last.
    assert talk.oscilloscope.say("HOR:DELAY?") == "HOR:DELAY -1.999000E-04"
    times, _ = wave(talk.oscilloscope)
    assert times[-1] == pytest.approx(0, abs=1.01e-7)


@pytest.mark.parametrize(("position", "code"), [(-3.0, 32752), (3.0, -32768)])
def test_it_clips_at_both_ends(talk: Talk, position: float, code: int) -> None:
    shoot(talk, f"CH2:RANGE 0.8;POSITION {position};:HOR:DELAY -1.9E-4;:DATA:SOURCE CH2")
    assert set(codes(talk.oscilloscope)) == {code}


def test_a_forced_trigger_is_taken_only_when_armed(talk: Talk) -> None:
    say = talk.oscilloscope.say
    say("HOR:RATE 1E5;LENGTH 1001;DELAY -5E-3;:TRIG:CHANNEL EXT;:TRIG:MODE SINGLE;:TRIG:FORCE")
    assert error(talk.oscilloscope) == -211
    assert say("TRIG:STATE?") == "TRIG:STATE PREFILL"
    talk.advance(0.006)
    say("TRIG:FORCE")
    talk.advance(0.006)
    assert say("TRIG:STATE?") == "TRIG:STATE DONE"
    assert error(talk.oscilloscope) == 0
