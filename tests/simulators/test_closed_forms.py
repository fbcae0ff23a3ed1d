"""What the whole table does, against formulas that anybody can derive again.

The labels name the rows of the project's list of reference values. Each formula is an
analytic identity; where a paper stands behind the law, it is named.
"""

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.special import exp1
from scipy.stats import norm

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import Table
from tests.simulators.table_pulses import connected

Array = NDArray[np.float64]

FARADS_PER_METRE = 8.8541878128e-12

# A cell that switches so little charge, behind so little resistance, that its voltage is the
# EMF from the first femtoseconds on.
STIFF = Wiring(source_ohms=1e-3, series_ohms=0, probe_ohms=math.inf, probe_farads=0)
NO_CHARGE = CellDescription(remanent_polarization=1e-9, relative_permittivity=1.0)


class Current:
    """Keeps the course and integrates what comes through the source resistance."""

    def __init__(self, table: Table, wiring: Wiring) -> None:
        self._ohms = wiring.series_ohms
        self._stretches: list[tuple[Array, Array]] = []
        table.observe(self)

    def saw(self, times: Array, terminal_volts: Array, node_volts: Array) -> None:
        self._stretches.append((times, (terminal_volts - node_volts) / self._ohms))

    def _take(self) -> tuple[Array, Array]:
        times, amperes = zip(*self._stretches, strict=True)
        self._stretches.clear()
        return np.concatenate(times), np.concatenate(amperes)

    def take_coulombs(self) -> float:
        """Return the charge since the last time, C, by trapezoids."""
        times, amperes = self._take()
        return float(np.trapezoid(amperes, times))

    def take_square(self) -> float:
        """Return the integral of the current's square since the last time, A2 s."""
        times, amperes = self._take()
        return float(np.trapezoid(amperes**2, times))


# FE-10 (A; law after Tagantsev et al., Phys. Rev. B 66, 214109 (2002), from memory): the
# switched part is the integral over all regions of 1 - exp(-t/tau(a)). Here a is normally
# distributed and tau = tau0 exp((a/v)^alpha). 256 regions at mid-probability stand for the
# integral; each holds 0.4 % of the cell, and they differ from it by less than a quarter of that.
@pytest.mark.parametrize("seconds", [20e-9, 300e-9, 1e-6, 5e-6, 100e-6])
@pytest.mark.parametrize(("volts", "alpha"), [(4.0, 1.0), (6.0, 1.5)])
def test_many_regions_are_the_integral_over_their_distribution(
    seconds: float, volts: float, alpha: float
) -> None:
    mean, spread, attempt = 25.0, 5.0, 2e-9
    table = connected(replace(NO_CHARGE, regions=256, alpha=alpha), STIFF)
    table.rest_at(volts)
    table.advance(seconds)

    def switched(place: float) -> float:
        barrier = ((mean + spread * place) / volts) ** alpha
        lapse = seconds / attempt * math.exp(-barrier)
        return float(norm.pdf(place)) * -math.expm1(-lapse)

    expected, _ = quad(switched, -4.7, 4.7, epsabs=1e-10)
    assert table.up_fraction == pytest.approx(expected, abs=1 / 256 / 4)


# A: on a ramp v = s t, one region with Merz's law (alpha 1) has seen
# (1/tau0) integral exp(-a/v) dt = (v exp(-a/v) - a E1(a/v)) / (s tau0), and is up by
# 1 - exp(-that).
@pytest.mark.parametrize("volts", [2.0, 2.5, 3.0, 4.0])
def test_a_ramp_switches_one_region_by_an_exponential_integral(volts: float) -> None:
    activation, attempt, slope = 25.0, 2e-9, 4.0 / 100e-6
    cell = replace(NO_CHARGE, activation_spread=0.0, regions=1)
    table = connected(cell, STIFF)
    # 10 % to 90 % is 0.8 of a linear ramp.
    table.play(
        PulseTrain(
            level_volts=4.0,
            width_seconds=200e-6,
            leading_seconds=80e-6,
            trailing_seconds=80e-6,
            period_seconds=1e-3,
        )
    )
    # The solver's steps follow the node, which is a straight line here and tells nothing of the
    # switching; whoever lets time pass in portions bounds them.
    for _ in range(100):
        table.advance(volts / slope / 100)
    lapse = volts * math.exp(-activation / volts) - activation * exp1(activation / volts)
    expected = -math.expm1(-float(lapse) / (slope * attempt))
    assert table.up_fraction == pytest.approx(expected, rel=1e-5)


# FE-14 (A): with a full count of 31 in the noiseless model, k stored pulses leave 31 - k. Full
# is where 30.5 pulses' worth of exponential switching has been passed.
@pytest.mark.parametrize("stored", [0, 1, 15, 30])
def test_a_stored_count_and_its_remainder_make_up_the_full_count(stored: int) -> None:
    width, tau = 50e-9, 1e-6
    attempt = tau * math.exp(-25.0 / 4.0)
    cell = replace(NO_CHARGE, activation_spread=0.0, attempt_seconds=attempt, regions=1)
    table = connected(cell, STIFF)

    def send(pulses: int) -> None:
        period = 4 * width
        table.play(
            PulseTrain(
                level_volts=4.0,
                width_seconds=width,
                leading_seconds=0,
                trailing_seconds=0,
                period_seconds=period,
                count=pulses,
                start_seconds=table.now,
            )
        )
        table.advance(pulses * period)

    if stored:
        send(stored)
    full, remaining = -math.expm1(-30.5 * width / tau), 0
    while table.up_fraction < full:
        send(1)
        remaining += 1
    assert remaining == 31 - stored


