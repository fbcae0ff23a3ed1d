"""Records of single pulses against closed forms."""

import math

import numpy as np
import pytest

from pulsetally.sequencer.analysis.pulses import (
    PulseUnreadable,
    Samples,
    end_voltage,
    half_crossings,
)

STEP, WIDTH, RAMP, TAU = 0.2e-6, 100e-6, 0.125e-6, 67e-6


def times_of(points: int = 2000, before: float = 40e-6) -> Samples:
    return np.arange(points, dtype=np.float64) * STEP - before


def trapezoid(times: Samples, level: float, ramp: float = RAMP) -> Samples:
    begin, end = -ramp / 2, WIDTH + ramp / 2
    return level * np.clip(np.minimum(times - begin, end - times) / ramp, 0.0, 1.0)


def rc_charge(times: Samples, level: float) -> Samples:
    """Node of a linear capacitor behind a resistor, for a pulse with steep edges."""
    charged = level * (1 - np.exp(-np.clip(times, 0, WIDTH) / TAU))
    return charged * np.exp(-np.clip(times - WIDTH, 0, None) / TAU)


# IEEE Std 181-2011: the pulse duration is taken at the 50 % reference level; for a trapezoid
# with equal edges it is the flat top and one edge (closed form).
def test_half_crossings_of_a_trapezoid() -> None:
    times = times_of()
    begin, end = half_crossings(times, trapezoid(times, 4.0, ramp=5e-6), 0.0, 4.0)
    assert begin == pytest.approx(0.0, abs=1e-9)
    assert end - begin == pytest.approx(WIDTH, abs=1e-9)


def test_half_crossings_of_a_negative_pulse() -> None:
    times = times_of()
    begin, end = half_crossings(times, trapezoid(times, -5.0, ramp=5e-6), 0.0, -5.0)
    assert end - begin == pytest.approx(WIDTH, abs=1e-9)


# Closed form: the capacitor's voltage at the end of the flat top is V (1 - exp(-t / RC)).
@pytest.mark.parametrize("level", [4.0, -5.0])
def test_end_voltage_of_an_rc_charge(level: float) -> None:
    times = times_of()
    found = end_voltage(
        times, trapezoid(times, level), rc_charge(times, level), base=0.0, level=level, ramp=RAMP
    )
    expected = level * (1 - math.exp(-(WIDTH - RAMP / 2) / TAU))
    assert found.volts == pytest.approx(expected, abs=1e-3)
    assert found.seconds == pytest.approx(WIDTH - RAMP / 2, abs=STEP)


def test_the_stated_uncertainty_is_the_scatter_seen() -> None:
    times, level = times_of(), 4.0
    source, node = trapezoid(times, level), rc_charge(times, level)
    generator = np.random.default_rng(7)
    found = [
        end_voltage(
            times,
            source,
            node + generator.normal(0, 6e-3, node.size),
            base=0.0,
            level=level,
            ramp=RAMP,
        )
        for _ in range(400)
    ]
    scatter = np.std([each.volts for each in found], ddof=1)
    stated = np.mean([each.uncertainty for each in found])
    # The standard deviation of 400 values is itself known to 3.5 %; four times that.
    assert stated == pytest.approx(scatter, rel=0.15)


@pytest.mark.parametrize(
    ("source", "words"),
    [
        (np.zeros(2000), "no pulse"),
        (np.full(2000, 4.0), "whole pulse"),
        (np.where(times_of() > 0, 4.0, 0.0), "whole pulse"),
    ],
)
def test_a_record_without_the_whole_pulse_is_refused(source: Samples, words: str) -> None:
    with pytest.raises(PulseUnreadable, match=words):
        end_voltage(times_of(), source, source, base=0.0, level=4.0, ramp=RAMP)


def test_a_record_with_too_few_samples_is_refused() -> None:
    times = times_of()[::100]
    source = trapezoid(times, 4.0, ramp=10e-6)
    with pytest.raises(PulseUnreadable, match="samples lie on the last fifth"):
        end_voltage(times, source, source, base=0.0, level=4.0, ramp=10e-6)
