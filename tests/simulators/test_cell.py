"""The cell alone: charges, capacitances, the activation law and the domains."""

import math
from typing import Any

import numpy as np
import pytest

from pulsetally.simulators.cell import (
    FULLY_DOWN_FRACTION,
    LEAST_ACTIVATION_SHARE,
    Cell,
    CellDescription,
    rates_and_slopes,
    softest_rate,
)

VOLTS_PER_METRE = 1e5  # 1 kV/cm


# A: 1 uC/cm2 is 1e-6 C over 1e-4 m2. With it, 2 P_r = 40 uC/cm2 on 100 um x 100 um is 4 nC.
def test_full_reversal_moves_twice_the_remanent_polarization() -> None:
    microcoulomb_per_cm2 = 1e-6 / 1e-4
    assert microcoulomb_per_cm2 == pytest.approx(0.01)
    cell = CellDescription(remanent_polarization=20 * microcoulomb_per_cm2, area=(100e-6) ** 2)
    assert cell.switchable_coulombs == pytest.approx(4.000e-9, rel=1e-12)


# A: eps0 eps_r A/d with eps0 = 8.8541878128e-12 F/m; printed to 0.1 fF.
CAPACITANCES = [(500.0, 200e-9, 221.3547e-12), (30.0, 10e-9, 265.6256e-12)]


@pytest.mark.parametrize(("permittivity", "thickness", "farads"), CAPACITANCES)
def test_capacitance_is_that_of_a_plate_capacitor(
    permittivity: float, thickness: float, farads: float
) -> None:
    cell = CellDescription(relative_permittivity=permittivity, thickness=thickness, area=1e-8)
    assert cell.farads == pytest.approx(farads, abs=0.00005e-12)


# A: Merz's law with an activation field of 120 kV/cm; from 60 to 120 kV/cm the switching
# time falls by exp(2 - 1).
def test_switching_time_falls_by_e_between_half_and_whole_activation_field() -> None:
    thickness = 150e-9
    activation_volts = 120 * VOLTS_PER_METRE * thickness
    cell = Cell(
        CellDescription(
            thickness=thickness, activation_volts=activation_volts, activation_spread=0, regions=1
        ),
        seed=1,
    )
    half, whole = cell.rates(activation_volts / 2)[0], cell.rates(activation_volts)[0]
    assert whole / half == pytest.approx(math.e, rel=1e-6)


# H. L. Stadler, J. Appl. Phys. 33, 3487 (1962), thick limit of a barium titanate crystal:
# t_s = 0.8 us exp(3.5 kV/cm / E). Printed to four digits.
STADLER = [(0.5, 877.3e-6), (1.0, 26.49e-6)]


@pytest.mark.parametrize(("kilovolts_per_cm", "seconds"), STADLER)
def test_switching_times_of_barium_titanate(kilovolts_per_cm: float, seconds: float) -> None:
    thickness = 1e-3
    cell = Cell(
        CellDescription(
            thickness=thickness,
            activation_volts=3.5 * VOLTS_PER_METRE * thickness,
            activation_spread=0,
            attempt_seconds=0.8e-6,
            regions=1,
        ),
        seed=1,
    )
    rate = cell.rates(kilovolts_per_cm * VOLTS_PER_METRE * thickness)[0]
    assert 1 / rate == pytest.approx(seconds, rel=1e-3)


@pytest.mark.parametrize("alpha", [0.5, 1.0, 2.0])
def test_slope_of_the_rates_is_their_difference_quotient(alpha: float) -> None:
    cell = Cell(CellDescription(alpha=alpha, regions=5), seed=1)
    step = 1e-5
    rates, slopes = rates_and_slopes(cell.law, (2.0 - step, 2.0, 2.0 + step))
    assert slopes[1] == pytest.approx((rates[2] - rates[0]) / (2 * step), rel=1e-6)


def test_nothing_switches_without_a_voltage() -> None:
    cell = Cell(CellDescription(alpha=0.5), seed=1)
    rates, slopes = rates_and_slopes(cell.law, (0.0, -1.0))
    assert not rates.any()
    assert not slopes.any()
    assert softest_rate(cell.law, 0.0) == 0.0


def test_softest_rate_is_the_largest() -> None:
    cell = Cell(CellDescription(alpha=1.3), seed=1)
    assert softest_rate(cell.law, 3.0) == pytest.approx(cell.rates(3.0).max(), rel=1e-12)


