"""Charge and four pulses (PUND): linear capacitors in closed form, and the simulated cell."""

import numpy as np
import pytest

from pulsetally.sequencer.analysis.pulses import Samples
from pulsetally.sequencer.analysis.switching import (
    ChargeMoved,
    PundResult,
    SwitchingUnclear,
    cell_charge,
    charge_moved,
    charge_noise,
    pund_of,
)
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from tests.sequencer.analysis.switching_records import (
    BEFORE,
    PROBE_FARADS,
    PROBE_OHMS,
    SERIES_OHMS,
    Record,
    four_pulses,
    seen_by,
)

FARADS = 300e-12
TIMES = np.linspace(-1e-3, 6e-3, 14_001)


def linear(volts: float, width: float, *, leak_ohms: float = np.inf) -> Record:
    """Return a pulse on a linear capacitor: the node is chosen, the source follows from it.

    Closed form: source = v + R ((C + C_probe) dv/dt + v/R_probe + v/R_leak).
    """
    rise, fall = 100e-6, 120e-6
    begin, end = TIMES / rise, (TIMES - width) / fall
    node = volts * 0.5 * (np.tanh(begin - 5) - np.tanh(end - 5))
    slope = volts * 0.5 * (np.cosh(begin - 5) ** -2 / rise - np.cosh(end - 5) ** -2 / fall)
    current = (FARADS + PROBE_FARADS) * slope + node / PROBE_OHMS + node / leak_ohms
    return TIMES, node + SERIES_OHMS * current, node


def charge_of(record: Record, *, before: float = -0.5e-3) -> Samples:
    return cell_charge(
        *record,
        series_ohms=SERIES_OHMS,
        probe_ohms=PROBE_OHMS,
        probe_farads=PROBE_FARADS,
        before=before,
    )


def moved(
    record: Record, *, before: float = -0.5e-3, steps: tuple[float, float] | None = None
) -> ChargeMoved:
    return charge_moved(
        *record,
        series_ohms=SERIES_OHMS,
        probe_ohms=PROBE_OHMS,
        probe_farads=PROBE_FARADS,
        before=before,
        steps=steps,
    )


def pund(
    records: list[Record], *, before: float = -0.5e-3, steps: tuple[float, float] | None = None
) -> PundResult:
    p, u, n, d = (moved(record, before=before, steps=steps) for record in records)
    return pund_of(p, u, n, d)


# Closed form: Q = C v, whatever the channels' offsets; the tolerance is the trapezoid rule's.
@pytest.mark.parametrize("offsets", [(0.0, 0.0), (5e-3, -7e-3)])
def test_the_charge_of_a_linear_capacitor_is_its_capacitance_times_voltage(
    offsets: tuple[float, float],
) -> None:
    record = linear(5.0, 2e-3)
    shifted = record[0], record[1] + offsets[0], record[2] + offsets[1]
    expected = FARADS * (record[2] - record[2][0])
    assert charge_of(shifted) == pytest.approx(expected, abs=1e-4 * FARADS * 5)


