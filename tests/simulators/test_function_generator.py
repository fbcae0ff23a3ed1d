"""The simulated function generator, through its SCPI port, against closed forms."""

import math

import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.imperfections import SourceImperfections
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.simulate import Bench, SimulationSettings

VOLTS_PER_CODE = SourceImperfections().volts_per_code

# A cell that hardly switches is a linear capacitor, whose voltages have closed forms.
LINEAR = CellDescription(remanent_polarization=1e-9)


class Talk:
    """A bench and one connection to its generator; time moves only when told to."""

    def __init__(self) -> None:
        self.bench = Bench(SimulationSettings(cell=LINEAR))
        self._engine = ScpiEngine(self.bench.generator)

    def say(self, text: str) -> str:
        return self._engine.receive(text.encode() + b"\n").decode().removesuffix("\n")

    def number(self, query: str) -> float:
        return float(self.say(query))

    def error(self) -> int:
        return int(self.say(":SYST:ERR?").split(",")[0])

    def advance(self, seconds: float) -> None:
        self.bench.clock.advance(seconds)

    def switch_on(self) -> None:
        self.say(":OUTP1 ON")
        self.advance(0.02)


@pytest.fixture
def talk() -> Talk:
    return Talk()


def test_identity(talk: Talk) -> None:
    assert talk.say("*IDN?").split(",")[:2] == ["PULSETALLY", "SIMULATED FUNCTION GENERATOR"]


# Setting, query, answer as a number.
SETTINGS = [
    (":SOURce1:VOLTage:LEVel:IMMediate:HIGH 2.5", 2.5),
    (":SOURce1:VOLTage:LEVel:IMMediate:LOW -5", -5.0),
    (":SOURce1:PULSe:WIDTh 250 US", 250e-6),
    (":SOURce1:PULSe:PERiod 0.02", 0.02),
    (":SOURce1:PULSe:COUNt 12", 12),
    (":SOURce1:PULSe:TRANsition:LEADing 100NS", 100e-9),
    (":SOURce1:PULSe:TRANsition 200NS", 200e-9),
    (":SOURce1:PULSe:TRANsition:TRAiling 1E-6", 1e-6),
    (":OUTPut1:LOAD 50", 50),
    (":OUTPut1:STATe ON", 1),
    (":OUTPut1 1", 1),
    (":INITiate:CONTinuous OFF", 0),
]


@pytest.mark.parametrize(("setting", "value"), SETTINGS)
def test_a_setting_is_read_back(talk: Talk, setting: str, value: float) -> None:
    talk.say(setting)
    assert talk.number(setting.split(" ")[0] + "?") == pytest.approx(
        value, rel=1e-11, abs=VOLTS_PER_CODE / 2 if "VOLT" in setting else 0
    )
    assert talk.error() == 0


@pytest.mark.parametrize(
    ("setting", "answer"),
    [
        (":SOURce1:FUNCtion:SHAPe PULSe", "PULS"),
        (":SOURce1:PULSe:POLarity INVerted", "INV"),
        (":SOURce1:PULSe:POLarity NORMal", "NORM"),
        (":TRIGger:SOURce IMMediate", "IMM"),
        (":TRIGger:SOURce EXTernal", "EXT"),
        (":TRIGger:SOURce BUS", "BUS"),
        (":OUTPut1:LOAD INFinity", "9.9E+37"),  # LOAD-3
        (":OUTPut1:LOAD 9.9E37", "9.9E+37"),
    ],
)
def test_a_word_is_read_back(talk: Talk, setting: str, answer: str) -> None:
    talk.say(setting)
    header = setting.split(" ")[0]
    assert talk.say(f"{header}?") == answer
    assert talk.error() == 0


@pytest.mark.parametrize(
    ("message", "number"),
    [
        (":SOUR1:FUNC:SHAP SIN", -224),
        (":SOUR1:FUNC:SHAP SQUare", -224),
        (":INIT:CONT ON", -224),
        (":SOUR1:VOLT:HIGH 10.1", -222),
        (":SOUR1:VOLT:LOW -10.1", -222),
        (":SOUR1:PULS:WIDT 19 NS", -222),
        (":SOUR1:PULS:TRAN 4.9 NS", -222),
        (":SOUR1:PULS:COUN 0", -222),
        (":OUTP1:LOAD 0", -222),
        (":SOUR2:VOLT:HIGH 1", -114),
        (":SOUR1:VOLT:HIGH 1 S", -131),
        (":SOUR1:PULS:DEL?", -113),
        ("*TRG", -211),
    ],
)
def test_what_it_cannot_do_is_an_error(talk: Talk, message: str, number: int) -> None:
    assert talk.say(message) == ""
    assert talk.error() == number
    assert talk.error() == 0


