"""The shipped recipes that count, against what the simulated cell is known to have got.

A cell without scatter gives one and the same count again and again, so that recipes can be held
against each other; `:TRUTh:DELivered?` tells what went out, whatever anybody believes.
"""

import itertools
from collections.abc import Iterator
from pathlib import Path

import pytest

from pulsetally.sequencer.analysis.counting import count_read
from pulsetally.sequencer.recipe import shipped_recipes
from pulsetally.sequencer.results import RunResult
from pulsetally.simulators.cell import DEFAULT_DOMAINS, CellDescription
from pulsetally.simulators.imperfections import DigitizerImperfections
from pulsetally.simulators.simulate import SimulationSettings
from tests.recipes.library import AGEING, crossings, findings, run, written
from tests.simulated import Simulated, simulated

# What makes each recipe small; those that need a cell of their own are run by a test of their own.
SMALL: dict[str, dict[str, str]] = {
    "amplitude_sweep": {"rounds": "1"},
    "disturb": {"rounds": "1", "disturbances": "20"},
    "full_count": {"rounds": "2"},
    "hand_over": {},
    "hysteresis": {"rounds": "1"},
    "pund": {"rounds": "1"},
    "readback": {},
    "rest_sweep": {"rounds": "1"},
    "retention": {"rounds": "1"},
    "scatter": {"rounds": "3"},
    "step_and_read": {},
    "switching_transients": {},
    "threshold_study": {"rounds": "1"},
    "width_sweep": {"rounds": "1"},
}
ELSEWHERE = {"tune_count", *AGEING}


@pytest.fixture(scope="module")
def bench() -> Iterator[Simulated]:
    # Neither does the digitizer scatter, so that counts can be held against each other closely.
    quiet = DigitizerImperfections(noise_share=0.0, offset_shares=(0.0, 0.0))
    with simulated(SimulationSettings(digitizer=quiet)) as running:
        yield running


class Small:
    """Runs each recipe once, when it is first asked for.

    ask: returns what it found and how many pulses reached the terminal.
    """

    def __init__(self, bench: Simulated, folders: pytest.TempPathFactory) -> None:
        self._bench, self._folders = bench, folders
        self._found: dict[str, tuple[RunResult, float]] = {}

    def ask(self, name: str) -> tuple[RunResult, float]:
        if name not in self._found:
            if name == "readback":
                # A cell comes back that has got three pulses somewhere else.
                run(self._bench, self._folders.mktemp("elsewhere"), written(STORED))
            before = self._bench.truth("DELivered")
            result = run(self._bench, self._folders.mktemp(name), name, SMALL[name])
            self._found[name] = result, self._bench.truth("DELivered") - before
        return self._found[name]

    def __getitem__(self, name: str) -> RunResult:
        return self.ask(name)[0]


@pytest.fixture(scope="module")
def small(bench: Simulated, tmp_path_factory: pytest.TempPathFactory) -> Small:
    return Small(bench, tmp_path_factory)


STORED = """  - preset: down
  - step: up
    count: 3
"""


@pytest.fixture(scope="module")
def full(small: Small) -> float:
    """Return the full count at the default settings."""
    first, second = crossings(small["full_count"])
    # Two readings of one cell without scatter differ by the digitizer's steps alone.
    assert first == pytest.approx(second, abs=0.05)
    return (first + second) / 2


def test_every_shipped_recipe_is_run_here() -> None:
    assert sorted({*SMALL, *ELSEWHERE}) == shipped_recipes()


@pytest.mark.parametrize("name", sorted(SMALL))
def test_a_recipe_runs_to_its_end_and_sends_no_pulse_that_is_not_kept(
    small: Small, name: str
) -> None:
    result, delivered = small.ask(name)
    summary = result.summary
    assert (summary.state, summary.outputs_off) == ("finished", True)
    assert all(each.complete and not each.spoiled for each in result.rounds)
    assert summary.rounds == summary.planned_rounds - summary.skipped
    if name in ("disturb", "rest_sweep", "scatter"):
        # Trains: one shot holds many pulses.
        assert delivered > summary.shots
    else:
        assert delivered == summary.shots


