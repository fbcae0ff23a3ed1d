"""Contact: open, short and good, against the closed-form charge of an RC circuit."""

import numpy as np
import pytest

from pulsetally.sequencer.analysis.contact import ContactUnclear, Verdict, judge_contact
from pulsetally.sequencer.analysis.pulses import Samples

LEVEL, WIDTH, RAMP, STEP = 0.2, 500e-6, 0.125e-6, 0.5e-6
PROBE_TAU, CELL_TAU = 2.6e-6, 66e-6


def record(final: float, tau: float, noise: float = 4e-4) -> tuple[Samples, Samples, Samples]:
    times = np.arange(2000, dtype=np.float64) * STEP - 100e-6
    source = LEVEL * ((times > 0) & (times < WIDTH)).astype(float)
    on = np.clip(times, 0, WIDTH)
    node = final * -np.expm1(-on / tau) * np.exp(-np.clip(times - WIDTH, 0, None) / tau)
    return times, source, node + np.random.default_rng(5).normal(0, noise, times.size)


def judge(
    final: float, tau: float, expected: float | None = CELL_TAU
) -> tuple[Verdict, float, str]:
    found = judge_contact(
        *record(final, tau),
        base=0.0,
        node_base=0.0,
        level=LEVEL,
        ramp=RAMP,
        reached_volts=0.196,
        probe_tau=PROBE_TAU,
        expected_tau=expected,
    )
    return found.verdict, found.tau, found.note


# Closed form: v = V (1 - exp(-t / tau)); the time constant comes back.
@pytest.mark.parametrize("tau", [20e-6, CELL_TAU, 120e-6])
def test_the_time_constant_of_a_good_cell(tau: float) -> None:
    verdict, found, _ = judge(0.196, tau)
    assert verdict is Verdict.GOOD
    assert found == pytest.approx(tau, rel=0.02)


def test_a_bare_probe_is_open_and_a_held_node_is_short() -> None:
    assert judge(0.196, PROBE_TAU)[0] is Verdict.OPEN
    assert judge(0.0002, 1e-6)[0] is Verdict.SHORT


def test_wiring_that_is_too_fast_for_the_record_is_unclear_and_not_open() -> None:
    with pytest.raises(ContactUnclear, match="use a shorter pulse"):
        judge(0.196, 0.5e-6, expected=0.6e-6)


def test_a_time_constant_far_off_is_said() -> None:
    assert judge(0.196, CELL_TAU)[2] == ""
    assert "3 times the one expected" in judge(0.196, 3 * CELL_TAU)[2]
    assert judge(0.196, 3 * CELL_TAU, expected=None)[2] == ""


def test_a_record_with_too_few_samples_is_unclear() -> None:
    times, source, node = record(0.196, CELL_TAU)
    with pytest.raises(ContactUnclear, match="only 10 samples"):
        judge_contact(
            times[::100],
            source[::100],
            node[::100],
            base=0.0,
            node_base=0.0,
            level=LEVEL,
            ramp=RAMP,
            reached_volts=0.196,
            probe_tau=PROBE_TAU,
            expected_tau=None,
        )