def test_the_smallest_width_and_edge_are_taken(talk: Talk) -> None:
    talk.say(":PULS:TRAN 5 NS;TRAN:TRA 5 NS;:PULS:WIDT 20 NS;PER 40 NS")
    assert talk.error() == 0
    assert talk.number(":PULS:WIDT?") == pytest.approx(20e-9)


# A: step of a 14-bit converter over 20 V.
@pytest.mark.parametrize("volts", [4.0, -4.9994, 0.0007, 2.2222, 9.9])
def test_levels_have_fourteen_bits(talk: Talk, volts: float) -> None:
    talk.say(f":VOLT:HIGH 9.99;LOW {volts}" if volts < 9 else f":VOLT:HIGH {volts}")
    told = talk.number(":VOLT:LOW?" if volts < 9 else ":VOLT:HIGH?")
    assert abs(told - volts) <= 20 / 2**14 / 2
    assert told / (20 / 2**14) == pytest.approx(round(told / (20 / 2**14)), abs=1e-6)


def test_ten_volts_end_one_step_below(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 10;LOW -10")
    assert talk.number(":VOLT:HIGH?") == pytest.approx(10 - 20 / 2**14)
    assert talk.number(":VOLT:LOW?") == -10.0


def test_width_and_period_have_steps_of_a_nanosecond(talk: Talk) -> None:
    talk.say(":PULS:WIDT 100.0004 US;PER 1.0000006 MS")
    assert talk.number(":PULS:WIDT?") == pytest.approx(100.000e-6, abs=1e-15)
    assert talk.number(":PULS:PER?") == pytest.approx(1.000001e-3, abs=1e-15)


# Coupled settings (IEEE 488.2 section 6.4.5).


def test_coupled_settings_are_looked_at_together(talk: Talk) -> None:
    talk.say(":VOLT:LOW 3;HIGH 5")
    assert talk.error() == 0
    talk.say(":VOLT:HIGH -2;LOW -5")
    assert talk.error() == 0
    assert talk.number(":VOLT:HIGH?") == pytest.approx(-2, abs=1e-3)


@pytest.mark.parametrize(
    "message",
    [
        ":PULS:WIDT 1E-4;COUN 7;:VOLT:HIGH -3",
        ":PULS:COUN 7;:VOLT:HIGH 2;LOW 2",
        ":PULS:COUN 7;WIDT 2 MS",
        ":PULS:COUN 7;WIDT 1 US;TRAN 2 US",
        ":PULS:COUN 7;PER 100 US",
    ],
)
def test_a_conflict_puts_the_whole_message_back(talk: Talk, message: str) -> None:
    talk.say(":PULS:WIDT 1E-4;PER 1E-3;COUN 3;:VOLT:HIGH 4;LOW 0")
    talk.say(message)
    assert talk.error() == -221
    assert talk.error() == 0
    assert talk.say(":PULS:COUN?") == "3"
    assert talk.number(":PULS:WIDT?") == pytest.approx(1e-4)
    assert talk.number(":VOLT:HIGH?") == pytest.approx(4, abs=1e-3)
    assert talk.number(":VOLT:LOW?") == 0


def test_an_error_query_in_the_same_message_sees_the_conflict(talk: Talk) -> None:
    assert talk.say(":VOLT:HIGH -3;:SYST:ERR?").startswith("-221,")


def test_nothing_is_fired_or_switched_on_behind_a_conflict(talk: Talk) -> None:
    talk.say(":VOLT:HIGH -3;:OUTP ON;:INIT")
    assert [talk.error() for _ in range(4)] == [-221, -221, -221, 0]
    assert talk.say(":OUTP?") == "0"
    assert talk.say(":STAT:OPER:COND?") == "0"


def test_the_output_can_be_switched_off_behind_a_conflict(talk: Talk) -> None:
    talk.switch_on()
    talk.say(":VOLT:HIGH -3;:OUTP OFF")
    assert talk.error() == -221
    assert talk.say(":OUTP?") == "0"


def test_edges_that_just_touch_are_no_conflict(talk: Talk) -> None:
    # A: a ramp of 100 ns from 10 % to 90 % lasts 125 ns, so that a triangle is 125 ns wide.
    talk.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 125 NS;PER 250 NS;COUN 4;TRAN 1E-7;TRAN:TRA 1E-7")
    assert talk.error() == 0
    talk.switch_on()
    assert talk.say(":INIT;*TRG;*OPC?") == "1"
    assert talk.bench.table.delivered == 4
    talk.say(":PULS:WIDT 124 NS")
    assert talk.error() == -221


# Load (section 1.8 of the reference values: public manuals; closed form).


def test_a_changed_load_rescales_the_panel_and_leaves_the_terminal_alone(talk: Talk) -> None:
    talk.say(":OUTP1:LOAD 50;:VOLT:HIGH 5;LOW -5;:PULS:POL INV")  # 10 V peak to peak
    talk.switch_on()
    talk.advance(0.01)
    before = talk.bench.table.terminal_volts
    talk.say(":OUTP1:LOAD INF")
    span = talk.number(":VOLT:HIGH?") - talk.number(":VOLT:LOW?")
    assert span == pytest.approx(20, abs=2 * VOLTS_PER_CODE)  # LOAD-1
    talk.advance(0.01)
    assert talk.bench.table.terminal_volts == before


def test_levels_for_fifty_ohms_double_into_an_open_circuit(talk: Talk) -> None:
    talk.say(":OUTP1:LOAD 50;:VOLT:HIGH 2;LOW 100 MV")
    talk.switch_on()
    # LOAD-2, but for the 10 Mohm probe behind 220 kohm: a part in 2e5 of it is missing.
    assert talk.bench.table.terminal_volts == pytest.approx(0.2, abs=VOLTS_PER_CODE)
    assert talk.number(":OUTP1:IMP?") == 50


def test_the_range_follows_the_load(talk: Talk) -> None:
    talk.say(":OUTP1:LOAD 50")
    assert talk.number(":VOLT:HIGH? MAX") == pytest.approx(5)
    talk.say(":VOLT:HIGH 5.1")
    assert talk.error() == -222


# Output relay.


def test_the_relay_settles_for_ten_milliseconds(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 1;:OUTP ON")
    assert talk.say(":STAT:OPER:COND?") == "2"
    assert talk.say(":OUTP?") == "1"
    talk.advance(0.0099)
    assert talk.say(":STAT:OPER:COND?") == "2"
    assert talk.bench.table.terminal_volts == 0
    talk.advance(0.0002)
    assert talk.say(":STAT:OPER:COND?") == "0"
    talk.advance(0.01)
    assert talk.bench.table.terminal_volts == pytest.approx(1, abs=VOLTS_PER_CODE)


def test_a_pulse_fired_while_settling_never_reaches_the_terminal(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 0;:OUTP ON;:INIT;*TRG")
    assert talk.say("*OPC?") == "1"
    assert talk.bench.clock.now < 0.01
    talk.advance(0.02)
    assert talk.bench.table.delivered == 0
    assert talk.bench.table.node_volts == pytest.approx(0, abs=1e-9)


def test_switching_off_opens_at_once_and_calls_a_closing_off(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 1;:OUTP ON")
    talk.advance(0.005)
    talk.say(":OUTP OFF")
    talk.advance(0.02)
    assert talk.bench.table.terminal_volts == 0
    assert talk.say(":STAT:OPER:COND?;:OUTP?") == "0;0"
    talk.switch_on()
    assert talk.bench.table.terminal_volts == pytest.approx(1, abs=0.01)
    talk.say(":OUTP OFF")
    assert talk.bench.generator_model.relay_on is False
    # An open output shows the node, which the probe discharges (A: 10 Mohm, 307 pF).
    node = talk.bench.table.node_volts
    talk.advance(10e6 * 307.139593760e-12)
    assert talk.bench.table.terminal_volts == pytest.approx(node / math.e, rel=1e-4)


def test_a_changed_level_moves_the_resting_output_at_once(talk: Talk) -> None:
    talk.switch_on()
    talk.say(":VOLT:HIGH 0;LOW -5")
    talk.advance(0.01)
    assert talk.bench.table.terminal_volts == pytest.approx(-5, abs=0.01)
    talk.say(":PULS:POL INV")
    talk.advance(0.01)
    assert talk.bench.table.terminal_volts == pytest.approx(0, abs=0.01)


# Triggering.


def test_from_initiate_to_the_end_of_the_burst(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 100 US;PER 1 MS;COUN 3;:STAT:OPER:PTR 0;NTR 8")
    talk.switch_on()
    talk.say(":INIT")
    assert talk.say(":STAT:OPER:COND?") == "32"
    talk.say("*TRG")
    assert talk.say(":STAT:OPER:COND?") == "8"
    started = talk.bench.clock.now
    talk.advance(0.0015)
    assert talk.say(":STAT:OPER:COND?;EVEN?") == "8;0"
    assert talk.say("*OPC?") == "1"
    assert talk.say(":STAT:OPER:COND?;EVEN?") == "0;8"
    assert 0.0021 - 1e-9 <= talk.bench.clock.now - started <= 0.0031
    assert talk.bench.table.delivered == 3
    assert talk.error() == 0


def test_the_opc_bit_comes_with_the_end_of_the_burst(talk: Talk) -> None:
    talk.say("*CLS;:PULS:WIDT 100 US;PER 1 MS")
    talk.say(":INIT;*TRG;*OPC")
    assert talk.say("*ESR?") == "0"
    talk.advance(0.002)
    assert talk.say("*ESR?") == "1"


def test_triggers_that_nothing_waits_for_are_ignored(talk: Talk) -> None:
    talk.say(":INIT;*TRG;*TRG")
    assert talk.error() == -211
    talk.say(":INIT")
    assert talk.error() == -213  # the burst still runs
    talk.say("*WAI;:INIT;:INIT")
    assert talk.error() == -213
    talk.say(":ABOR;*TRG")
    assert talk.error() == -211


def test_immediate_and_external_sources(talk: Talk) -> None:
    talk.switch_on()
    talk.say(":TRIG:SOUR IMM;:INIT")
    assert talk.say(":STAT:OPER:COND?") == "8"
    talk.say("*WAI;:TRIG:SOUR EXT;:INIT;*TRG")
    assert talk.error() == -211
    assert talk.say(":STAT:OPER:COND?") == "32"
    assert talk.bench.table.delivered == 1


def test_waiting_for_a_trigger_that_cannot_come_is_a_deadlock(talk: Talk) -> None:
    assert talk.say(":INIT;*OPC?") == ""
    assert talk.error() == -214


def test_abort_ends_the_burst(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 1 MS;PER 2 MS;COUN 5")
    talk.switch_on()
    talk.say(":INIT;*TRG")
    talk.advance(0.0025)
    talk.say(":ABOR")
    assert talk.say(":STAT:OPER:COND?") == "0"
    talk.advance(0.1)
    assert talk.bench.table.delivered == 1
    assert talk.bench.table.terminal_volts == pytest.approx(0, abs=1e-3)


def test_new_levels_cut_a_burst_short_and_new_times_do_not(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 100 US;PER 1 MS;COUN 5")
    talk.switch_on()
    talk.say(":INIT;*TRG;:PULS:WIDT 50 US")
    assert talk.say(":STAT:OPER:COND?") == "8"
    talk.say(":VOLT:HIGH 3")
    assert talk.say(":STAT:OPER:COND?") == "0"


# CIR-1 and the RC charge (A): one pulse into a linear capacitor.
def test_a_pulse_charges_the_node_as_the_closed_form_says(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 100 US;PER 1 MS;TRAN 5 NS;TRAN:TRA 5 NS")
    assert talk.error() == 0
    talk.switch_on()
    talk.say(":INIT;*TRG")
    talk.advance(50e-6)
    series, probe = 220_050.0, 10e6
    farads = 8.8541878128e-12 * 500 * 1e-8 / 150e-9 + 12e-12
    tau = farads * series * probe / (series + probe)
    volts = talk.number(":VOLT:HIGH?") * probe / (series + probe)
    # Half a ramp of 6.25 ns is a part in 2e4 of tau; the tiny polarization is far below.
    expected = volts * (1 - math.exp(-(50e-6 - 3.125e-9) / tau))
    assert talk.bench.table.node_volts == pytest.approx(expected, abs=2e-4)


def test_inverted_rests_high_and_pulses_low(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 0;LOW -5;:PULS:POL INV;WIDT 2 MS;PER 10 MS")
    talk.switch_on()
    assert talk.bench.table.terminal_volts == pytest.approx(0, abs=1e-6)
    talk.say(":INIT;*TRG")
    talk.advance(0.001)
    assert talk.bench.table.terminal_volts == pytest.approx(-5, abs=0.01)
    talk.say("*WAI")
    talk.advance(0.01)
    assert talk.bench.table.terminal_volts == pytest.approx(0, abs=0.01)


def test_reset_opens_the_output_and_restores_everything(talk: Talk) -> None:
    initial = [talk.say(f"{setting.split(' ')[0]}?") for setting, _ in SETTINGS]
    for setting, _ in SETTINGS:
        talk.say(setting)
    talk.say(":TRIG:SOUR IMM;:INIT;*RST")
    assert [talk.say(f"{setting.split(' ')[0]}?") for setting, _ in SETTINGS] == initial
    assert talk.say(":STAT:OPER:COND?;:OUTP?;:TRIG:SOUR?") == "0;0;BUS"


def test_the_largest_emf_counts_only_on_a_closed_output(talk: Talk) -> None:
    talk.say(":VOLT:HIGH 9;LOW 0;:INIT;*TRG;*WAI")
    assert talk.bench.generator_model.largest_emf_volts == 0
    talk.say(":VOLT:HIGH 2;LOW -1")
    talk.switch_on()
    assert talk.bench.generator_model.largest_emf_volts == pytest.approx(1, abs=1e-3)
    talk.say(":INIT;*TRG;*WAI")
    assert talk.bench.generator_model.largest_emf_volts == pytest.approx(2, abs=1e-3)
    talk.say(":VOLT:LOW -6")
    assert talk.bench.generator_model.largest_emf_volts == pytest.approx(6, abs=1e-3)
