"""Hysteresis loops: ideal ones in closed form, and the simulated cell's own polarization."""

import numpy as np
import pytest

from pulsetally.sequencer.analysis.pulses import Samples
from pulsetally.sequencer.analysis.switching import (
    ChargeNoise,
    LoopResult,
    SwitchingUnclear,
    cell_charge,
    charge_noise,
    loop_of,
)
from pulsetally.simulators.cell import CellDescription
from tests.sequencer.analysis.switching_records import (
    BEFORE,
    PROBE_FARADS,
    PROBE_OHMS,
    SERIES_OHMS,
    Record,
    seen_by,
    triangle,
)

VOLTS, SECONDS = 5.0, 20e-3
SATURATED, COERCIVE, FARADS = 2.5e-9, 1.5, 300e-12
NO_NOISE = ChargeNoise(
    random=0, rest_amperes=0, step_amperes=0, step_charge=0, rounding=0, edges=0,
    node_step=0, node_noise=0,
)  # fmt: skip
TIMES = np.linspace(-1e-3, 21e-3, 44_001)
NODE = np.interp(TIMES, [0, SECONDS / 2, SECONDS], [-VOLTS, VOLTS, -VOLTS])
GOING_UP = TIMES < SECONDS / 2


def ideal(*, width: float, imprint: float = 0.0) -> Samples:
    """Return the charge of a loop of tanh branches; of steps where the width is 0.

    Closed form: P_s tanh((v - v_imprint -+ V_c)/width) + C v.
    """
    away = NODE - imprint - np.where(GOING_UP, COERCIVE, -COERCIVE)
    branch = np.sign(away) if width == 0 else np.tanh(away / width)
    return np.asarray(SATURATED * branch + FARADS * NODE)


def loop(charge: Samples, *, node: Samples = NODE, noise: ChargeNoise = NO_NOISE) -> LoopResult:
    return loop_of(TIMES[: node.size], node, charge, before=0.0, noise=noise)


def reduce(record: Record, *, offset_volts: float = 0.0) -> LoopResult:
    charge = cell_charge(
        *record,
        series_ohms=SERIES_OHMS,
        probe_ohms=PROBE_OHMS,
        probe_farads=PROBE_FARADS,
        before=BEFORE,
    )
    noise = charge_noise(*record, series_ohms=SERIES_OHMS, probe_ohms=PROBE_OHMS, before=BEFORE)
    times, _, node = record
    return loop_of(times, node, charge, before=BEFORE, noise=noise, offset_volts=offset_volts)


@pytest.mark.parametrize("imprint", [0.0, 0.3])
@pytest.mark.parametrize("width", [0.0, 0.2, 0.4])
def test_an_ideal_loop_gives_back_what_it_was_made_of(width: float, imprint: float) -> None:
    found = loop(ideal(width=width, imprint=imprint))
    tanh = (lambda volts: 1.0) if width == 0 else (lambda volts: np.tanh(volts / width))
    remanent = SATURATED * (tanh(COERCIVE - imprint) + tanh(COERCIVE + imprint)) / 2
    assert found.remanent_coulombs == pytest.approx(remanent, rel=1e-3)
    assert found.coercive_up_volts == pytest.approx(COERCIVE + imprint, rel=1e-3)
    assert found.coercive_down_volts == pytest.approx(imprint - COERCIVE, rel=1e-3)
    assert found.imprint_volts == pytest.approx(imprint, abs=1e-3)
    assert found.linear_farads == pytest.approx(FARADS, rel=0.02)
    assert abs(found.drift_coulombs) < 1e-3 * SATURATED


def test_the_loop_that_comes_back_is_centred() -> None:
    found = loop(ideal(width=0.2) + 7e-9)
    assert found.coulombs.max() == pytest.approx(-found.coulombs.min(), rel=1e-3)
    assert found.coulombs.shape == found.node_volts.shape


def test_a_drift_is_taken_off_and_told() -> None:
    drift = 0.4e-9 * np.clip(TIMES, 0, None) / TIMES[-1]
    # The rest shows no drift, as after an offset that was taken off there, known to 1 uA.
    noise = ChargeNoise(
        random=1e-12, rest_amperes=1e-6, step_amperes=0, step_charge=0, rounding=0, edges=0,
        node_step=0, node_noise=0,
    )  # fmt: skip
    found = loop(ideal(width=0.2) + drift, noise=noise)
    assert found.drift_coulombs == pytest.approx(0.4e-9, rel=0.01)
    assert found.remanent_coulombs == pytest.approx(SATURATED, rel=1e-3)
    assert found.leakage_siemens == 0


