"""The laws of wear and their settings, without a cell."""

import math
from typing import Any

import pytest

from pulsetally.simulators.wear import (
    Breakdown,
    Fatigue,
    ImprintGrowth,
    Incubation,
    Option,
    Retention,
    Thermal,
)

# A: exp(-(N/1e10)^0.3), printed to six digits.
FATIGUE = [(1e6, 0.938854), (1e8, 0.777876), (1e10, 0.367879), (1e12, 0.018666)]


@pytest.mark.parametrize(("cycles", "kept"), FATIGUE)
def test_fatigue_is_a_stretched_exponential(cycles: float, kept: float) -> None:
    assert Fatigue(scale_cycles=1e10, exponent=0.3).kept(cycles) == pytest.approx(kept, abs=5e-7)


def test_recovery_brings_back_its_share_of_the_loss() -> None:
    fatigue = Fatigue(recovered_share=0.4, recovery_volts=6.0)
    lost = 1 - fatigue.kept(1e9)
    assert 1 - fatigue.kept(fatigue.recovered(1e9)) == pytest.approx(0.6 * lost, rel=1e-12)
    assert Fatigue(recovered_share=1.0, recovery_volts=6.0).recovered(1e9) == 0.0
    assert Fatigue().recovered(1e9) == pytest.approx(1e9, rel=1e-12)


# A: a loss of (N/scale)^3 = 1e-27 is in proportion to the cube; half of it is 0.5^(1/3) N.
def test_a_loss_too_small_to_be_seen_in_what_is_kept_recovers_too() -> None:
    fatigue = Fatigue(scale_cycles=1e9, exponent=3.0, recovered_share=0.5, recovery_volts=6.0)
    assert fatigue.recovered(1.0) == pytest.approx(0.793701, abs=5e-7)


# A: 1 - 0.02 log10(t/1 s); 1 s to 10 years (3.15576e8 s), printed to six digits.
def test_retention_loses_a_share_in_each_decade() -> None:
    retention = Retention(loss_per_decade=0.02, onset_seconds=1.0)
    assert retention.kept(3.15576e8) == pytest.approx(0.830018, abs=5e-7)
    assert retention.kept(0.5) == retention.kept(1.0) == 1.0
    assert retention.kept(1e60) == 0.0


# A: exp(-1) at the onset, whatever the exponent.
def test_stretched_retention_is_down_to_1_over_e_at_its_time() -> None:
    retention = Retention(law="stretched", onset_seconds=1e5, exponent=0.4)
    assert retention.kept(1e5) == pytest.approx(math.exp(-1), rel=1e-12)
    assert retention.kept(0.0) == 1.0


# A: exp(E_a/k (1/T_use - 1/T_stress)) with k = 8.617333262e-5 eV/K; degrees Celsius. The
# second row is printed in the NIST e-Handbook, 8.1.5.1, as 133.
ARRHENIUS = [(0.7, 55.0, 125.0, 77.645, 1e-3), (0.5, 25.0, 125.0, 133.0, 0.5)]


@pytest.mark.parametrize(("ev", "use", "stress", "factor", "tolerance"), ARRHENIUS)
def test_heat_accelerates_after_arrhenius(
    ev: float, use: float, stress: float, factor: float, tolerance: float
) -> None:
    thermal = Thermal(reference_kelvin=273.15 + use)
    found = thermal.acceleration(ev, 273.15 + stress)
    assert found == pytest.approx(factor, abs=tolerance)
    assert thermal.acceleration(ev, 273.15 + use) == 1.0


def test_activation_voltages_scale_linearly_with_temperature() -> None:
    thermal = Thermal(reference_kelvin=300.0, activation_per_kelvin=-2e-3)
    assert thermal.activation_factor(300.0) == 1.0
    assert thermal.activation_factor(400.0) == pytest.approx(0.8)
    assert thermal.activation_factor(250.0) == pytest.approx(1.1)
    assert thermal.activation_factor(1000.0) == 0.1


# A: 1 - 1/e of a Weibull population has failed at the scale, one half at scale (ln 2)^(1/shape).
def test_breakdown_is_a_weibull_distribution() -> None:
    breakdown = Breakdown(scale_cycles=1e8, shape=1.5)
    assert breakdown.cycles_at(math.exp(-1)) == pytest.approx(1e8)
    assert breakdown.cycles_at(0.5) == pytest.approx(1e8 * math.log(2) ** (1 / 1.5))


# A: log10(1 + t/t0).
def test_imprint_grows_with_log_time() -> None:
    growth = ImprintGrowth(volts_per_decade=0.05, onset_seconds=2.0)
    assert growth.shift_volts(0.0) == 0.0
    assert growth.shift_volts(18.0) == pytest.approx(0.05)
    assert growth.shift_volts(2e8) == pytest.approx(0.4, abs=1e-8)


# Option, its settings, the message.
MISTAKES: list[tuple[type[Option], dict[str, object], str]] = [
    (Incubation, {"seconds": 0.0}, "seconds is 0.0; it must be above 0"),
    (Incubation, {"seconds": 1.0, "threshold_volts": -1.0}, "threshold_volts is -1.0"),
    (ImprintGrowth, {"volts_per_decade": 0.0}, "volts_per_decade is 0.0; it must be above 0"),
    (ImprintGrowth, {"volts_per_decade": 1, "activation_ev": -1}, "it must be 0 or more"),
    (Fatigue, {"scale_cycles": math.inf}, "scale_cycles is inf; it must be above 0"),
    (Fatigue, {"recovered_share": 1.5}, "recovered_share is 1.5; it must be from 0 to 1"),
    (Fatigue, {"recovery_volts": 0.0}, "recovery_volts is 0.0; it must be above 0"),
    (Retention, {"law": "power"}, "law is power; it must be 'log time' or 'stretched'"),
    (Retention, {"side": 0}, "side is 0; it must be 1 or -1"),
    (Retention, {"onset_seconds": math.nan}, "onset_seconds is nan; it must be above 0"),
    (Retention, {"activation_ev": math.nan}, "activation_ev is nan; it must be 0 or more"),
    (Thermal, {"kelvin": 0.0}, "kelvin is 0.0; it must be above 0"),
    (Thermal, {"activation_per_kelvin": math.inf}, "it must be finite"),
    (Breakdown, {"shape": 0.0}, "shape is 0.0; it must be above 0"),
    (Breakdown, {"short_ohms": -5.0}, "short_ohms is -5.0; it must be above 0"),
]


@pytest.mark.parametrize(("option", "changes", "message"), MISTAKES)
def test_impossible_options_are_refused(
    option: type[Option], changes: dict[str, Any], message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        option(**changes)
