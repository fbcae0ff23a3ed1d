"""The simulated table as the instruments use it: counting, charge, relay, time."""

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators.cell import DEFAULT_DOMAINS, CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.table import Table

Array = NDArray[np.float64]

THRESHOLD_VOLTS = 2.5
PRESET_VOLTS, PRESET_SECONDS = -5.0, 2e-3
UP_VOLTS, UP_SECONDS, EDGE_SECONDS, REST_SECONDS = 4.0, 100e-6, 100e-9, 1e-3

# With such barriers nothing switches: a linear capacitor.
LINEAR = CellDescription(activation_volts=1e5, activation_spread=0.0)


class Record:
    """Keeps every sample that a table shows."""

    def __init__(self) -> None:
        self.stretches: list[tuple[Array, Array, Array]] = []

    def saw(self, times: Array, terminal_volts: Array, node_volts: Array) -> None:
        self.stretches.append((times, terminal_volts, node_volts))

    def whole(self) -> tuple[Array, Array, Array]:
        times, terminal, node = zip(*self.stretches, strict=True)
        return np.concatenate(times), np.concatenate(terminal), np.concatenate(node)

    def charge(self, series_ohms: float) -> float:
        """Integrate the current through the series resistance by trapezoids, C."""
        times, terminal, node = self.whole()
        return float(np.trapezoid((terminal - node) / series_ohms, times))


def connected(
    cell: CellDescription | None = None, wiring: Wiring | None = None, *, seed: int = 1
) -> Table:
    table = Table(cell or CellDescription(), wiring or Wiring(), seed=seed)
    table.connect(True)
    return table


def pulse(
    table: Table,
    volts: float,
    seconds: float,
    *,
    edge_seconds: float = EDGE_SECONDS,
    rest_seconds: float = REST_SECONDS,
) -> float:
    """Play one pulse and rest after it; return the end voltage, V."""
    train = PulseTrain(
        level_volts=volts,
        width_seconds=seconds,
        leading_seconds=edge_seconds,
        trailing_seconds=edge_seconds,
        period_seconds=seconds + rest_seconds,
        start_seconds=table.now,
    )
    table.play(train)
    # The leading ramp is 1.25 edges long; half of it comes before the width begins.
    table.advance(seconds)
    end_volts = table.node_volts
    table.advance(rest_seconds)
    return end_volts


def preset(table: Table) -> None:
    pulse(table, PRESET_VOLTS, PRESET_SECONDS)


def up(table: Table) -> float:
    return pulse(table, UP_VOLTS, UP_SECONDS)


def crossing(table: Table, *, most: int = 30) -> float:
    """Pulse until the threshold is passed; return the crossing, in pulses."""
    before = -math.inf
    for count in range(1, most):
        end_volts = up(table)
        if end_volts > THRESHOLD_VOLTS:
            if math.isinf(before):
                return 0.0
            return count - 1 + (THRESHOLD_VOLTS - before) / (end_volts - before)
        before = end_volts
    raise AssertionError(f"{most} pulses did not pass the threshold")


def test_default_cell_is_full_after_about_nine_pulses() -> None:
    table = connected()
    preset(table)
    ends = [up(table) for _ in range(12)]
    assert np.all(np.diff(ends) > 0)
    assert 8 <= crossing_of(ends) <= 10


def crossing_of(ends: list[float]) -> int:
    """Return which pulse is the first above the threshold, from 1."""
    return next(k for k, volts in enumerate(ends, 1) if volts > THRESHOLD_VOLTS)


# A: in the noiseless model a pulse before the wait counts as one after it.
@pytest.mark.parametrize("stored", [1, 3, 7])
def test_stored_count_is_exact_without_noise(stored: int) -> None:
    table = connected()
    preset(table)
    full = crossing(table)
    preset(table)
    for _ in range(stored):
        up(table)
    table.connect(False)
    table.advance(1e6)
    table.connect(True)
    assert full - crossing(table) == pytest.approx(stored, abs=1e-4)


