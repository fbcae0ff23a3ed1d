"""Every family counts the same default cell full, through sockets and its own words alone."""

from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np
import pytest

from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulators.counting import COUNTS, ERROR_QUERIES
from tests.simulators.sockets import Client, served

PULSES = 11


@contextmanager
def bench(family: str) -> Iterator[tuple[Client, Client, Client]]:
    with (
        served(SimulationSettings(family=family)) as addresses,
        Client(addresses.generator) as generator,
        Client(addresses.oscilloscope) as oscilloscope,
        Client(addresses.control) as control,
    ):
        yield generator, oscilloscope, control


@pytest.fixture(scope="module")
def counts() -> dict[str, list[float]]:
    found = {}
    for family, count in COUNTS.items():
        with bench(family) as (generator, oscilloscope, control):
            found[family] = count(generator, oscilloscope, PULSES)
            query, nothing = ERROR_QUERIES[family]
            assert generator.ask(query) == oscilloscope.ask(query) == nothing
            assert control.ask(":TRUT:DEL?") == str(PULSES + 1)
    return found


def test_every_family_is_counted() -> None:
    assert set(COUNTS) == set(ERROR_QUERIES) == set(FAMILIES)


# design.md section 6: the default cell reaches 2.5 V in about nine pulses after a preset.
@pytest.mark.parametrize("family", FAMILIES)
def test_the_cell_is_full_after_about_nine_pulses(
    family: str, counts: dict[str, list[float]]
) -> None:
    full = 1 + next(index for index, volts in enumerate(counts[family]) if volts > 2.5)
    assert 8 <= full <= 10
    assert counts[family][0] < 2.3


@pytest.mark.parametrize("family", sorted(set(FAMILIES) - {"scpi99"}))
def test_the_same_cell_gives_the_same_end_volts(
    family: str, counts: dict[str, list[float]]
) -> None:
    # Mean of 20 samples, five standard errors: 12 bits have 1.5 codes of noise (and twice
    # that counts in the difference), 8 bits half a code and as much from rounding. The
    # sample clock is free against the trigger by 100 ns, at less than 10 mV/us.
    code = 8 / 256 if family == "perdiv" else 8 / 4096
    noise = 0.6 * code if family == "perdiv" else 1.5 * code
    tolerance = 5 * np.hypot(noise, 1.5 * 8 / 4096) / np.sqrt(20) + 1e-3
    assert counts[family] == pytest.approx(counts["scpi99"], abs=tolerance)
