"""The search for a full count, on random monotone laws with scatter."""

import math
from collections.abc import Callable

import numpy as np
import pytest

from pulsetally.sequencer.analysis.tuning import TuneResult, TuneStatus, Tuning

MOST_ROUNDS = 12
# A read gives up after this many pulses.
LONGEST_READ = 60
SCATTER = 0.25

Law = Callable[[float], float]


def search(tuning: Tuning, law: Law, random: np.random.Generator) -> TuneResult:
    """Run a search against a law of the mean full count, as rounds would answer."""
    while (value := tuning.next_value()) is not None:
        count = law(value) + SCATTER * random.standard_normal()
        if count > LONGEST_READ:
            tuning.add(value, None, too_many=True)
        elif count < 1:
            tuning.add(value, None)
        else:
            tuning.add(value, count)
    return tuning.result()


def random_law(random: np.random.Generator, sought: float, target: float) -> Law:
    """Return a power law (exponent -0.7 to -3) or an exponential of 1/V through a point."""
    if random.integers(2):
        power = random.uniform(0.7, 3)
        return lambda value: target * (sought / value) ** power
    steepness = random.uniform(1, 20)
    return lambda value: target * math.exp(min(50.0, steepness * (sought / value - 1)))


@pytest.mark.parametrize("logarithmic", [True, False])
@pytest.mark.parametrize("within", [0.5, 1.0])
def test_it_lands_within_a_pulse_of_the_target(*, within: float, logarithmic: bool) -> None:
    random = np.random.default_rng(21)
    errors, pulls, rounds = [], [], []
    for _ in range(70):
        low = 10 ** random.uniform(-6, 1)
        target = random.uniform(3, 40)
        sought = low * 10 ** random.uniform(0.05, 0.95)
        law = random_law(random, sought, target)
        tuning = Tuning(low, 10 * low, target, within, MOST_ROUNDS, logarithmic=logarithmic)
        found = search(tuning, law, random)
        assert found.value is not None
        assert found.uncertainty is not None
        assert found.rounds <= MOST_ROUNDS
        errors.append(abs(law(found.value) - target))
        pulls.append(abs(found.value - sought) / found.uncertainty)
        rounds.append(found.rounds)
    assert max(errors) <= 1
    # The sureness is 95 %, and the uncertainty a standard uncertainty.
    assert np.mean(np.array(errors) <= within) >= 0.95
    assert np.mean(np.array(pulls) < 2) >= 0.88
    assert np.mean(np.array(pulls) > 0.3) >= 0.5
    assert np.mean(rounds) < 9


def test_it_stops_as_soon_as_the_count_is_sure_enough() -> None:
    rounds = []
    for within in (0.2, 0.5, 2.0):
        tuning = Tuning(50e-6, 500e-6, 9.0, within, 40, logarithmic=True)
        found = search(tuning, lambda value: 9 * (120e-6 / value), np.random.default_rng(1))
        assert found.status is TuneStatus.FOUND
        rounds.append(found.rounds)
    assert rounds[0] > rounds[1] > rounds[2]


def test_rounds_near_the_answer_make_it_surer() -> None:
    uncertainties = []
    for at_most in (6, 24):
        tuning = Tuning(50e-6, 500e-6, 9.0, 1e-3, at_most, logarithmic=True)
        found = search(tuning, lambda value: 9 * (120e-6 / value), np.random.default_rng(5))
        assert (found.status, found.rounds) == (TuneStatus.AT_MOST_REACHED, at_most)
        assert found.uncertainty is not None
        uncertainties.append(found.uncertainty)
    # Three or four rounds near the answer against about twenty: sqrt(5) and something.
    assert uncertainties[1] < 0.6 * uncertainties[0]


def test_a_count_that_rises_with_the_setting_is_found_too() -> None:
    def law(ohms: float) -> float:
        return 10 * math.pow(ohms / 300e3, 1.5)

    tuning = Tuning(100e3, 1e6, 10.0, 0.5, MOST_ROUNDS, logarithmic=True)
    found = search(tuning, law, np.random.default_rng(8))
    assert found.status is TuneStatus.FOUND
    assert found.value == pytest.approx(300e3, rel=0.05)


def test_a_target_at_an_end_of_the_range_is_found_there() -> None:
    tuning = Tuning(100e-6, 1e-3, 9.0, 0.5, MOST_ROUNDS, logarithmic=True)
    found = search(tuning, lambda value: 9.05 * (100e-6 / value), np.random.default_rng(8))
    assert found.status is TuneStatus.FOUND
    assert found.value is not None
    assert 100e-6 <= found.value < 105e-6