# A: pulses add up to their total time, so N = ceil((t0/t_w) (-ln(1 - f))) with t0 the
# region's time constant. Here 1 us and pulses of 50 ns.
@pytest.mark.parametrize(("fraction", "pulses"), [(0.5, 14), (0.9, 47)])
def test_short_pulses_add_up(fraction: float, pulses: int) -> None:
    assert math.ceil(1e-6 / 50e-9 * -math.log(1 - fraction)) == pulses
    cell = CellDescription(
        activation_spread=0.0,
        attempt_seconds=1e-6 * math.exp(-25.0 / 4.0),
        remanent_polarization=1e-9,
        relative_permittivity=1.0,
        regions=1,
    )
    wiring = Wiring(source_ohms=1e-3, series_ohms=0, probe_ohms=math.inf, probe_farads=0)
    table = connected(cell, wiring)
    train = PulseTrain(
        level_volts=4.0,
        width_seconds=50e-9,
        leading_seconds=0,
        trailing_seconds=0,
        period_seconds=200e-9,
        count=pulses,
    )
    table.play(train)
    table.advance((pulses - 1) * 200e-9)
    assert table.up_fraction == pytest.approx(1 - math.exp(-(pulses - 1) * 0.05), abs=1e-6)
    assert table.up_fraction < fraction
    table.advance(200e-9)
    assert table.up_fraction == pytest.approx(1 - math.exp(-pulses * 0.05), abs=1e-6)
    assert table.up_fraction >= fraction


# A: charge of the first pulse less that of the second is the switched charge, 2 P_r A; the
# same for the two pulses back.
def test_first_pulse_carries_the_switched_charge_more_than_the_second() -> None:
    cell, wiring = CellDescription(), Wiring(probe_ohms=math.inf)
    table = connected(cell, wiring)
    record = Record()
    table.observe(record)
    charges = []
    for volts in (8.0, 8.0, -8.0, -8.0):
        record.stretches.clear()
        pulse(table, volts, 2e-3)
        charges.append(record.charge(wiring.series_ohms))
    switched = 2 * 0.25 * 1e-8
    assert charges[0] - charges[1] == pytest.approx(switched, rel=1e-3)
    assert charges[2] - charges[3] == pytest.approx(-switched, rel=1e-3)


# A: for a linear capacitor P - U = 0; each is C V at the end of the flat top.
def test_linear_capacitor_takes_the_same_charge_twice() -> None:
    wiring = Wiring(probe_ohms=math.inf)
    table = connected(LINEAR, wiring)
    record = Record()
    table.observe(record)
    charges = []
    for _ in range(2):
        record.stretches.clear()
        table.play(
            PulseTrain(
                level_volts=5.0, width_seconds=2e-3, period_seconds=4e-3, start_seconds=table.now
            )
        )
        table.advance(2e-3)
        charges.append(record.charge(wiring.series_ohms))
        table.advance(2e-3)
    farads = 8.8541878128e-12 * 500 * 1e-8 / 150e-9 + 12e-12
    assert charges[0] == pytest.approx(5 * farads, rel=1e-3)
    assert charges[0] - charges[1] == pytest.approx(0, abs=1e-6 * charges[0])


def test_no_charge_is_lost() -> None:
    # What comes through the resistor charges the node, switches the cell or leaves
    # through the probe.
    wiring = Wiring()
    table = connected(wiring=wiring)
    preset(table)
    record = Record()
    table.observe(record)
    polarization, volts = table.polarization, table.node_volts
    for _ in range(12):
        up(table)
    times, _, node = record.whole()
    farads = 8.8541878128e-12 * 500 * 1e-8 / 150e-9 + 12e-12
    kept = farads * (table.node_volts - volts) + 1e-8 * (table.polarization - polarization)
    probe = float(np.trapezoid(node / wiring.probe_ohms, times))
    # Straight lines between samples are up to 20 uV off: about 1 pC over 12 pulses.
    assert record.charge(wiring.series_ohms) == pytest.approx(kept + probe, abs=2e-12)
    assert kept > 4e-9


# A: 6 V behind 50 Ohm and 1 kOhm into 221.354695 pF.
CELL_221 = CellDescription(thickness=200e-9, activation_volts=1e5, activation_spread=0.0)
WIRING_1K = Wiring(series_ohms=1000.0, probe_ohms=math.inf, probe_farads=0.0)
TAU_SECONDS = 1050 * 221.354695e-12


def test_cell_charges_through_the_source() -> None:
    table = connected(CELL_221, WIRING_1K)
    record = Record()
    table.observe(record)
    table.rest_at(6.0)
    table.advance(0.5e-6)
    assert table.node_volts == pytest.approx(5.301972, abs=5e-7)
    table.advance(3.5e-6)
    assert table.node_volts == pytest.approx(5.9999998, abs=5e-8)
    times, _, node = record.whole()
    rise_seconds = np.diff(np.interp([0.6, 5.4], node, times))[0]
    assert rise_seconds == pytest.approx(510.684e-9, abs=0.02e-9)


