"""Imprint, fatigue, retention, temperature and breakdown, seen through the table."""

import math
from dataclasses import replace
from typing import Any, Literal

import numpy as np
import pytest

from pulsetally.simulators.ageing import Traps, worn_after
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import Breakdown, Fatigue, ImprintGrowth, Retention, Thermal
from tests.simulators.table_pulses import connected, preset, pulse, up

DAY_SECONDS = 86400.0


def written_up(**options: Any) -> Table:
    """Return a table whose cell has been driven fully up, the relay then opened."""
    table = connected(CellDescription(**options))
    pulse(table, 8.0, 2e-3, rest_seconds=5e-3)
    table.connect(False)
    return table


# A: the integral that the traps stand for is the logarithm, over the whole range.
@pytest.mark.parametrize("lapse", [1e-3, 0.1, 1.0, 30.0, 1e4, 1e8, 1e12])
def test_traps_follow_log_time(lapse: float) -> None:
    traps = Traps(ImprintGrowth(volts_per_decade=1.0, onset_seconds=1e-2))
    traps.hold(lapse * 1e-2, 1.0)
    assert -traps.shift_volts() == pytest.approx(math.log10(1 + lapse), rel=1e-6, abs=1e-7)


# A: exponentials forget how a time was cut.
def test_traps_do_not_see_how_time_is_cut() -> None:
    whole, pieces = (Traps(ImprintGrowth(volts_per_decade=1.0)) for _ in range(2))
    whole.hold(1e5, -1.0)
    for _ in range(100):
        pieces.hold(1e3, -1.0)
    assert pieces.shift_volts() == pytest.approx(whole.shift_volts(), rel=1e-12)


# A: exp(-s T)-weighted traps turned back for t leave log10(1 + (T + t)/t0) less twice
# log10(1 + t/t0): the fast ones have turned, the slow ones still remember.
def test_imprint_fades_gradually_in_the_other_state() -> None:
    traps = Traps(ImprintGrowth(volts_per_decade=1.0))
    traps.hold(1e6, 1.0)
    for seconds, since in ((1.0, 1.0), (9.0, 10.0), (1e3, 1.01e3)):
        traps.hold(seconds, -1.0)
        expected = math.log10(1 + 1e6 + since) - 2 * math.log10(1 + since)
        assert -traps.shift_volts() == pytest.approx(expected, rel=1e-6)


# A: log10(1 + t/t0) volts per decade: the held state is harder to leave.
@pytest.mark.parametrize(("level_volts", "side"), [(8.0, -1), (-8.0, 1)])
def test_the_held_state_draws_the_imprint_voltage_away(level_volts: float, side: int) -> None:
    growth = ImprintGrowth(volts_per_decade=0.05, onset_seconds=10.0)
    table = connected(CellDescription(imprint_growth=growth))
    pulse(table, level_volts, 2e-3)
    table.connect(False)
    for lapse_seconds in (90.0, 1e8):
        began = table.now
        table.advance(lapse_seconds)
        assert table.now == pytest.approx(began + lapse_seconds, rel=1e-12)
        expected = side * growth.shift_volts(table.now)
        assert table.imprint_volts == pytest.approx(expected, abs=2e-4)


def test_an_imprinted_cell_is_slower_to_leave_its_state() -> None:
    found = []
    for growth in (None, ImprintGrowth(volts_per_decade=0.05)):
        table = connected(CellDescription(imprint_growth=growth))
        preset(table)
        table.connect(False)
        table.advance(30 * DAY_SECONDS)
        table.connect(True)
        for _ in range(5):
            up(table)
        found.append(table.up_fraction)
    assert found[1] < 0.9 * found[0]


# A: exp(-(N/N0)^m); at N0 that is 0.367879, printed to six digits.
def test_switched_polarization_falls_with_cycles() -> None:
    fatigue = Fatigue(scale_cycles=40.0, exponent=0.3)
    table = connected(CellDescription(fatigue=fatigue, regions=8), Wiring(series_ohms=10e3))
    pulse(table, -8.0, 1e-4, rest_seconds=1e-4)
    for cycle in range(1, 41):
        pulse(table, 8.0, 1e-4, rest_seconds=1e-4)
        pulse(table, -8.0, 1e-4, rest_seconds=1e-4)
        assert table.cycles == pytest.approx(cycle, abs=1e-3)
        expected = 0.25 * math.exp(-((cycle / 40) ** 0.3))
        assert table.remanent_polarization == pytest.approx(expected, rel=1e-4)
    assert -table.polarization / 0.25 == pytest.approx(0.367879, abs=2e-5)


