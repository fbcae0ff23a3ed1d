"""Each way in which the simulated instruments are not ideal does what its number says."""

import math
from collections.abc import Callable
from dataclasses import fields
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.bandwidth import knot_values, last_values, values_at
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.imperfections import DigitizerImperfections, SourceImperfections
from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.talking import LINEAR, Line, block

Floats = NDArray[np.float64]

EXACT: dict[str, Any] = {
    "offset_shares": (0.0, 0.0),
    "bandwidth_hertz": math.inf,
    "noise_share": 0.0,
}


class Setup:
    """A scpi99 bench, its output on; +-4 V of the terminal on a range of 16 V."""

    def __init__(
        self,
        source: SourceImperfections | None = None,
        digitizer: DigitizerImperfections | None = None,
    ) -> None:
        self.bench = Bench(
            SimulationSettings(
                cell=LINEAR,
                source=source or SourceImperfections(),
                digitizer=digitizer or DigitizerImperfections(**EXACT),
                seed=5,
            )
        )
        self.generator = Line(self.bench.generator)
        self.oscilloscope = Line(self.bench.oscilloscope)
        self.generator.say(":VOLT:HIGH 4;LOW 0;:PULS:WIDT 1E-4;PER 1E-3;TRAN 1E-7;TRAN:TRA 1E-7")
        self.generator.say(":OUTP ON")
        self.oscilloscope.say(":SENS1:VOLT:RANG:PTP 16;:TRIG:SOUR EXT;:SENS:SWE:POIN 4000")
        self.oscilloscope.say(":SENS:SWE:TINT 5E-8;OREF:LOC 0.1;:FORM:BORD NORM")
        self.bench.clock.advance(1.0)

    def shot(self) -> tuple[Floats, Floats]:
        """Fire one pulse; return times from the trigger and volts of channel 1."""
        self.oscilloscope.say(":INIT")
        self.bench.clock.advance(1e-3)
        assert self.generator.say(":INIT;*TRG;*OPC?") == "1"
        self.bench.clock.advance(1e-3)
        words = self.oscilloscope.say(":TRAC:DATA:PRE? CHAN1").split()
        first = float(words[words.index("OFFSet") + 1])
        codes = np.frombuffer(block(self.oscilloscope.ask(":TRAC? CHAN1"), behind=b"\n"), ">i2")
        assert self.oscilloscope.say(":SYST:ERR?") == '0,"No error"'
        times: Floats = first + 5e-8 * np.arange(len(codes), dtype=np.float64)
        return times, codes.astype(np.float64) * 16 / 4096


def top(times: Floats, volts: Floats) -> Floats:
    return volts[(times > 20e-6) & (times < 90e-6)]


def rest(times: Floats, volts: Floats) -> Floats:
    return volts[times < -1e-6]


# The terminal is at 4 V less 50 ohm of 220 kohm of the current; that is below half a code.
CODE = 16 / 4096


def test_an_ideal_digitizer_shows_codes_and_nothing_else() -> None:
    times, volts = Setup().shot()
    assert np.all(rest(times, volts) == 0.0)
    assert np.allclose(top(times, volts), 4.0, atol=1.01 * CODE)


@pytest.mark.parametrize(
    ("wrong", "at_rest", "at_top"),
    [
        ({"offset_shares": (0.01, 0.0)}, 0.16, 4.16),
        ({"offset_shares": (0.0, 0.01)}, 0.0, 4.0),
        ({"offset_shares": (-0.02, 0.0)}, -0.32, 3.68),
        ({"gain_errors": (0.05, 0.0)}, 0.0, 4.2),
        ({"gain_errors": (0.0, 0.05)}, 0.0, 4.0),
    ],
)
def test_a_digitizer_is_wrong_by_its_numbers(
    wrong: dict[str, Any], at_rest: float, at_top: float
) -> None:
    times, volts = Setup(digitizer=DigitizerImperfections(**(EXACT | wrong))).shot()
    assert np.allclose(rest(times, volts), at_rest, atol=0.51 * CODE)
    assert np.allclose(top(times, volts), at_top, atol=1.01 * CODE)


def test_noise_is_a_share_of_the_range() -> None:
    setup = Setup(digitizer=DigitizerImperfections(**(EXACT | {"noise_share": 0.01})))
    times, volts = setup.shot()
    # A: 380 samples; a standard deviation is known to 1/sqrt(2 n), five times that is 18 %.
    assert np.std(rest(times, volts)) == pytest.approx(0.16, rel=0.18)