# A: the energy that charging dissipates in the resistance is C V^2/2, whatever the resistance.
def test_charging_dissipates_what_it_stores() -> None:
    table = connected(CELL_221, WIRING_1K)
    record = Record()
    table.observe(record)
    table.rest_at(6.0)
    table.advance(20 * TAU_SECONDS)
    times, terminal, node = record.whole()
    power = ((terminal - node) / 1000.0) ** 2 * 1050.0
    assert np.trapezoid(power, times) == pytest.approx(0.5 * 221.354695e-12 * 36, rel=1e-3)


# A: width at half of the drive's amplitude of a rectangular pulse behind RC, and its peak.
WIDTHS = [(1, 0.5413249, 0.6321206), (2, 1.8545865, 0.8646647), (5, 4.9932393, 0.9932621)]


@pytest.mark.parametrize(("width", "at_half", "peak"), WIDTHS)
def test_resistance_narrows_a_pulse(width: float, at_half: float, peak: float) -> None:
    table = connected(CELL_221, WIRING_1K)
    record = Record()
    table.observe(record)
    end_volts = pulse(
        table,
        6.0,
        width * TAU_SECONDS,
        edge_seconds=0.0,
        rest_seconds=12 * TAU_SECONDS,
    )
    assert end_volts / 6 == pytest.approx(peak, abs=1e-7)
    times, _, node = record.whole()
    top = int(node.argmax())
    rising = np.interp(3.0, node[: top + 1], times[: top + 1])
    falling = np.interp(-3.0, -node[top:], times[top:])
    # Straight lines between samples are 20 uV off, which is 1e-5 tau at this slope.
    assert (falling - rising) / TAU_SECONDS == pytest.approx(at_half, abs=2e-5)


# A: 2 V behind 50 Ohm into 50 Ohm and into 1 MOhm.
@pytest.mark.parametrize(("load_ohms", "volts"), [(50.0, 1.0), (1e6, 1.999900005)])
def test_divider_settles(load_ohms: float, volts: float) -> None:
    table = connected(LINEAR, Wiring(series_ohms=0.0, probe_ohms=load_ohms))
    table.rest_at(2.0)
    table.advance(1e-3)
    assert table.node_volts == pytest.approx(volts, abs=1e-9)
    assert table.terminal_volts == pytest.approx(volts, abs=1e-9)


# A: Shockley's diode behind 1 kOhm, by the logarithm (1 mA) and by Lambert's W (5 V).
DIODES = [(1.0 + 0.6551181180, 0.6551181180, 1e-3), (5.0, 0.6928878324, 4.3071121676e-3)]


@pytest.mark.parametrize(("emf_volts", "drop_volts", "amperes"), DIODES)
def test_diode_drops_its_voltage_at_rest(
    emf_volts: float, drop_volts: float, amperes: float
) -> None:
    # The leak is so small a resistance that the node stays at 0 V but for a microvolt, which
    # the EMF has on top.
    leak_ohms = 1e-3
    emf_volts += leak_ohms * amperes
    wiring = Wiring(source_ohms=50, series_ohms=950, diode_saturation_amperes=1e-14)
    table = connected(
        CellDescription(activation_volts=1e5, activation_spread=0.0, leak_ohms=leak_ohms), wiring
    )
    table.rest_at(emf_volts)
    table.advance(1e-3)
    assert (emf_volts - table.terminal_volts) / 50 == pytest.approx(amperes, rel=1e-7)
    drop = table.terminal_volts - 950 * amperes - table.node_volts
    assert drop == pytest.approx(drop_volts, abs=1e-6)


def test_clamp_holds_the_node_in_both_directions() -> None:
    table = connected(LINEAR, Wiring(clamp_volts=3.0, probe_ohms=math.inf))
    for volts in (8.0, -8.0):
        table.rest_at(volts)
        table.advance(5e-3)
        amperes = (8.0 - abs(table.node_volts)) / 220050.0
        # A: the clamp carries 10 uA at 3 V, e times more for every 25 mV.
        assert abs(table.node_volts) == pytest.approx(
            3.0 + 0.025 * math.log(amperes / 10e-6), abs=1e-6
        )