def test_a_strong_preset_brings_back_its_share() -> None:
    fatigue = Fatigue(scale_cycles=100.0, recovered_share=0.5, recovery_volts=6.0)
    table = connected(CellDescription(fatigue=fatigue, regions=8))
    preset(table)
    pulse(table, 8.0, 2e-3)
    preset(table)
    worn = table.remanent_polarization
    assert worn < 0.24
    preset(table)
    assert table.remanent_polarization == worn
    # One flat top is one recovery, however it is cut into pieces.
    table.rest_at(-8.0)
    for _ in range(4):
        table.advance(1e-3)
    assert 0.25 - table.remanent_polarization == pytest.approx(0.5 * (0.25 - worn), rel=1e-6)
    table.rest_at(0.0)
    table.advance(1e-2)
    table.rest_at(-8.0)
    table.advance(1e-3)
    assert 0.25 - table.remanent_polarization == pytest.approx(0.25 * (0.25 - worn), rel=1e-6)


# Fatigue, wear before, pairs. One by one is the reference.
WEARING = [
    (Fatigue(scale_cycles=1e5, recovered_share=1e-6), 0.0, 30_000),
    (Fatigue(scale_cycles=400.0, recovered_share=0.01), 0.0, 20),
    (Fatigue(scale_cycles=400.0, recovered_share=0.01), 0.0, 20_000),
    (Fatigue(scale_cycles=1e4, recovered_share=0.5), 1e6, 2000),
    (Fatigue(scale_cycles=100.0, recovered_share=1e-3), 1e7, 30_000),
    (Fatigue(scale_cycles=1e4, exponent=2.0, recovered_share=1e-3), 0.0, 30_000),
]


@pytest.mark.parametrize(("fatigue", "worn_cycles", "pairs"), WEARING)
def test_wear_and_recovery_at_once_are_as_good_as_in_turn(
    fatigue: Fatigue, worn_cycles: float, pairs: int
) -> None:
    expected = worn_cycles
    for _ in range(pairs):
        expected = fatigue.recovered(expected + 0.25) + 0.25
    assert worn_after(fatigue, worn_cycles, 0.5, pairs) == pytest.approx(expected, rel=1e-4)


# A: of a loss in proportion to the cycles, N/scale, each pair adds 1 and takes share N away:
# (1 - exp(-share pairs))/share, where a pair is a small part of that.
@pytest.mark.parametrize("pairs", [10**6, 10**9, 10**10, 10**12])
def test_wear_goes_on_however_often_a_cell_recovers(pairs: int) -> None:
    fatigue = Fatigue(scale_cycles=1e14, exponent=1.0, recovered_share=1e-9, recovery_volts=4.0)
    expected = -math.expm1(-1e-9 * pairs) * 1e9
    assert worn_after(fatigue, 0.0, 1.0, pairs) == pytest.approx(expected, rel=1e-4)
    none = replace(fatigue, recovered_share=0.0)
    assert worn_after(none, 0.0, 1.0, pairs) == pairs


# A: P_0 (1 - 0.02 log10(t/1 s)); 1 s to 10 years, printed to six digits.
def test_an_up_cell_loses_polarization_with_log_time() -> None:
    table = written_up(retention=Retention(loss_per_decade=0.02))
    start = table.polarization
    assert start == pytest.approx(0.25, rel=1e-6)
    table.advance(1e-3)
    assert table.polarization == start
    # In two parts, as nothing may depend on how the wait is cut.
    table.advance(1e5)
    table.advance(3.15576e8 - 1e5)
    assert table.polarization / start == pytest.approx(0.830018, abs=2e-6)


# A: exp(-(t/t0)^b).
def test_an_up_cell_loses_polarization_as_a_stretched_exponential() -> None:
    table = written_up(retention=Retention(law="stretched", onset_seconds=1e6, exponent=0.4))
    start = table.polarization
    for total_seconds in (1e4, 1e6):
        table.advance(total_seconds - (table.now - 7e-3))
        expected = math.exp(-((total_seconds / 1e6) ** 0.4))
        assert table.polarization / start == pytest.approx(expected, rel=5e-4)


def test_the_other_state_is_kept() -> None:
    cases: list[tuple[Literal[1, -1], float]] = [(1, -8.0), (-1, 8.0)]
    for side, level_volts in cases:
        table = connected(CellDescription(retention=Retention(side=side)))
        pulse(table, level_volts, 2e-3)
        before = table.polarization
        table.advance(1e8)
        assert table.polarization == pytest.approx(before, rel=1e-9)