@pytest.mark.parametrize("bits", [4, 8, 11, 12])
def test_fewer_bits_have_fewer_codes(bits: int) -> None:
    wrong = EXACT | {"noise_share": 0.05, "bits": bits}
    times, volts = Setup(digitizer=DigitizerImperfections(**wrong)).shot()
    step = 16 / 2**bits
    assert np.all(np.mod(volts, step) == 0)
    assert np.min(np.diff(np.unique(top(times, volts)))) == step


@pytest.mark.parametrize("family", FAMILIES)
def test_no_family_has_more_bits_than_it_sends(family: str) -> None:
    most = FAMILIES[family].converter.bits
    SimulationSettings(family=family, digitizer=DigitizerImperfections(bits=most))
    with pytest.raises(ValueError, match=f"has {most + 1} bits; {family} sends at most {most}"):
        SimulationSettings(family=family, digitizer=DigitizerImperfections(bits=most + 1))


def test_trigger_jitter_moves_where_the_record_says_it_began() -> None:
    def begins(**wrong: Any) -> list[float]:
        setup = Setup(digitizer=DigitizerImperfections(**(EXACT | wrong)))
        return [float(setup.shot()[0][0]) for _ in range(40)]

    steady, jittery = begins(), begins(trigger_jitter_seconds=1e-6)
    # The sample clock is free, so that a record begins somewhere within one interval.
    assert np.ptp(steady) <= 5.001e-8
    # A: 40 shots know a standard deviation to 11 %; four times that.
    assert np.std(jittery) == pytest.approx(1e-6, rel=0.45)


# First-order low-pass of a step: from 10 % to 90 % in ln 9 = 2.197 time constants; closed form.
def test_a_bandwidth_makes_a_step_an_exponential() -> None:
    lag = 3e-6
    times, signals = np.array([0.0, 1e-3, 1e-3, 2e-3]), np.array([[0.0, 0.0, 1.0, 1.0]])
    knots = knot_values(times, signals, np.zeros(1), lag)
    grid = 1e-3 + np.linspace(0, 20 * lag, 20001)
    found = values_at(grid, times, signals, knots, lag)[0]
    assert np.allclose(found, -np.expm1(-(grid - 1e-3) / lag), atol=1e-9)
    crossings = np.interp([0.1, 0.9], found, grid)
    assert crossings[1] - crossings[0] == pytest.approx(math.log(9) * lag, rel=1e-5)


# A ramp of slope s: y = s (t - lag (1 - exp(-t/lag))); closed form.
def test_a_bandwidth_makes_a_ramp_lag() -> None:
    lag = 3e-6
    times, signals = np.array([0.0, 1e-4]), np.array([[0.0, 5.0], [0.0, -1.0]])
    knots = knot_values(times, signals, np.zeros(2), lag)
    grid = np.linspace(0, 1e-4, 1001)
    lagged = grid + lag * np.expm1(-grid / lag)
    found = values_at(grid, times, signals, knots, lag)
    assert np.allclose(found, np.array([[5e4], [-1e4]]) * lagged, atol=1e-12)


def random_course(seed: int) -> tuple[Floats, Floats]:
    random = np.random.default_rng(seed)
    times = np.cumsum(10.0 ** random.uniform(-9, -5, 300))
    times[50], times[120] = times[49], times[119]  # two jumps
    return times, random.standard_normal((2, 300))


@pytest.mark.parametrize("lag", [1e-9, 1e-7, 1e-5, 1e-2])
def test_a_bandwidth_does_not_care_where_a_course_is_cut(lag: float) -> None:
    times, signals = random_course(3)
    begin = np.array([0.3, -0.2])
    whole = knot_values(times, signals, begin, lag)
    # One knot after another, by the closed form of one straight piece.
    value, singly = begin.copy(), [begin.copy()]
    for place in range(len(times) - 1):
        length = times[place + 1] - times[place]
        if length > 0:
            slope = (signals[:, place + 1] - signals[:, place]) / length
            lagging = slope * lag
            decayed = (value - signals[:, place] + lagging) * math.exp(-length / lag)
            value = signals[:, place + 1] - lagging + decayed
        singly.append(value.copy())
    # Slopes reach 1e9 V/s; what cancels has that much rounding.
    assert np.allclose(whole, np.array(singly).T, atol=1e-9 + 1e-6 * lag)
    for cut in (1, 7, 60, 298):
        middle = last_values(times[: cut + 1], tuple(signals[:, : cut + 1]), begin, lag)
        assert np.allclose(middle, whole[:, cut], atol=1e-12)
        later = knot_values(times[cut:], signals[:, cut:], middle, lag)
        assert np.allclose(later, whole[:, cut:], atol=1e-12)


