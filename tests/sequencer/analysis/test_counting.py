"""Counts from end voltages, and full counts from rounds."""

import statistics

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.sequencer.analysis.counting import count_read, full_count


def test_the_crossing_lies_between_the_last_below_and_the_first_above() -> None:
    found = count_read([1.0, 2.0, 2.4, 2.8], 2.5)
    assert (found.count, found.reached) == (4, True)
    assert found.crossing == pytest.approx(3.25)


def test_negative_pulses_cross_downwards() -> None:
    found = count_read([-1.0, -2.0, -3.0], -2.5, rising=False)
    assert found.count == 3
    assert found.crossing == pytest.approx(2.5)


def test_a_first_pulse_above_has_no_crossing() -> None:
    found = count_read([2.6, 2.7], 2.5)
    assert (found.count, found.reached, found.crossing) == (1, True, None)


def test_a_threshold_that_is_not_reached_is_said() -> None:
    found = count_read([1.0, 2.0], 2.5)
    assert (found.count, found.reached, found.crossing) == (2, False, None)


def test_a_read_of_nothing_is_not_reached() -> None:
    assert count_read([], 2.5).count == 0


@given(st.lists(st.floats(-10, 10), max_size=30), st.floats(-10, 10))
def test_the_crossing_is_within_the_pulse_that_passed(ends: list[float], threshold: float) -> None:
    found = count_read(ends, threshold)
    if found.crossing is not None:
        assert found.count - 1 <= found.crossing <= found.count
        assert ends[found.count - 1] > threshold >= ends[found.count - 2]


# Reference: Python's statistics module, exact in rational arithmetic.
def test_mean_and_scatter() -> None:
    crossings = [8.37, 8.41, 8.22, 8.65, 8.40]
    found = full_count(crossings)
    assert found is not None
    assert found.mean == pytest.approx(statistics.mean(crossings), rel=1e-14)
    assert found.sd == pytest.approx(statistics.stdev(crossings), rel=1e-14)
    assert found.mean_uncertainty == pytest.approx(statistics.stdev(crossings) / 5**0.5)


# JCGM 100:2008, 4.4.3, table 1: twenty temperatures, mean 100.14, s 1.49, s of the mean 0.33.
def test_mean_and_scatter_of_the_guide() -> None:
    temperatures = [96.90, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07]
    temperatures += [100.33, 100.42, 100.68, 100.95, 101.11, 101.20, 101.57, 101.84, 102.36, 102.72]
    found = full_count(temperatures)
    assert found is not None
    assert found.mean == pytest.approx(100.145, abs=0.0005)
    assert found.sd == pytest.approx(1.489, abs=0.0005)
    assert found.mean_uncertainty == pytest.approx(0.333, abs=0.0005)


def test_one_round_has_no_scatter_and_none_has_no_answer() -> None:
    one = full_count([8.0])
    assert one is not None
    assert (one.mean, one.sd, one.mean_uncertainty) == (8.0, None, None)
    assert full_count([]) is None
