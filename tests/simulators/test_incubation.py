"""Incubation: what is too short never adds up."""

import math

import numpy as np
import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.wear import Incubation
from tests.simulators.table_pulses import connected, preset, pulse, up

# A wiring and a cell whose voltage is the EMF from the first picoseconds on; at 4 V one region
# switches with a time constant of 10 us.
STIFF = Wiring(source_ohms=1e-3, series_ohms=0, probe_ohms=math.inf, probe_farads=0)


def one_region(incubation: Incubation | None) -> CellDescription:
    return CellDescription(
        activation_spread=0.0,
        attempt_seconds=10e-6 * math.exp(-25.0 / 4.0),
        remanent_polarization=1e-9,
        relative_permittivity=1.0,
        regions=1,
        incubation=incubation,
    )


def after_train(incubation: Incubation | None, width_seconds: float, count: int) -> list[float]:
    """Return the up fractions after the first pulse and after the train."""
    table = connected(one_region(incubation), STIFF)
    train = PulseTrain(
        level_volts=4.0,
        width_seconds=width_seconds,
        leading_seconds=0,
        trailing_seconds=0,
        period_seconds=5 * width_seconds,
        count=count,
    )
    table.play(train)
    table.advance(train.period_seconds)
    first = table.up_fraction
    table.advance((count - 1) * train.period_seconds)
    assert table.delivered == count
    return [first, table.up_fraction]


# Grigoriev et al., Phys. Rev. B 80, 014110 (2009), qualitatively: 50 ns pulses never add up,
# microsecond pulses do.
def test_a_thousand_short_pulses_change_nothing() -> None:
    assert after_train(Incubation(seconds=200e-9), 50e-9, 1000) == [0.0, 0.0]
    # A: without incubation 40 of them already are a fifth of the time constant.
    assert after_train(None, 50e-9, 40)[1] == pytest.approx(1 - math.exp(-0.2), abs=1e-5)


# A: each pulse switches for its width less the incubation time.
def test_each_long_pulse_counts_less_its_incubation() -> None:
    found = after_train(Incubation(seconds=200e-9), 1e-6, 10)
    expected = [1 - math.exp(-0.08), 1 - math.exp(-0.8)]
    # The trailing jump at the node takes picoseconds.
    assert found == pytest.approx(expected, abs=1e-5)


def test_the_time_starts_anew_for_the_other_polarity() -> None:
    table = connected(one_region(Incubation(seconds=5e-6)), STIFF)
    table.rest_at(4.0)
    table.advance(55e-6)
    assert table.up_fraction == pytest.approx(1 - math.exp(-5), abs=1e-5)
    full = table.up_fraction
    for _ in range(4):
        table.rest_at(-4.0)
        table.advance(4.9e-6)
        assert table.up_fraction == pytest.approx(full, abs=1e-12)
        table.rest_at(4.0)
        table.advance(4.9e-6)
        assert table.up_fraction == pytest.approx(full, abs=1e-12)
    table.rest_at(-4.0)
    table.advance(15e-6)
    assert table.up_fraction == pytest.approx(full * math.exp(-1), abs=1e-5)


def test_a_default_cell_counts_as_before_after_a_short_incubation() -> None:
    ends = []
    for incubation in (None, Incubation(seconds=20e-9)):
        table = connected(CellDescription(incubation=incubation))
        preset(table)
        ends.append([up(table) for _ in range(10)])
    # The node takes microseconds to where anything switches.
    assert ends[1] == pytest.approx(ends[0], abs=1e-3)


@pytest.mark.parametrize("clamp_volts", [None, 3.0])
def test_short_pulses_leave_a_default_cell_down_whatever_the_circuit(
    clamp_volts: float | None,
) -> None:
    table = connected(
        CellDescription(incubation=Incubation(seconds=400e-6)), Wiring(clamp_volts=clamp_volts)
    )
    for _ in range(5):
        up(table)
    # The node stays beyond the threshold for some 300 us.
    assert table.up_fraction == 0.0
    pulse(table, 4.0, 600e-6)
    assert table.up_fraction > 0.1


def test_observers_see_rising_times() -> None:
    class Watch:
        last_seconds = -math.inf

        def saw(self, times: object, terminal_volts: object, node_volts: object) -> None:
            assert isinstance(times, np.ndarray)
            assert np.all(np.diff(times) > 0)
            assert times[0] >= self.last_seconds
            self.last_seconds = times[-1]

    table = connected(CellDescription(incubation=Incubation(seconds=30e-6)))
    watch = Watch()
    table.observe(watch)
    preset(table)
    up(table)
    assert watch.last_seconds == table.now