# FE-21, FE-22, FE-25 (A): 2 P_r = 40 uC/cm2 on 100 um x 100 um is 4.000 nC, which is 40.0 mV on
# a reference capacitor of 100 nF. The first pulse of a polarity carries it more than the second.
def test_pulses_up_and_down_carry_twice_the_remanent_polarization() -> None:
    cell = CellDescription(remanent_polarization=0.20, area=1e-8)
    wiring = Wiring(series_ohms=10e3, probe_ohms=math.inf)
    table = connected(cell, wiring)
    current = Current(table, wiring)
    coulombs = []
    for volts in (8.0, 8.0, -8.0, -8.0):
        table.play(
            PulseTrain(
                level_volts=volts, width_seconds=1e-3, period_seconds=2e-3, start_seconds=table.now
            )
        )
        table.advance(2e-3)
        coulombs.append(current.take_coulombs())
    up, up_again, down, down_again = coulombs
    # Printed to 0.001 nC and 0.1 mV; at 8 V even the hardest region switches in 0.2 us.
    assert up - up_again == pytest.approx(4.000e-9, abs=0.0005e-9)
    assert down - down_again == pytest.approx(-4.000e-9, abs=0.0005e-9)
    assert (up - up_again) / 100e-9 == pytest.approx(40.0e-3, abs=0.05e-3)
    # A full cell gives back what it takes.
    assert up_again == pytest.approx(0, abs=0.0005e-9)
    assert down_again == pytest.approx(0, abs=0.0005e-9)


# FE-25 (A): an ideal linear capacitor carries the same charge in each pulse of a polarity,
# whatever the wiring's resistance.
@pytest.mark.parametrize("series_ohms", [1e3, 220e3])
def test_linear_capacitor_has_no_switching_charge(series_ohms: float) -> None:
    wiring = Wiring(series_ohms=series_ohms)
    table = connected(CellDescription(activation_volts=1e5, activation_spread=0), wiring)
    current = Current(table, wiring)
    coulombs = []
    for volts in (5.0, 5.0, -5.0, -5.0):
        train = PulseTrain(
            level_volts=volts, width_seconds=2e-3, period_seconds=5e-3, start_seconds=table.now
        )
        table.play(train)
        table.advance(2e-3)
        coulombs.append(current.take_coulombs())
        table.advance(3e-3)
        current.take_coulombs()
    farads = FARADS_PER_METRE * 500 * 1e-8 / 150e-9 + 12e-12
    # What the probe takes, 5 V/10 MOhm over 2 ms, is the same for both.
    assert coulombs[0] - coulombs[1] == pytest.approx(0, abs=1e-5 * 5 * farads)
    assert coulombs[2] - coulombs[3] == pytest.approx(0, abs=1e-5 * 5 * farads)


# CIR-7 (A): 1 uF charged to 1 V stores 0.5 uJ, and as much is dissipated in any resistance.
@pytest.mark.parametrize("series_ohms", [150.0, 10e3, 1e6])
def test_charging_dissipates_half_a_microjoule_in_any_resistance(series_ohms: float) -> None:
    cell = CellDescription(
        area=1e-6 * 150e-9 / (FARADS_PER_METRE * 500), activation_volts=1e5, activation_spread=0
    )
    wiring = Wiring(series_ohms=series_ohms, probe_ohms=math.inf, probe_farads=0)
    table = connected(cell, wiring)
    current = Current(table, wiring)
    table.rest_at(1.0)
    table.advance(20 * wiring.branch_ohms * 1e-6)
    assert 0.5 * 1e-6 * table.node_volts**2 == pytest.approx(0.5e-6, rel=1e-8)
    # 0.1 mV of the course is 1e-4 of the current.
    assert current.take_square() * wiring.branch_ohms == pytest.approx(0.5e-6, rel=5e-4)


# A: nothing flows into a floating node, so C v + A P stays: the cell pays for what it switches
# from the charge on its own electrodes.
def test_a_floating_cell_switches_on_its_own_charge() -> None:
    wiring = Wiring(series_ohms=50.0, probe_ohms=math.inf)
    table = connected(CellDescription(activation_volts=20.0), wiring)
    table.rest_at(4.0)
    table.advance(200e-9)
    table.connect(False)
    farads = FARADS_PER_METRE * 500 * 1e-8 / 150e-9 + 12e-12

    def kept() -> float:
        return farads * table.node_volts + 1e-8 * table.polarization

    begin, volts, up = kept(), [table.node_volts], [table.up_fraction]
    for seconds in (1e-6, 1e-5, 1e-3, 1.0):
        table.advance(seconds)
        assert kept() == pytest.approx(begin, abs=1e-5 * farads)
        volts.append(table.node_volts)
        up.append(table.up_fraction)
    assert all(later < earlier for earlier, later in pairwise(volts))
    assert all(later > earlier for earlier, later in pairwise(up))
    assert volts[0] > 2 * volts[-1]