# IEEE Std 181, transition from 10 % to 90 %: through one pole that is slow against the edge, a
# linear edge takes ln 9 time constants; through a fast one, 0.8 of the ramp (closed forms).
@pytest.mark.parametrize("bandwidth", [50e3, 500e6])
def test_the_edge_of_a_pulse_is_seen_through_the_bandwidth(bandwidth: float) -> None:
    setup = Setup(digitizer=DigitizerImperfections(**(EXACT | {"bandwidth_hertz": bandwidth})))
    setup.generator.say(":PULS:TRAN 1E-6")
    lag = 1 / (2 * math.pi * bandwidth)
    times, volts = setup.shot()
    rising = (times > -1e-6) & (times < 60e-6)
    reached = volts[rising] / 4

    def passes(share: float) -> float:
        place = int(np.argmax(reached >= share))
        return float(times[rising][place])

    expected = math.log(9) * lag if lag > 1e-6 else 1e-6
    # Within two sample intervals of 50 ns, and what the edge adds to a slow pole.
    assert passes(0.9) - passes(0.1) == pytest.approx(expected, abs=1.5e-7)


def test_a_bandwidth_remembers_what_was_before_the_acquisition() -> None:
    wrong = EXACT | {"bandwidth_hertz": 1e3}
    setup = Setup(digitizer=DigitizerImperfections(**wrong))
    setup.generator.say(":PULS:POL INV")
    # The terminal jumps to 4 V at rest, 159 us is the pole's time constant.
    setup.oscilloscope.say(":TRIG:SOUR IMM;:SENS:SWE:OREF:LOC 0;:INIT")
    setup.bench.clock.advance(1e-3)
    codes = np.frombuffer(block(setup.oscilloscope.ask(":TRAC? CHAN1"), behind=b"\n"), ">i2")
    times = 5e-8 * np.arange(len(codes))
    expected = -4 * np.expm1(-times * 2 * math.pi * 1e3)
    assert np.allclose(codes * 16 / 4096, expected, atol=2 * CODE)


@pytest.mark.parametrize(
    ("wrong", "at_rest", "at_top"),
    [
        ({"gain_error": 0.1}, 0.0, 4.4),
        ({"offset_volts": -0.25}, -0.25, 3.75),
        # Steps of 20 V/2^5; the panel shows them, too.
        ({"bits": 5}, 0.0, 3.75),
    ],
)
def test_a_source_is_wrong_by_its_numbers(
    wrong: dict[str, Any], at_rest: float, at_top: float
) -> None:
    setup = Setup(source=SourceImperfections(**wrong))
    times, volts = setup.shot()
    assert np.allclose(rest(times, volts), at_rest, atol=1.01 * CODE)
    assert np.allclose(top(times, volts), at_top, atol=1.01 * CODE)
    shown = 3.75 if "bits" in wrong else 4.0
    assert float(setup.generator.say(":VOLT:HIGH?")) == pytest.approx(shown, abs=1e-3)


def test_the_relay_takes_its_time() -> None:
    setup = Setup(source=SourceImperfections(relay_seconds=0.5))
    setup.generator.say(":OUTP OFF;:OUTP ON")
    setup.bench.clock.advance(0.49)
    assert setup.generator.say(":STAT:OPER:COND?") == "2"
    setup.bench.clock.advance(0.02)
    assert setup.generator.say(":STAT:OPER:COND?") == "0"


def test_a_trigger_delay_is_between_the_command_and_the_pulse_and_its_sync() -> None:
    setup = Setup(source=SourceImperfections(trigger_delay_seconds=0.25))
    setup.oscilloscope.say(":INIT")
    setup.bench.clock.advance(1e-3)
    setup.generator.say(":INIT;*TRG")
    setup.bench.clock.advance(0.2)
    assert setup.generator.say(":STAT:OPER:COND?") == "8"
    assert setup.oscilloscope.say(":STAT:OPER:COND?") == "48"
    assert setup.bench.table.delivered == 0
    setup.bench.clock.advance(0.06)
    assert setup.bench.table.delivered == 1
    assert setup.oscilloscope.say(":STAT:OPER:COND?") == "0"


def test_a_burst_that_is_aborted_in_its_delay_never_comes() -> None:
    setup = Setup(source=SourceImperfections(trigger_delay_seconds=0.25))
    setup.oscilloscope.say(":INIT")
    setup.generator.say(":INIT;*TRG")
    setup.bench.clock.advance(0.1)
    setup.generator.say(":ABOR")
    setup.bench.clock.advance(1.0)
    assert setup.bench.table.delivered == 0
    assert setup.generator.say(":PULS:COUN:SENT?") == "0"
    assert setup.oscilloscope.say(":STAT:OPER:COND?") == "48"