# The table's own polarization says where it crosses 0, and its description what P_r A is.
@pytest.mark.parametrize(
    "cell",
    [CellDescription(), CellDescription(imprint_volts=0.4), CellDescription(leak_ohms=20e6)],
    ids=["default", "imprinted", "leaky"],
)
def test_the_simulated_cell_is_found_behind_its_series_resistance(cell: CellDescription) -> None:
    record, crossings = triangle(cell)
    found = reduce(record)
    assert found.remanent_coulombs == pytest.approx(cell.switchable_coulombs / 2, rel=1e-3)
    assert [found.coercive_up_volts, found.coercive_down_volts] == pytest.approx(
        crossings, rel=1e-3
    )
    assert found.imprint_volts == pytest.approx(cell.imprint_volts, abs=2e-3)
    assert found.linear_farads == pytest.approx(cell.farads, rel=0.01)
    assert found.leakage_siemens == pytest.approx(1 / cell.leak_ohms, rel=0.01, abs=1e-10)


# Steps of 8 bits over 10 V, blurred by noise or not.
@pytest.mark.parametrize(("noise", "step"), [(10e-3, 0.0), (20e-3, 0.04), (4e-3, 0.04)])
@pytest.mark.parametrize("leak_ohms", [np.inf, 20e6])
def test_the_uncertainties_of_a_loop_cover(noise: float, step: float, leak_ohms: float) -> None:
    cell = CellDescription(leak_ohms=leak_ohms)
    record, crossings = triangle(cell)
    random = np.random.default_rng(12)
    remanent, volts = [], []
    for _ in range(16):
        offsets = random.normal(0, 5e-3), random.normal(0, 5e-3)
        found = reduce(
            seen_by(record, random, noise=noise, step=step, offsets=offsets), offset_volts=5e-3
        )
        error = found.remanent_coulombs - cell.switchable_coulombs / 2
        remanent.append(error / found.remanent_uncertainty)
        volts.append((found.coercive_up_volts - crossings[0]) / found.volts_uncertainty)
        # Rounding that no noise blurs leaves the offset open by 0.1 uA, and with it the leakage.
        assert found.remanent_uncertainty < (0.1 if noise < step / 4 else 0.02) * SATURATED
    for errors in (remanent, volts):
        assert np.count_nonzero(np.abs(errors) < 2) >= 14
        assert np.max(np.abs(errors)) < 4


def test_a_linear_capacitor_has_no_opening() -> None:
    with pytest.raises(SwitchingUnclear, match=r"no opening.*is a ferroelectric cell there"):
        loop(FARADS * NODE)


def test_a_leaking_capacitor_has_no_opening_either() -> None:
    # Closed form: leakage takes volt-seconds; what flowed at rest was taken off as an offset.
    seconds = np.clip(TIMES, 0, None)
    step = np.diff(seconds, prepend=0.0)
    leaked = np.cumsum(step * NODE) / 20e6
    with pytest.raises(SwitchingUnclear, match=r"no opening"):
        loop(FARADS * NODE + leaked + seconds * VOLTS / 20e6)


def test_a_loop_that_does_not_saturate_is_unclear() -> None:
    record, _ = triangle(CellDescription(), volts=2.8)
    with pytest.raises(SwitchingUnclear, match=r"doesn't saturate: .* 1.% .*raise the amplitude"):
        reduce(record)


def test_a_record_that_is_no_loop_is_unclear() -> None:
    short = TIMES.size * 3 // 4
    with pytest.raises(
        SwitchingUnclear, match=r"the record ends with the node at .*triangle's end"
    ):
        loop(ideal(width=0.2)[:short], node=NODE[:short])
    with pytest.raises(SwitchingUnclear, match=r"a loop goes from below 0 V to above it"):
        loop(ideal(width=0.2), node=NODE + 6)
    with pytest.raises(SwitchingUnclear, match=r"0 samples lie before the loop"):
        loop_of(TIMES, NODE, ideal(width=0.2), before=-1.0, noise=NO_NOISE)