def test_samples_need_not_be_evenly_spaced() -> None:
    times, source, node = linear(5.0, 2e-3)
    kept = np.sort(np.random.default_rng(4).choice(times.size, times.size // 2, replace=False))
    expected = FARADS * (node - node[0])[kept]
    found = charge_of((times[kept], source[kept], node[kept]))
    assert found == pytest.approx(expected, abs=1e-3 * FARADS * 5)


def test_a_linear_capacitor_switches_nothing() -> None:
    # Closed form: equal pulses cancel exactly, unlike ones to the trapezoid rule's error.
    up, down = linear(5.0, 2e-3), linear(-5.0, 2e-3)
    equal = pund([up, up, down, down])
    assert (equal.switched, equal.asymmetry) == (0.0, 0.0)
    unlike = pund([linear(5.0, 1e-3), up, linear(-3.0, 1.5e-3), down])
    assert unlike.switched == pytest.approx(0, abs=1e-6 * FARADS * 5)
    # The same holds at the top only where the node got equally far: there it would be 0.5 nC.
    tops = [float(np.max(charge_of(record))) for record in (linear(5.0, 1e-3), linear(3.4, 2e-3))]
    assert tops[0] - tops[1] > 0.4e-9


def test_leakage_drops_out_and_is_told() -> None:
    # Closed form: a resistance takes the node's volt-seconds over its ohms.
    pulses = [(5.0, 1.6e-3), (5.0, 2e-3), (-5.0, 1.6e-3), (-5.0, 2e-3)]
    leaky = [linear(level, width, leak_ohms=2e6) for level, width in pulses]
    found = pund(leaky)
    assert found.leakage_siemens == pytest.approx(1 / 2e6, rel=1e-4)
    taken = moved(leaky[1]).coulombs
    assert taken > 3e-9
    assert abs(found.switched_up) < 1e-4 * taken
    assert abs(found.switched_down) < 1e-4 * taken


# 2 P_r A is what the simulated cell is described with; not all of it must switch in 2 ms.
@pytest.mark.parametrize("leak_ohms", [np.inf, 2e6])
def test_four_pulses_find_the_remanent_charge_of_the_simulated_cell(leak_ohms: float) -> None:
    cell = CellDescription(leak_ohms=leak_ohms)
    found = pund(four_pulses(cell), before=BEFORE)
    assert found.switched == pytest.approx(cell.switchable_coulombs, rel=0.002)
    assert abs(found.asymmetry) < 0.002 * cell.switchable_coulombs
    assert found.leakage_siemens == pytest.approx(1 / leak_ohms, abs=1e-8)


def test_a_charge_behind_a_diode_is_unclear_where_up_and_down_contradict_each_other() -> None:
    # The diode's own voltage counts as the series resistor's: the computed currents are wrong.
    diode = Wiring(diode_saturation_amperes=3e-6, diode_emission=1.05)
    with pytest.raises(
        SwitchingUnclear, match=r"contradict each other: P - U is 4\.\d+ nC, D - N 2"
    ):
        pund(four_pulses(CellDescription(), diode), before=BEFORE)


def test_up_and_down_may_differ_by_what_noise_explains() -> None:
    def told(coulombs: float, sign: int, sure: float) -> ChargeMoved:
        return ChargeMoved(coulombs=coulombs, volt_seconds=sign * 1e-2, uncertainty=sure)

    # Invented: 1 and 2 pC switched; uncertainties of 1 pC hide that, of 0.01 pC don't.
    charges = ((1e-12, 1), (0.0, 1), (-2e-12, -1), (0.0, -1))
    noisy = pund_of(*(told(charge, sign, 1e-12) for charge, sign in charges))
    assert noisy.switched == pytest.approx(1.5e-12)
    with pytest.raises(SwitchingUnclear, match="contradict"):
        pund_of(*(told(charge, sign, 1e-14) for charge, sign in charges))


def test_imprint_leaves_the_switched_charge_alone() -> None:
    cell = CellDescription(imprint_volts=0.4)
    found = pund(four_pulses(cell), before=BEFORE)
    assert found.switched == pytest.approx(cell.switchable_coulombs, rel=0.002)


# Steps of 8 bits over 10 V, blurred by noise or not.
@pytest.mark.parametrize(("noise", "step"), [(10e-3, 0.0), (20e-3, 0.04), (4e-3, 0.04)])
def test_the_uncertainty_of_four_pulses_covers(noise: float, step: float) -> None:
    cell = CellDescription()
    records = four_pulses(cell)
    random = np.random.default_rng(11)
    errors = []
    for _ in range(16):
        offsets = random.normal(0, 5e-3), random.normal(0, 5e-3)
        spoiled = [
            seen_by(record, random, noise=noise, step=step, offsets=offsets) for record in records
        ]
        found = pund(spoiled, before=BEFORE, steps=(step, step))
        assert found.uncertainty < 0.05 * cell.switchable_coulombs
        errors.append((found.switched - cell.switchable_coulombs) / found.uncertainty)
    assert np.count_nonzero(np.abs(errors) < 2) >= 14
    assert np.max(np.abs(errors)) < 4


def test_alike_noise_of_neighbouring_samples_counts_for_more() -> None:
    random = np.random.default_rng(2)
    times, source, node = linear(5.0, 2e-3)
    white = 1e-2 * random.standard_normal(times.size)
    slow = np.convolve(white, np.ones(20) / np.sqrt(20), mode="same")
    found = [
        charge_noise(
            times,
            source + noise,
            node,
            series_ohms=SERIES_OHMS,
            probe_ohms=PROBE_OHMS,
            before=-0.1e-3,
        ).random
        for noise in (white, slow)
    ]
    # Closed form: s sqrt(dt)/R for white noise; twenty alike samples make sqrt(20) of it.
    assert found[0] == pytest.approx(1e-2 * np.sqrt(0.5e-6) / SERIES_OHMS, rel=0.5)
    assert found[1] == pytest.approx(np.sqrt(20) * found[0], rel=0.7)


def test_a_known_step_of_the_digitizer_is_used() -> None:
    noise = [
        charge_noise(
            *seen_by(linear(5.0, 2e-3), np.random.default_rng(3), step=0.04),
            series_ohms=SERIES_OHMS,
            probe_ohms=PROBE_OHMS,
            before=-0.5e-3,
            steps=steps,
        )
        for steps in (None, (0.04, 0.04), (0.08, 0.08))
    ]
    assert noise[0].rounding == pytest.approx(noise[1].rounding)
    assert noise[2].rounding == pytest.approx(2 * noise[1].rounding)


def test_a_record_without_a_rest_is_unclear() -> None:
    with pytest.raises(SwitchingUnclear, match=r"0 samples lie before -0\.002 s.*record longer"):
        charge_of(linear(5.0, 2e-3), before=-2e-3)
    with pytest.raises(SwitchingUnclear, match=r"the source moves by .* the pulse begins earlier"):
        charge_of(linear(5.0, 2e-3), before=1.5e-3)
    with pytest.raises(SwitchingUnclear, match=r"no sample lies after"):
        charge_of(linear(5.0, 2e-3), before=1.0)


def test_a_record_that_ends_too_early_is_unclear() -> None:
    record = linear(5.0, 2e-3)
    on_the_pulse = [array[:5000] for array in record]
    with pytest.raises(SwitchingUnclear, match=r"ends before the pulse does"):
        moved((on_the_pulse[0], on_the_pulse[1], on_the_pulse[2]))
    # The source is back, but the node has not followed yet.
    times, source, node = record
    source = np.where(times > 2.5e-3, 0.0, source)
    short = times < 2.7e-3
    with pytest.raises(
        SwitchingUnclear, match=r"the node is .* V from where it rested.*longer rest"
    ):
        moved((times[short], source[short], node[short]))


def test_pulses_in_the_wrong_order_are_refused() -> None:
    up, down = linear(5.0, 2e-3), linear(-5.0, 2e-3)
    with pytest.raises(SwitchingUnclear, match=r"pulse U must go up"):
        pund([up, down, up, down])


def test_what_cannot_be_is_named() -> None:
    times, source, node = linear(5.0, 2e-3)
    with pytest.raises(ValueError, match=r"node_volts has the shape \(7,\), times has \(14001,\)"):
        charge_of((times, source, node[:7]))
    with pytest.raises(ValueError, match=r"times don't rise"):
        charge_of((times[::-1], source, node))
    with pytest.raises(ValueError, match=r"source_volts holds something that is not a finite"):
        charge_of((times, np.where(times > 0, np.nan, source), node))
    with pytest.raises(ValueError, match=r"series_ohms is 0"):
        cell_charge(
            times, source, node, series_ohms=0, probe_ohms=1e7, probe_farads=0, before=-0.5e-3
        )
