"""What an instrument starts with and can be told is something that it can have."""

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.generator_model import GeneratorModel, PulseSettings
from pulsetally.simulators.imperfections import DigitizerImperfections, SourceImperfections
from pulsetally.simulators.scope_settings import (
    CHANNELS,
    interval_limits,
    last_step,
    next_step,
    range_limits,
)
from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.talking import LINEAR, Line

# Invented: each leaves out something that the usual settings are.
SOURCES: dict[str, dict[str, Any]] = {
    "a small span": {"span_volts": 0.5},
    "few codes of many volts": {"bits": 4, "span_volts": 1000.0},
    "only wide pulses": {"shortest_width_seconds": 1e-3},
    "only long periods": {"shortest_period_seconds": 1.0},
    "only slow edges": {"shortest_edge_seconds": 1e-3},
    "only short periods": {"longest_period_seconds": 5e-5},
    "only narrow pulses": {"longest_width_seconds": 5e-8},
    "only steep edges": {"shortest_edge_seconds": 1e-12, "longest_edge_seconds": 1e-9},
    "coarse times": {"time_step_seconds": 1e-3},
    "everything small": {
        "longest_edge_seconds": 6e-9,
        "longest_width_seconds": 30e-9,
        "longest_period_seconds": 45e-9,
    },
}
DIGITIZERS: dict[str, dict[str, Any]] = {
    "only slow": {"shortest_interval_seconds": 0.8e-3},
    "small ranges": {"largest_range_volts": 20.0, "smallest_range_volts": 0.003},
    "large ranges": {"smallest_range_volts": 0.9},
    "odd intervals": {"shortest_interval_seconds": 3e-9, "longest_interval_seconds": 3.0},
}
TWO_PULSES = {
    "scpi99": ":PULS:COUN 2",
    "perdiv": ":SOUR:BURS:NCYC 2",
    "stateword": "CH1:CYCLES 2",
}
TIMES = ("edge", "width", "period")


def settled(bench: Bench) -> PulseSettings:
    return bench.generator_model.wanted


def check_within(source: SourceImperfections, settings: PulseSettings) -> None:
    assert settings.conflict() == ""
    edge, width, period = settings.leading_seconds, settings.width_seconds, settings.period_seconds
    assert settings.trailing_seconds == edge
    for name, seconds in zip(TIMES, (edge, width, period), strict=True):
        # Limits between two steps of time are met within a thousandth of one.
        assert seconds >= getattr(source, f"shortest_{name}_seconds") * 0.999
        assert seconds <= getattr(source, f"longest_{name}_seconds") * 1.001
    assert 0 < settings.high_volts <= source.span_volts - source.volts_per_code


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("wrong", SOURCES.values(), ids=SOURCES)
def test_a_generator_starts_with_what_it_can_do(family: str, wrong: dict[str, Any]) -> None:
    source = SourceImperfections(**wrong)
    bench = Bench(SimulationSettings(cell=LINEAR, source=source, family=family))
    at_power_on = settled(bench)
    check_within(source, at_power_on)
    line = Line(bench.generator)
    # Any setting is taken over together with all others, which must not be in its way.
    line.say(TWO_PULSES[family])
    assert bench.generator.status.errors.pop().number == 0
    assert settled(bench).count == 2
    line.say("*RST")
    assert settled(bench) == at_power_on


@pytest.mark.parametrize("wrong", SOURCES.values(), ids=SOURCES)
def test_a_default_is_what_a_generator_starts_with(wrong: dict[str, Any]) -> None:
    bench = Bench(SimulationSettings(cell=LINEAR, source=SourceImperfections(**wrong)))
    line = Line(bench.generator)
    for header in (":PULS:WIDT", ":PULS:PER", ":PULS:TRAN", ":PULS:TRAN:TRA", ":VOLT:HIGH"):
        assert line.say(f"{header}? DEF") == line.say(f"{header}?")
        assert line.say(f"{header} DEF;:SYST:ERR?") == '0,"No error"'


def test_the_usual_generator_starts_as_ever() -> None:
    model = Bench(SimulationSettings(cell=LINEAR)).generator_model
    assert isinstance(model, GeneratorModel)
    assert model.power_on == PulseSettings()


lengths = st.floats(-12, 0).map(lambda exponent: 10**exponent)
factors = st.floats(0, 6).map(lambda exponent: 10**exponent)