class Rises:
    """Notes when the terminal comes up to 2 V."""

    def __init__(self) -> None:
        self.instants: list[float] = []

    def saw(self, times: Floats, terminal_volts: Floats, node_volts: Floats) -> None:
        del node_volts
        if terminal_volts[0] < 2 <= terminal_volts[-1]:
            self.instants.append(float(np.interp(2, terminal_volts, times)))


def test_a_source_jitters_by_its_number() -> None:
    jitter = 1e-5
    setup = Setup(
        source=SourceImperfections(trigger_delay_seconds=1e-4, trigger_jitter_seconds=jitter)
    )
    rises = Rises()
    setup.bench.table.observe(rises)
    fired = []
    for _ in range(60):
        fired.append(setup.bench.clock.now)
        setup.generator.say(":INIT;*TRG")
        setup.bench.clock.advance(1e-3)
    # Half of the rise of 125 ns comes before 2 V.
    delays = np.array(rises.instants) - np.array(fired) - 62.5e-9
    # A: 60 pulses know the mean to jitter/7.7 and the deviation to 9 %; four times these.
    assert np.mean(delays) == pytest.approx(1e-4, abs=4 * jitter / 7.7)
    assert np.std(delays) == pytest.approx(jitter, rel=0.36)


@pytest.mark.parametrize(
    ("kind", "changed", "complaint"),
    [
        (SourceImperfections, {"bits": 3}, "bits is 3; it must be from 4 to 24"),
        (
            SourceImperfections,
            {"relay_seconds": -1.0},
            "relay_seconds is -1 s; .* from 0 s to 10 s",
        ),
        (SourceImperfections, {"gain_error": math.nan}, "gain_error is nan"),
        (
            SourceImperfections,
            {"shortest_edge_seconds": 1e-3, "longest_edge_seconds": 1e-4},
            "longest_edge_seconds is 0.0001 s; it must be from 0.001 s",
        ),
        (DigitizerImperfections, {"bits": 17}, "bits is 17; it must be from 4 to 16"),
        (DigitizerImperfections, {"noise_share": -0.1}, "noise_share is -0.1; it must be from 0"),
        (
            DigitizerImperfections,
            {"offset_shares": (0.0, 0.5)},
            "offset_shares of channel 2 is 0.5; it must be from -0.25 to 0.25",
        ),
        (DigitizerImperfections, {"gain_errors": (0.0,)}, "gain_errors has 1 numbers; write one"),
        (DigitizerImperfections, {"bandwidth_hertz": 0.0}, "bandwidth_hertz is 0 Hz; .* 1 Hz"),
    ],
)
def test_a_number_that_no_instrument_has_is_refused(
    kind: Callable[..., object], changed: dict[str, Any], complaint: str
) -> None:
    with pytest.raises(ValueError, match=complaint):
        kind(**changed)


@pytest.mark.parametrize("kind", [SourceImperfections, DigitizerImperfections])
def test_every_number_is_checked(kind: Any) -> None:
    for field in fields(kind):
        value = (math.nan, math.nan) if field.name.endswith(("shares", "errors")) else math.nan
        with pytest.raises(ValueError, match=f"^{field.name}"):
            kind(**{field.name: value})


# Period 1000 s, a triangle: no flat top, and each ramp lasts 500 s, so 400 s from 10 % to 90 %.
SLOW_TRIANGLES = {
    "scpi99": (":PULS:WIDT 500;PER 1000;TRAN 400;TRAN:TRA 400", ":INIT;*TRG"),
    "perdiv": (":SOUR:FREQ 1E-3;FUNC:PULS:WIDT 500;TRAN 400;:SOUR:BURS:STAT ON", "*TRG"),
    "stateword": (
        "CH1:PERIOD 1000;:CH1:WIDTH 500;:CH1:RISE 400;:CH1:FALL 400;:CH1:TRIGMODE SOFT",
        "CH1:ARM;:CH1:FIRE",
    ),
}


@pytest.mark.parametrize("family", FAMILIES)
def test_a_triangle_of_a_thousand_seconds_is_played(family: str) -> None:
    bench = Bench(SimulationSettings(cell=LINEAR, family=family))
    generator = Line(bench.generator)
    setting, fire = SLOW_TRIANGLES[family]
    generator.say(setting)
    generator.say({"stateword": "CH1:OUTPUT 1"}.get(family, ":OUTP ON"))
    bench.clock.advance(0.1)
    generator.say(fire)
    assert bench.generator.status.errors.pop().number == 0
    high = bench.generator_model.wanted.high_volts
    for seconds, share in ((250, 0.5), (250, 1.0), (125, 0.75), (374, 0.002)):
        bench.clock.advance(seconds)
        assert bench.table.terminal_volts == pytest.approx(share * high, abs=1e-3 * high)