# Counts at the two ends: both too few, both too many, both without a count.
@pytest.mark.parametrize("counts", [(5.0, 2.0), (50.0, 20.0), (500.0, 100.0), (0.5, 0.1)])
def test_a_target_outside_the_range_is_not_bracketed(counts: tuple[float, float]) -> None:
    def law(value: float) -> float:
        return counts[0] + (counts[1] - counts[0]) * (value - 1)

    found = search(
        Tuning(1.0, 2.0, 9.0, 0.5, MOST_ROUNDS, logarithmic=False), law, np.random.default_rng(3)
    )
    assert found.status is TuneStatus.NOT_BRACKETED
    assert found.rounds == 2
    assert (found.value, found.uncertainty, found.count) == (None, None, None)


def test_a_target_just_outside_is_told_after_some_repeats() -> None:
    tuning = Tuning(100e-6, 1e-3, 9.0, 0.1, 40, logarithmic=True)
    found = search(tuning, lambda value: 8.5 * (100e-6 / value), np.random.default_rng(6))
    assert found.status is TuneStatus.NOT_BRACKETED
    assert 2 < found.rounds < 30


def test_a_count_that_jumps_past_the_target_is_never_found() -> None:
    tuning = Tuning(1.0, 2.0, 9.0, 0.5, MOST_ROUNDS, logarithmic=False)
    found = search(tuning, lambda value: 100.0 if value < 1.3 else 0.5, np.random.default_rng(3))
    assert found.status is TuneStatus.AT_MOST_REACHED
    assert (found.value, found.rounds) == (None, MOST_ROUNDS)


def test_a_cell_that_scatters_more_takes_more_rounds_to_be_sure() -> None:
    def told(counts: list[float]) -> TuneResult:
        tuning = Tuning(1.0, 10.0, 9.0, 1.0, 4 + len(counts), logarithmic=True)
        tuning.add(1.0, 36.0)
        tuning.add(10.0, 3.6)
        for count in counts:
            tuning.add(4.0, count)
        while (value := tuning.next_value()) is not None:
            tuning.add(value, 9.0)
        return tuning.result()

    quiet, restless = told([9.0, 9.1, 8.9, 9.0]), told([7.5, 10.5, 8.0, 10.0])
    assert quiet.scatter < 0.25 < restless.scatter
    assert quiet.rounds < restless.rounds
    assert (quiet.uncertainty or 0) < (restless.uncertainty or 0)


def test_asking_again_changes_nothing() -> None:
    tuning = Tuning(1.0, 10.0, 9.0, 0.5, MOST_ROUNDS, logarithmic=True)
    assert tuning.next_value() == tuning.next_value() == 1.0
    tuning.add(1.0, None, too_many=True)
    assert tuning.next_value() == pytest.approx(10.0)
    with pytest.raises(ValueError, match=r"the search goes on, at 10"):
        tuning.result()


def test_what_cannot_be_is_named() -> None:
    with pytest.raises(ValueError, match=r"low is 2.* high 1"):
        Tuning(2.0, 1.0, 9.0, 0.5, 12, logarithmic=False)
    with pytest.raises(ValueError, match=r"low is -1.*logarithmic"):
        Tuning(-1.0, 1.0, 9.0, 0.5, 12, logarithmic=True)
    with pytest.raises(ValueError, match=r"target is 1.*above 1"):
        Tuning(1.0, 2.0, 1.0, 0.5, 12, logarithmic=True)
    with pytest.raises(ValueError, match=r"within is 0"):
        Tuning(1.0, 2.0, 9.0, 0, 12, logarithmic=True)
    with pytest.raises(ValueError, match=r"at_most is 1"):
        Tuning(1.0, 2.0, 9.0, 0.5, 1, logarithmic=True)
    tuning = Tuning(1.0, 2.0, 9.0, 0.5, 12, logarithmic=True)
    with pytest.raises(ValueError, match=r"value is 3.*from 1.0 to 2.0"):
        tuning.add(3.0, 9.0)
    with pytest.raises(ValueError, match=r"a count or too many pulses, not both"):
        tuning.add(1.0, 9.0, too_many=True)
    with pytest.raises(ValueError, match=r"count is nan"):
        tuning.add(1.0, math.nan)


@pytest.mark.parametrize(("low", "high"), [(60e-6, 200e-6), (1e-6, 1e-3), (3.0, 7.0), (0.1, 0.7)])
def test_the_ends_are_tried_exactly_as_written(low: float, high: float) -> None:
    tuning = Tuning(low, high, 9, 0.5, MOST_ROUNDS, logarithmic=True)
    first = tuning.next_value()
    tuning.add(low, 20.0)
    assert (first, tuning.next_value()) == (low, high)