@given(
    st.tuples(lengths, lengths, lengths),
    st.tuples(factors, factors, factors),
    st.floats(-12, -3).map(lambda exponent: 10**exponent),
)
def test_any_generator_that_can_be_has_a_pulse(
    shortest: tuple[float, ...], spans: tuple[float, ...], step: float
) -> None:
    limits: dict[str, Any] = {
        f"shortest_{name}_seconds": s for name, s in zip(TIMES, shortest, strict=True)
    }
    for name, seconds, span in zip(TIMES, shortest, spans, strict=True):
        limits[f"longest_{name}_seconds"] = seconds * span
    try:
        source = SourceImperfections(time_step_seconds=step, **limits)
    except ValueError:
        # No pulse has room; the test of what is refused says which these are.
        return
    edge, width, period = source.pulse_near(10e-9, 100e-6, 1e-3)
    check_within(
        source,
        PulseSettings(
            source=source,
            width_seconds=width,
            period_seconds=period,
            leading_seconds=edge,
            trailing_seconds=edge,
        ),
    )


@pytest.mark.parametrize(
    ("changed", "complaint"),
    [
        # 1 us from 10 % to 90 % is a ramp of 1.25 us, and a pulse has two of them.
        (
            {"shortest_edge_seconds": 1e-6, "longest_period_seconds": 2e-6},
            "longest_period_seconds is 2e-06 s; the shortest pulse, .* needs 2.5e-06 s",
        ),
        (
            {"shortest_edge_seconds": 1e-6, "longest_width_seconds": 1e-6},
            "longest_width_seconds is 1e-06 s; the shortest pulse, .* needs 1.25e-06 s",
        ),
        (
            {"time_step_seconds": 1e-3, "longest_width_seconds": 1e-4},
            "longest_width_seconds is 0.0001 s; the shortest pulse, .* needs 0.001 s",
        ),
    ],
)
def test_a_generator_that_can_make_no_pulse_is_refused(
    changed: dict[str, Any], complaint: str
) -> None:
    with pytest.raises(ValueError, match=complaint):
        SourceImperfections(**changed)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("wrong", DIGITIZERS.values(), ids=DIGITIZERS)
def test_an_oscilloscope_starts_with_what_it_can_do(family: str, wrong: dict[str, Any]) -> None:
    digitizer = DigitizerImperfections(**wrong)
    bench = Bench(SimulationSettings(cell=LINEAR, digitizer=digitizer, family=family))
    settings = bench.digitizer.settings
    shortest, longest = interval_limits(digitizer)
    assert shortest <= settings.interval_seconds <= longest
    assert digitizer.shortest_interval_seconds <= settings.sample_seconds
    for volts in settings.range_volts:
        assert range_limits(digitizer)[0] <= volts <= range_limits(digitizer)[1]


# Asked for the largest or smallest that there is, each channel and the time base stay within.
LIMITS = {
    "scpi99": (":SENS{0}:VOLT:RANG:PTP", ":SENS:SWE:TINT", 1.0, 1.0),
    "perdiv": (":CHAN{0}:SCAL", ":TIM:SCAL", 8.0, 1.0),
    "stateword": (":CH{0}:RANGE", ":HOR:RATE", 1.0, -1.0),
}


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("end", ["MIN", "MAX"])
def test_no_step_is_beyond_the_limits(family: str, end: str) -> None:
    digitizer = DigitizerImperfections(**(DIGITIZERS["small ranges"] | DIGITIZERS["odd intervals"]))
    bench = Bench(SimulationSettings(cell=LINEAR, digitizer=digitizer, family=family))
    line = Line(bench.oscilloscope)
    ranges, times, divisions, power = LIMITS[family]
    for channel in range(CHANNELS):
        header = ranges.format(channel + 1)
        line.say(f"{header} {end}")
        volts = float(line.say(f"{header}?").split()[-1]) * divisions
        # The steps are 8 divisions of 1, 2 or 5 volts and their decades.
        assert volts == pytest.approx({"MIN": 0.004, "MAX": 16.0}[end])
    line.say(f"{times} {end}")
    seconds = float(line.say(f"{times}?").split()[-1]) ** power
    longest = (end == "MAX") == (power > 0)
    assert seconds == pytest.approx(2.0 if longest else 5e-9)
    assert bench.oscilloscope.status.errors.pop().number == 0


@given(st.floats(-12, 9).map(lambda exponent: 10**exponent))
def test_a_value_lies_between_its_two_steps(value: float) -> None:
    below, above = last_step(value), next_step(value)
    assert below * (1 - 1e-8) <= value <= above * (1 + 1e-8)
    assert above <= below * 2.5 * (1 + 1e-8)
    assert next_step(below) == last_step(below) == below
    assert next_step(above) == last_step(above) == above
    assert math.isclose(next_step(math.nextafter(above, math.inf)), above)