def test_relay_isolates_the_cell() -> None:
    table = connected()
    preset(table)
    table.connect(False)
    before = table.up_fraction
    for _ in range(3):
        # What is left is what the preset's own rest left: 5 V exp(-15).
        assert up(table) == pytest.approx(0.0, abs=3e-6)
        assert table.terminal_volts == table.node_volts
    assert table.up_fraction == before
    assert table.delivered == 1


def test_floating_node_discharges_through_the_probe() -> None:
    wiring = Wiring()
    table = connected(LINEAR, wiring)
    table.rest_at(2.0)
    table.advance(1e-2)
    table.connect(False)
    start_volts = table.node_volts
    farads = 8.8541878128e-12 * 500 * 1e-8 / 150e-9 + 12e-12
    tau_seconds = 10e6 * farads
    table.advance(tau_seconds)
    assert table.node_volts == pytest.approx(start_volts / math.e, rel=1e-9)
    assert table.terminal_volts == table.node_volts
    table.advance(4 * tau_seconds)
    assert table.node_volts == pytest.approx(start_volts * math.exp(-5), rel=1e-9)


def test_a_long_idle_time_takes_few_samples() -> None:
    table = connected()
    preset(table)
    up(table)
    table.rest_at(2.0)
    table.advance(1e-4)
    table.connect(False)
    record = Record()
    table.observe(record)
    table.advance(1e6)
    times, _, node = record.whole()
    assert len(times) < 1000
    assert table.now == times[-1]
    assert abs(node[-1]) < 1e-12


def test_an_unconnected_node_without_probe_keeps_its_voltage() -> None:
    table = connected(LINEAR, Wiring(probe_ohms=math.inf))
    table.rest_at(1.0)
    table.advance(1e-2)
    table.connect(False)
    table.advance(1e6)
    assert table.node_volts == pytest.approx(1.0, abs=1e-9)


def test_a_train_of_three_equals_three_single_trains() -> None:
    def settled() -> Table:
        table = connected()
        preset(table)
        return table

    whole, singly = settled(), settled()
    period = UP_SECONDS + REST_SECONDS
    train = PulseTrain(
        level_volts=UP_VOLTS,
        width_seconds=UP_SECONDS,
        period_seconds=period,
        count=3,
        start_seconds=whole.now,
    )
    whole.play(train)
    whole.advance(3 * period)
    for _ in range(3):
        up(singly)
    assert whole.up_fraction == pytest.approx(singly.up_fraction, abs=1e-6)
    assert whole.node_volts == pytest.approx(singly.node_volts, abs=1e-9)
    assert whole.delivered == singly.delivered == 4


def test_time_may_pass_in_any_portions() -> None:
    at_once, bit_by_bit = connected(), connected()
    for table in (at_once, bit_by_bit):
        preset(table)
        table.play(
            PulseTrain(
                level_volts=4, width_seconds=1e-4, period_seconds=3e-4, start_seconds=table.now
            )
        )
    at_once.advance(3e-4)
    for _ in range(100):
        bit_by_bit.advance(3e-6)
    assert bit_by_bit.now == pytest.approx(at_once.now, abs=1e-15)
    assert bit_by_bit.node_volts == pytest.approx(at_once.node_volts, abs=2e-5)
    assert bit_by_bit.up_fraction == pytest.approx(at_once.up_fraction, abs=2e-6)


def test_observers_see_time_without_gaps_and_jumps_of_the_terminal() -> None:
    table = connected()
    record = Record()
    table.observe(record)
    up(table)
    table.connect(False)
    table.advance(1e-6)
    table.connect(True)
    table.rest_at(2.0)
    table.advance(1e-6)
    for times, terminal, node in record.stretches:
        assert times.dtype == terminal.dtype == node.dtype == np.float64
        assert times.shape == terminal.shape == node.shape
        assert np.all(np.diff(times) > 0)
    for before, after in zip(record.stretches, record.stretches[1:], strict=False):
        assert after[0][0] == before[0][-1]
        assert after[2][0] == before[2][-1]
    last = record.stretches[-1]
    # A: 2 V at the EMF, 50 Ohm of 220 050 Ohm before the terminal, the node near 0 V.
    assert last[1][0] == pytest.approx(2 - 50 / 220050 * (2 - last[2][0]), abs=1e-12)
    assert record.stretches[-2][1][-1] == record.stretches[-2][2][-1]


