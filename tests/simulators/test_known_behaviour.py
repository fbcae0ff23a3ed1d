"""What is known of such cells from the literature and from practice, seen through the table.

These are statements about physics, not about numbers: each names where it comes from, and its
tolerance says what else goes on in a pulse. All cells are invented.
"""

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from tests.simulators.table_pulses import connected, preset, pulse

THRESHOLD_VOLTS = 2.5

# Where the circuit limits, each pulse delivers a charge: the series resistance is large, and
# film and probe take next to nothing of it. The spread is small, so that full is a sharp end.
BY_CHARGE = CellDescription(relative_permittivity=10.0, activation_spread=2.0)
BASE_OHMS = 220e3

# Where the kinetics limit, the cell sees the generator's voltage from the first part of each
# pulse on: 100 Ohm in all, 31 ns of time constant in pulses of 1 us.
SLOW_CELL = CellDescription(attempt_seconds=13.5e-9)
SMALL_RESISTANCE = Wiring(series_ohms=50.0)


def bare(series_ohms: float) -> Wiring:
    """Return a wiring whose probe takes nothing."""
    return Wiring(series_ohms=series_ohms, probe_ohms=math.inf, probe_farads=0.0)


def full_count(cell: CellDescription, wiring: Wiring, *, volts: float, seconds: float) -> float:
    """Preset and count pulses until the end voltage passes the threshold, with a fraction."""
    table = connected(cell, wiring)
    preset(table)
    before = -math.inf
    for count in range(1, 200):
        end_volts = pulse(table, volts, seconds)
        if end_volts > THRESHOLD_VOLTS:
            assert before > -math.inf
            return count - 1 + (THRESHOLD_VOLTS - before) / (end_volts - before)
        before = end_volts
    raise AssertionError("200 pulses did not pass the threshold")


def half_count(cell: CellDescription, wiring: Wiring, *, volts: float, seconds: float) -> float:
    """Count pulses until half of the cell is up, with a fraction.

    Behind so little resistance the end voltage is the generator's, full or not.
    """
    table = connected(cell, wiring)
    before = 0.0
    for count in range(1, 400):
        pulse(table, volts, seconds, rest_seconds=seconds)
        if table.up_fraction > 0.5:
            return count - 1 + (0.5 - before) / (table.up_fraction - before)
        before = table.up_fraction
    raise AssertionError("400 pulses did not switch half of the cell")


# Common practice: a cell counts to less at a higher amplitude. By kinetics (Merz) and by
# circuit (more current through the resistor) alike, so it holds for every cell and wiring.
@pytest.mark.parametrize("cell", [CellDescription(), BY_CHARGE])
def test_a_higher_amplitude_fills_in_fewer_pulses(cell: CellDescription) -> None:
    counts = [
        full_count(cell, Wiring(), volts=volts, seconds=100e-6) for volts in (3.6, 3.8, 4.0, 4.5)
    ]
    for lower, higher in pairwise(counts):
        assert higher < 0.95 * lower


# W. J. Merz, Phys. Rev. 95, 690 (1954), form of the law from memory: switching time goes as
# exp(a/V). So does a count of equal pulses, and ln N against 1/V is a straight line of slope
# a. Edges and charging take about 0.1 us of each pulse's 1 us, not quite the same part at each
# voltage: 3 % of the slope. With a distribution of a, half of the cell is up when the median
# region is.
@pytest.mark.parametrize("spread_volts", [0.0, 5.0])
def test_log_count_is_a_straight_line_against_inverse_amplitude(spread_volts: float) -> None:
    cell = replace(SLOW_CELL, activation_spread=spread_volts)
    amplitudes = np.array([2.8, 3.1, 3.5, 3.9])
    logs = np.log(
        [half_count(cell, SMALL_RESISTANCE, volts=volts, seconds=1e-6) for volts in amplitudes]
    )
    assert logs[0] - logs[-1] > math.log(10)
    slope, intercept = np.polyfit(1 / amplitudes, logs, 1)
    # Over a factor of 10 in counts, no point is off the line by more than 1.5 %.
    assert np.abs(logs - intercept - slope / amplitudes).max() < 0.015
    assert slope == pytest.approx(cell.activation_volts, rel=0.03)


# The same where the circuit limits: the count changes far less with the amplitude than Merz's
# law says, so that the line above tells something about the cell.
def test_the_law_of_the_kinetics_does_not_show_where_the_circuit_limits() -> None:
    low, high = (
        full_count(BY_CHARGE, bare(BASE_OHMS), volts=volts, seconds=50e-6) for volts in (3.2, 4.4)
    )
    slope = math.log(low / high) / (1 / 3.2 - 1 / 4.4)
    assert 0 < slope < 0.5 * BY_CHARGE.activation_volts