def test_more_of_a_pulse_fills_the_cell_with_fewer(small: Small, full: float) -> None:
    for name, setting in (("width_sweep", "up.width"), ("amplitude_sweep", "up.level")):
        found = sorted(small[name].by_setting, key=lambda each: each.settings[setting])
        counts = [each.count.mean for each in found]
        # Longer and higher pulses switch more each (common practice).
        assert counts == sorted(counts, reverse=True)
        # The setting in the middle is the default one.
        assert counts[len(counts) // 2] == pytest.approx(full, abs=0.05)


def test_a_rest_that_lets_the_node_come_back_changes_nothing(small: Small, full: float) -> None:
    found = {each.settings["up.rest"]: each.count.mean for each in small["rest_sweep"].by_setting}
    # RC is 66 us (closed form); after ten of them less than 0.1 mV of 4 V is left.
    long = [count for rest, count in found.items() if rest > 10 * 66e-6]
    assert len(long) == 5
    assert long == pytest.approx([full] * len(long), abs=0.05)
    # After 100 us a fifth of the pulse's voltage still switches.
    assert found[min(found)] < full - 0.5


def test_trains_count_like_single_pulses(small: Small, full: float) -> None:
    found = crossings(small["scatter"])
    assert found == pytest.approx([full] * 3, abs=0.05)


@pytest.mark.parametrize("width", ["80 us", "100 us", "130 us"])
def test_a_step_by_train_and_a_read_by_train_count_like_single_pulses(
    bench: Simulated, tmp_path: Path, width: str
) -> None:
    def both(capture: str) -> str:
        return (
            f"  - preset: down\n  - {{read: up, until: 2.5 V, at most: 100{capture}}}\n"
            f"  - preset: down\n  - {{step: up, count: 4{capture}}}\n"
            f"  - {{read: up, until: 2.5 V, at most: 100{capture}}}\n"
        )

    steps = f"  - sweep: {{up.width: [{width}]}}\n    steps:\n"
    steps += (both("") + both(", capture: train, train of: 20")).replace("  - ", "      - ")
    found = run(bench, tmp_path, written(steps))
    reads = [read for each in found.rounds for read in each.reads]
    single, single_after, train, train_after = reads
    assert (train.count, train_after.count) == (single.count, single_after.count)
    told = crossings(found)
    assert told[2:] == pytest.approx(told[:2], abs=0.05)
    assert 4 + told[1] == pytest.approx(told[0], abs=0.05)
    assert (single.stepped, train_after.stepped) == (0, 4)


def test_every_lower_threshold_lies_in_the_read_to_the_highest(
    small: Small,
) -> None:
    reads = [read for each in small["threshold_study"].rounds for read in each.reads]
    highest = max(read.threshold for read in reads)
    assert highest == pytest.approx(2.8)
    for level in (3.8, 4.0, 4.2):
        here = [read for read in reads if read.settings["up.level"] == level]
        (longest,) = (read for read in here if read.threshold == highest)
        assert len(here) == 3
        for read in here:
            again = count_read(longest.end_voltages, read.threshold)
            assert again.crossing is not None
            assert read.crossing == pytest.approx(again.crossing, abs=0.05)


def test_stored_and_remaining_make_up_the_full_count(small: Small, full: float) -> None:
    for name, stored in (("step_and_read", (0, 2, 4, 6)), ("retention", (0, *[5] * 5))):
        reads = [read for each in small[name].rounds for read in each.reads]
        for read, stepped in zip(reads, stored, strict=False):
            assert read.stepped == stepped
            assert read.crossing is not None
            # The cell forgets nothing.
            assert stepped + read.crossing == pytest.approx(full, abs=0.1)


def test_a_readback_adds_up_with_what_was_stored_elsewhere(small: Small, full: float) -> None:
    (only,) = small["readback"].rounds
    (read,) = only.reads
    assert not only.preset
    assert [each["verdict"] for each in only.contacts] == ["good"]
    assert read.crossing is not None
    assert 3 + read.crossing == pytest.approx(full, abs=0.05)
    # It is no full count, though nothing was stepped in this run.
    assert small["readback"].full_count is None


def test_a_cell_that_is_handed_over_counts_right(small: Small, full: float) -> None:
    first, second = small["hand_over"].rounds
    assert [each["verdict"] for each in second.contacts] == ["good", "good"]
    (read,) = second.reads
    assert (first.stepped, second.stepped, read.stepped) == (0, 5, 5)
    assert read.crossing is not None
    assert 5 + read.crossing == pytest.approx(full, abs=0.05)


def test_longer_and_higher_single_pulses_leave_less_to_do(
    small: Small,
) -> None:
    reads = [read for each in small["switching_transients"].rounds for read in each.reads]
    left = {(read.settings["try.level"], read.settings["try.width"]): read for read in reads}
    levels, widths = (sorted({key[place] for key in left}) for place in (0, 1))
    assert len(left) == len(levels) * len(widths) == 15
    for level in levels:
        counts = [left[level, width].crossing or 0.5 for width in widths]
        # Within the noise, where the pulse is too short to switch anything.
        assert all(later < before + 0.05 for before, later in itertools.pairwise(counts))
        assert counts[-1] < counts[0] - 2


@pytest.mark.parametrize("domains", [None, DEFAULT_DOMAINS])
def test_a_tuned_width_gives_the_wanted_count_again(tmp_path: Path, domains: int | None) -> None:
    cell = CellDescription(domains=domains)
    with simulated(SimulationSettings(cell=cell, seed=5)) as bench:
        # Noise of the digitizer, and domains where there are some.
        tuned = run(bench, tmp_path, "tune_count", {"wanted": "7"})
        (found,) = findings(tuned, "tune")
        assert found.values["status"] == "found"
        assert found.values["rounds"] <= 12
        assert tuned.summary.rounds == found.values["rounds"]
        width = f"{found.values['value']!r} s"
        again = run(bench, tmp_path, "full_count", {"up.width": width, "rounds": "3"})
    assert again.full_count is not None
    assert again.full_count.mean == pytest.approx(7, abs=1)
    # What it says of the count there holds too.
    assert again.full_count.mean == pytest.approx(found.values["count"], abs=1)