def test_late_in_virtual_time_samples_still_rise() -> None:
    table = connected()
    table.advance(3e7)
    record = Record()
    table.observe(record)
    preset(table)
    up(table)
    assert all(np.all(np.diff(times) > 0) for times, _, _ in record.stretches)
    assert record.stretches[-1][0][-1] == table.now
    assert table.delivered == 2


def test_late_in_virtual_time_no_stretch_ends_early() -> None:
    # The last samples of a stretch may fall on one and the same instant there.
    table = connected(wiring=Wiring(series_ohms=1000.0, clamp_volts=3.0))
    table.advance(5.7e7)
    record = Record()
    table.observe(record)
    for step in range(12):
        pulse(table, 6.0, 1.3e-6 + 1e-7 * step, rest_seconds=1.7e-6)
    for before, after in zip(record.stretches, record.stretches[1:], strict=False):
        assert after[0][0] == before[0][-1]


def test_only_whole_pulses_of_some_amplitude_are_delivered() -> None:
    table = Table(CellDescription(), Wiring())
    train = PulseTrain(level_volts=1, width_seconds=1e-5, period_seconds=1e-4, count=10)
    table.play(train)
    table.advance(1.5e-4)  # two pulses with the relay off
    table.connect(True)
    table.advance(1e-4)  # the third
    assert table.delivered == 1
    table.advance(0.55e-4)  # into the fourth
    table.connect(False)
    table.connect(True)
    table.advance(0.5e-4)
    assert table.delivered == 1
    table.advance(1e-4)  # the fifth
    assert table.delivered == 2
    table.advance(0.5e-4)
    table.stop_drive()
    table.advance(1e-3)
    assert table.delivered == 2
    table.play(replace(train, level_volts=0, start_seconds=table.now))
    table.advance(1e-3)
    assert table.delivered == 2


def test_stopping_lets_the_emf_fall_to_its_base() -> None:
    table = connected(LINEAR)
    train = PulseTrain(
        base_volts=0.5, level_volts=4.0, width_seconds=1.0, period_seconds=2.0, start_seconds=1e-3
    )
    table.play(train)
    table.advance(1e-3)
    assert table.node_volts == pytest.approx(0.5, abs=0.02)
    table.advance(0.5)
    assert table.node_volts == pytest.approx(4.0, abs=0.1)
    table.stop_drive()
    table.advance(0.01)
    assert table.node_volts == pytest.approx(0.5, abs=0.02)


def test_a_train_in_the_past_is_refused() -> None:
    table = connected()
    table.advance(1.0)
    with pytest.raises(ValueError, match=r"starts at 0\.5 s, which is before now, 1\.0 s"):
        table.play(
            PulseTrain(level_volts=1, width_seconds=1e-5, period_seconds=1, start_seconds=0.5)
        )


@pytest.mark.parametrize("seconds", [-1.0, math.inf, math.nan])
def test_time_passes_forwards_only(seconds: float) -> None:
    with pytest.raises(ValueError, match="time passes forwards"):
        connected().advance(seconds)


def full_counts(rounds: int, *, domains: int | None, seed: int) -> list[float]:
    table = connected(CellDescription(domains=domains), seed=seed)
    found = []
    for _ in range(rounds):
        preset(table)
        found.append(crossing(table))
    return found


def test_scatter_repeats_with_its_seed_only() -> None:
    first = full_counts(3, domains=DEFAULT_DOMAINS, seed=5)
    assert full_counts(3, domains=DEFAULT_DOMAINS, seed=5) == first
    assert full_counts(3, domains=DEFAULT_DOMAINS, seed=6) != first
    assert len(set(first)) == 3


def test_without_domains_every_round_counts_the_same() -> None:
    first, second = full_counts(2, domains=None, seed=1)
    assert first == pytest.approx(second, abs=1e-4)


def test_default_domains_scatter_by_a_quarter_of_a_pulse() -> None:
    counts = full_counts(40, domains=DEFAULT_DOMAINS, seed=2)
    # The standard deviation of 40 normal values is itself uncertain by 11 %.
    assert np.std(counts, ddof=1) == pytest.approx(0.25, abs=3 * 0.25 * 0.11)
    assert np.mean(counts) == pytest.approx(full_counts(1, domains=None, seed=1)[0], abs=0.15)