FILLS = {
    "default": (CellDescription(), Wiring()),
    "leaky": (CellDescription(leak_ohms=1.9e6), Wiring()),
    "worn, with imprint": (
        CellDescription(remanent_polarization=0.155, imprint_volts=0.3),
        Wiring(),
    ),
    "steep": (
        CellDescription(
            relative_permittivity=150,
            activation_volts=15.0,
            activation_spread=0.5,
            remanent_polarization=0.29,
        ),
        Wiring(),
    ),
    "finite domains": (CellDescription(domains=168), Wiring()),
    "behind a diode": (CellDescription(), Wiring(diode_saturation_amperes=3e-6, clamp_volts=15.0)),
}


# Common practice: the end voltage rises with each pulse of a fill, never falls; what has
# switched takes no more charge, and what is left is harder to switch.
@pytest.mark.parametrize("name", FILLS)
def test_the_end_voltage_rises_with_each_pulse_of_a_fill(name: str) -> None:
    table = connected(*FILLS[name])
    preset(table)
    ends = [pulse(table, 4.0, 100e-6) for _ in range(16)]
    # Once full, all pulses are alike to what the solver promises, 0.1 mV.
    assert np.diff(ends).min() > -1e-4
    below = [volts for volts in ends if volts < THRESHOLD_VOLTS]
    assert len(below) >= 3
    assert np.diff(below).min() > 1e-3
    assert max(ends) > THRESHOLD_VOLTS


# A: where the circuit limits, a pulse half as wide brings half the charge, and the count
# doubles. The film (5.9 pF to 2 V: 12 pC of 1 nC or 0.5 nC) wants its charge in each pulse
# anew, which makes it a little more than twice.
@pytest.mark.parametrize("factor", [1.0, 2.2])
def test_half_the_width_doubles_the_count_where_the_circuit_limits(factor: float) -> None:
    wide, narrow = (
        full_count(BY_CHARGE, bare(factor * BASE_OHMS), volts=4.0, seconds=seconds)
        for seconds in (100e-6, 50e-6)
    )
    assert narrow / wide == pytest.approx(2.0, rel=0.06)


# Common practice: where the kinetics limit, a pulse half as wide has less than half of its
# time at full voltage, the rise taking the same time of both; so the count more than doubles,
# and ever more so. Without any rise it would be 2, for exponential switching adds up.
def test_half_the_width_more_than_doubles_the_count_where_kinetics_limit() -> None:
    counts = [
        half_count(SLOW_CELL, SMALL_RESISTANCE, volts=3.2, seconds=seconds)
        for seconds in (2e-6, 1e-6, 0.5e-6)
    ]
    ratios = [narrow / wide for wide, narrow in pairwise(counts)]
    assert ratios[1] > ratios[0] > 2.1
    # A: a rise that costs a fixed time d gives (w - d)/(w/2 - d); both ratios find the same d.
    first, second = (
        width * (ratio - 2) / (2 * (ratio - 1))
        for width, ratio in zip((2e-6, 1e-6), ratios, strict=True)
    )
    assert first == pytest.approx(second, abs=5e-9)
    assert 0 < first < 200e-9


# A default cell's circuit takes 67 us to charge: a pulse of 50 us never shows that it is full.
def test_a_pulse_shorter_than_the_circuit_never_passes_the_threshold() -> None:
    wiring = Wiring()
    table = connected(CellDescription(), wiring)
    preset(table)
    ends = [pulse(table, 4.0, 50e-6) for _ in range(60)]
    # A: a full cell is a linear capacitor of 307.1 pF.
    tau_seconds = wiring.branch_ohms * 307.14e-12
    ceiling = 4.0 * -math.expm1(-50e-6 / tau_seconds)
    assert 2.0 < max(ends) < ceiling + 1e-4 < THRESHOLD_VOLTS


# Common practice: where the circuit limits, the fill takes longer in proportion to the series
# resistance, for it sets the current at a nearly fixed shelf. The shelf itself sinks
# a little at less current (shorter), the film's charge weighs more (longer): 10 %.
def test_the_fill_time_scales_with_the_series_resistance_where_the_circuit_limits() -> None:
    counts = [
        full_count(BY_CHARGE, bare(factor * BASE_OHMS), volts=4.0, seconds=100e-6)
        for factor in (1.0, 2.2, 5.0, 10.0)
    ]
    ratios = [count / counts[0] for count in counts]
    assert ratios == pytest.approx([1.0, 2.2, 5.0, 10.0], rel=0.1)


# ... and where the kinetics limit, it does not.
def test_the_fill_time_hardly_knows_the_series_resistance_where_kinetics_limit() -> None:
    little, much = (
        half_count(SLOW_CELL, Wiring(series_ohms=series_ohms), volts=3.2, seconds=1e-6)
        for series_ohms in (50.0, 170.0)
    )
    # 2.2 times the whole resistance would be 120 % more. What is seen is the charging: with
    # a/V = 7.8 switching is under way when the node lacks an eighth or so, which takes two
    # to three time constants of 37 ns more, of about 0.9 us.
    assert 1.05 < much / little < 1.2