# A: the median and the quartiles of a normal distribution lie at 0 and 0.67449 sd.
def test_activation_voltages_are_quantiles_of_a_normal() -> None:
    found = CellDescription(regions=2).activations()
    assert found == pytest.approx([25 - 0.6744898 * 5, 25 + 0.6744898 * 5], abs=1e-6)
    many = CellDescription(regions=2000).activations()
    assert np.all(np.diff(many) > 0)
    assert many.mean() == pytest.approx(25, abs=1e-9)
    assert many.std() == pytest.approx(5, rel=2e-3)
    assert np.all(CellDescription(activation_spread=0).activations() == 25)


def test_activation_voltages_stay_above_zero() -> None:
    found = CellDescription(activation_volts=5, activation_spread=10).activations()
    assert found.min() == pytest.approx(5 * LEAST_ACTIVATION_SHARE)
    assert found.max() > 20


def test_polarization_runs_from_down_to_up() -> None:
    cell = Cell(CellDescription(), seed=1)
    assert cell.polarization == -0.25
    cell.up = np.full(64, 0.5)
    assert cell.polarization == pytest.approx(0.0, abs=1e-15)
    cell.up = np.ones(64)
    assert cell.polarization == pytest.approx(0.25)
    cell.up = np.repeat([1.0, 0.0], [16, 48])
    assert cell.up_fraction == pytest.approx(0.25)
    assert not Cell(CellDescription(), seed=1).settle()


def test_domains_are_dealt_whole() -> None:
    weights = Cell(CellDescription(domains=180), seed=1).weights
    assert weights.sum() == pytest.approx(1)
    assert weights * 180 == pytest.approx(np.round(weights * 180), abs=1e-9)
    assert len(set(weights.tolist())) > 2


def test_domains_repeat_with_their_seed_only() -> None:
    def dealt(seed: int) -> list[float]:
        cell = Cell(CellDescription(domains=180), seed=seed)
        weights = cell.weights.tolist()
        cell.up = np.ones(64)
        cell.settle()
        cell.up = np.zeros(64)
        assert cell.settle()
        assert cell.weights.tolist() != weights
        return [*weights, *cell.weights.tolist()]

    assert dealt(7) == dealt(7)
    assert dealt(7) != dealt(8)


def test_new_domains_come_only_after_use_and_full_preset() -> None:
    cell = Cell(CellDescription(domains=180), seed=3)
    first = cell.weights.copy()
    assert not cell.settle()
    cell.up = np.full(64, 0.5)
    assert not cell.settle()
    cell.up = np.full(64, 2 * FULLY_DOWN_FRACTION)
    assert not cell.settle()
    assert np.array_equal(cell.weights, first)
    cell.up = np.full(64, FULLY_DOWN_FRACTION / 2)
    assert cell.settle()
    assert not cell.settle()


def test_dealing_domains_moves_no_charge() -> None:
    cell = Cell(CellDescription(domains=180), seed=3)
    cell.up = np.ones(64)
    cell.settle()
    cell.up = np.linspace(0, FULLY_DOWN_FRACTION, 64)
    before = cell.up_fraction
    assert cell.settle()
    assert cell.up_fraction == pytest.approx(before, rel=1e-12)


# Setting, its value, the message.
MISTAKES = [
    ("area", 0.0, "must be above 0"),
    ("thickness", -1e-9, "must be above 0"),
    ("relative_permittivity", math.inf, "must be above 0"),
    ("activation_volts", math.nan, "must be at least 0.5"),
    ("attempt_seconds", 0.0, "must be above 0"),
    ("remanent_polarization", -0.1, "must be 0 or more"),
    ("activation_spread", -1.0, "must be 0 or more"),
    ("alpha", 0.2, "must be from 0.5 to 5"),
    ("regions", 0, "must be from 1 to 100000"),
    ("leak_ohms", 0.0, "must be above 0"),
    ("imprint_volts", math.inf, "must be finite"),
    ("domains", 0, "must be from 1 to 1e[+]15"),
]


@pytest.mark.parametrize(("name", "value", "message"), MISTAKES)
def test_impossible_cells_are_refused(name: str, value: float, message: str) -> None:
    changes: dict[str, Any] = {name: value}
    with pytest.raises(ValueError, match=f"{name} is {value}; it {message}"):
        CellDescription(**changes)