def test_a_stored_count_fades() -> None:
    def pulses_left(wait_seconds: float) -> int:
        table = connected(CellDescription(retention=Retention(loss_per_decade=0.05)))
        preset(table)
        for _ in range(6):
            up(table)
        table.advance(wait_seconds)
        return next(count for count in range(1, 30) if up(table) > 2.5)

    assert pulses_left(0.0) == 3
    assert pulses_left(1e8) > 3


# A: 0.7 eV from 55 to 125 degrees Celsius is 77.645 times as fast.
def test_retention_and_imprint_run_faster_when_hot() -> None:
    thermal = Thermal(kelvin=398.15, reference_kelvin=328.15, activation_per_kelvin=0.0)
    retention = Retention(law="stretched", onset_seconds=1e6, activation_ev=0.7)
    growth = ImprintGrowth(volts_per_decade=0.05, activation_ev=0.7)
    hot = written_up(retention=retention, imprint_growth=growth, thermal=thermal)
    cold = written_up(
        retention=retention, imprint_growth=growth, thermal=replace(thermal, kelvin=328.15)
    )
    hot.advance(1e5)
    cold.advance(77.645 * 1e5)
    assert hot.polarization == pytest.approx(cold.polarization, rel=1e-5)
    assert hot.imprint_volts == pytest.approx(cold.imprint_volts, rel=1e-4)
    # Cooled down, it goes on slowly.
    hot.set_kelvin(328.15)
    before = hot.polarization
    hot.advance(1e3)
    assert hot.polarization == pytest.approx(before, rel=1e-4)


# A: with activation voltages 20 % lower, 3.2 V switches as 4 V does.
def test_activation_voltages_fall_with_temperature() -> None:
    stiff = Wiring(source_ohms=1e-3, series_ohms=0, probe_ohms=math.inf, probe_farads=0)
    found = []
    for kelvin, level_volts in ((300.0, 4.0), (400.0, 3.2)):
        cell = CellDescription(
            thermal=Thermal(kelvin=kelvin, reference_kelvin=300.0, activation_per_kelvin=-2e-3),
            remanent_polarization=1e-9,
            relative_permittivity=1.0,
        )
        table = connected(cell, stiff)
        table.rest_at(level_volts)
        table.advance(1e-6)
        found.append(table.up_fraction)
    assert 0.2 < found[0] < 0.8
    assert found[1] == pytest.approx(found[0], abs=1e-6)


def test_only_a_cell_that_knows_temperatures_is_heated() -> None:
    table = connected(CellDescription())
    assert table.kelvin is None
    with pytest.raises(ValueError, match="describe it with a Thermal"):
        table.set_kelvin(300.0)
    table = connected(CellDescription(thermal=Thermal()))
    assert table.kelvin == 298.15
    with pytest.raises(ValueError, match=r"kelvin is 0\.0; it must be above 0"):
        table.set_kelvin(0.0)


def test_a_worn_out_cell_becomes_a_short() -> None:
    breakdown = Breakdown(scale_cycles=3.0, shape=100.0, short_ohms=50.0)
    table = connected(CellDescription(breakdown=breakdown))
    while not table.broken:
        assert table.node_volts == pytest.approx(0.0, abs=0.1)
        preset(table)
        pulse(table, 8.0, 2e-3)
        assert table.cycles < 4
    # A: a shape of 100 leaves nothing to chance: 3 cycles to within a few per cent.
    assert table.cycles == pytest.approx(3.0, abs=0.6)
    # A: 4 V over 220 050 Ohm and 50 Ohm in parallel with 10 MOhm.
    shunt = 1 / (1 / 50 + 1e-7)
    assert up(table) == pytest.approx(4 * shunt / (220050 + shunt), rel=1e-6)


# A: the distribution function at its own draws is uniform; over 200 seeds its mean is 1/2
# with a standard error of 0.0204.
def test_breakdowns_are_drawn_from_a_weibull_distribution() -> None:
    breakdown = Breakdown(scale_cycles=1e8, shape=2.0)
    lives = []
    for seed in range(200):
        table = Table(CellDescription(breakdown=breakdown), Wiring(), seed=seed)
        lives.append(table.breakdown_cycles)
    failed = 1 - np.exp(-((np.array(lives) / 1e8) ** 2))
    assert failed.mean() == pytest.approx(0.5, abs=3 * 0.0204)
    assert failed.std() == pytest.approx(1 / math.sqrt(12), rel=0.1)
    again = Table(CellDescription(breakdown=breakdown), Wiring(), seed=3)
    assert again.breakdown_cycles == lives[3]
