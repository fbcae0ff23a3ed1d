"""The compiled march takes the steps of the one in numpy; where it can't be, numpy does."""

import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from pickle import UnpicklingError

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsetally.simulators import compiled
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.compiled import (
    WORTH_PULSES,
    load_or_compile,
    march_in_use,
    use_compiled,
    use_numpy,
)
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.lot import draw_cells, run_lot
from pulsetally.simulators.march import march
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import Fatigue, Incubation, Thermal

Array = NDArray[np.float64]


@pytest.fixture
def _numba() -> Iterator[None]:
    before = march_in_use()
    if not use_compiled():
        pytest.skip("nothing is compiled here: there is no numba, or it is forbidden")
    yield
    if before is march:
        use_numpy()


needs_numba = pytest.mark.usefixtures("_numba")


class Course:
    """Keeps all samples of the node."""

    def __init__(self) -> None:
        self.times: list[Array] = []
        self.volts: list[Array] = []

    def saw(self, times: Array, terminal_volts: Array, node_volts: Array) -> None:
        del terminal_volts
        self.times.append(times)
        self.volts.append(node_volts)


def pulse(volts: float, seconds: float, *, edge_seconds: float = 100e-9) -> PulseTrain:
    return PulseTrain(
        level_volts=volts,
        width_seconds=seconds,
        leading_seconds=edge_seconds,
        trailing_seconds=edge_seconds,
        period_seconds=seconds + 1e-3,
    )


PRESET, UP = pulse(-5.0, 2e-3), pulse(4.0, 100e-6)

# What differs in the code that runs: each case takes another branch of it.
CASES = {
    "default": (CellDescription(), Wiring(), [PRESET] + 12 * [UP]),
    "domains": (CellDescription(domains=168), Wiring(), 3 * [PRESET, UP, UP, UP]),
    "diode, clamp and leak": (
        CellDescription(leak_ohms=50e6),
        Wiring(diode_saturation_amperes=1e-6, clamp_volts=2.4),
        [PRESET] + 6 * [UP],
    ),
    "imprint, another power, slow edges": (
        CellDescription(activation_volts=12.0, alpha=1.2, imprint_volts=0.3, regions=17),
        Wiring(),
        [PRESET, UP, pulse(-3.0, 100e-6, edge_seconds=10e-6), UP, pulse(-2.0, 50e-6), UP],
    ),
    "whole numbers": (
        CellDescription(
            activation_volts=20,
            activation_spread=4,
            alpha=1,
            imprint_volts=0,
            relative_permittivity=500,
            leak_ohms=10**9,
            incubation=Incubation(seconds=5e-6, threshold_volts=1),
        ),
        Wiring(source_ohms=50, series_ohms=950, probe_ohms=10**7, clamp_volts=3),
        [pulse(-5, 1e-3), pulse(4, 1e-5), pulse(4, 1e-5)],
    ),
    "incubation": (
        CellDescription(incubation=Incubation(seconds=5e-6)),
        Wiring(),
        [PRESET] + 4 * [UP],
    ),
    "incubation with a clamp": (
        CellDescription(incubation=Incubation(seconds=5e-6)),
        Wiring(clamp_volts=2.4),
        [PRESET] + 4 * [UP],
    ),
    "one region, little resistance": (
        CellDescription(regions=1),
        Wiring(series_ohms=0.0),
        [pulse(-6.0, 2e-6)] + 3 * [pulse(4.0, 100e-9, edge_seconds=8e-9)],
    ),
}

# Beyond what is promised of the others.
EXTREME = {
    "least activation": (
        CellDescription(
            activation_volts=0.5,
            activation_spread=1.0,
            imprint_volts=-1.0,
            leak_ohms=1e6,
            domains=168,
            fatigue=Fatigue(scale_cycles=10, recovered_share=0.5, recovery_volts=3),
            thermal=Thermal(kelvin=350),
        ),
        Wiring(diode_saturation_amperes=1e-14, diode_emission=1.5),
        [replace(pulse(-5.0, 2e-3), base_volts=-1.0, period_seconds=4e-3)],
    )
}


def course_of(name: str) -> tuple[Array, Array, float]:
    cell, wiring, pulses = (CASES | EXTREME)[name]
    table, course = Table(cell, wiring, seed=3), Course()
    table.observe(course)
    table.connect(True)
    for train in pulses:
        table.play(replace(train, start_seconds=table.now))
        table.advance(train.period_seconds)
    return np.concatenate(course.times), np.concatenate(course.volts), table.up_fraction


# What is promised is 0.1 mV against an independent integration (test_solver.py): a hundredth
# of that is nothing beside it.
@needs_numba
@pytest.mark.parametrize("name", CASES)
def test_both_marches_draw_the_same_course(name: str) -> None:
    use_numpy()
    times, volts, up_fraction = course_of(name)
    assert use_compiled()
    fast_times, fast_volts, fast_up_fraction = course_of(name)
    assert len(fast_times) == len(times)
    assert fast_volts == pytest.approx(np.interp(fast_times, times, volts), abs=1e-6)
    assert fast_up_fraction == pytest.approx(up_fraction, abs=1e-7)


# Found by a search over cells: 11 to 72 uV. Each is within 0.1 mV of the truth (test_solver.py).
@needs_numba
def test_both_marches_are_within_their_accuracy_where_a_cell_switches_at_millivolts() -> None:
    use_numpy()
    one = course_of("least activation")
    assert use_compiled()
    other = course_of("least activation")
    assert other[1][-1] == pytest.approx(one[1][-1], abs=1e-4)
    assert other[2] == pytest.approx(one[2], abs=1e-5)


@needs_numba
def test_a_seed_repeats_every_digit_when_compiled() -> None:
    one, other = course_of("domains"), course_of("domains")
    assert np.array_equal(one[0], other[0])
    assert np.array_equal(one[1], other[1])


@needs_numba
def test_few_pulses_are_left_to_numpy(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv(compiled.ENVIRONMENT_VARIABLE, raising=False)
    assert not use_compiled(pulses=WORTH_PULSES - 1)
    assert use_compiled(pulses=WORTH_PULSES)


# The table's accuracy, where the lot in numpy has but 1 mV.
@needs_numba
def test_a_compiled_lot_has_the_end_voltages_of_the_table() -> None:
    nominal = CellDescription(regions=16)
    cells = [
        replace(nominal, area=1e-8, activation_volts=20, leak_ohms=10**9),
        *draw_cells(nominal, 6, relative_spread=0.05, seed=1),
        replace(nominal, alpha=1.3, imprint_volts=0.2, leak_ohms=50e6),
    ]
    pulses = [PRESET, UP, UP, pulse(-3.0, 100e-6, edge_seconds=10e-6), UP]
    found = run_lot(cells, Wiring(), pulses, compiled=True)
    for cell, row in zip(cells, found, strict=True):
        table = Table(cell, Wiring())
        table.connect(True)
        for train, volts in zip(pulses, row, strict=True):
            table.play(replace(train, start_seconds=table.now))
            table.advance(train.width_seconds)
            assert volts == pytest.approx(table.node_volts, abs=1e-6)
            table.advance(train.period_seconds - train.width_seconds)


def twice(number: float) -> float:
    return 2 * number


def compile_twice(folder: Path) -> Callable[[float], float]:
    from numba import float64, njit

    from pulsetally.simulators.kernel import kept_in

    with kept_in(folder):
        function: Callable[[float], float] = njit((float64,), cache=True)(twice)
    return function


@needs_numba
@pytest.mark.parametrize("length", [0, 20])
@pytest.mark.parametrize("suffix", ["nbi", "nbc"])
def test_damaged_machine_code_is_compiled_anew(tmp_path: Path, suffix: str, length: int) -> None:
    compile_twice(tmp_path)
    for file in tmp_path.rglob(f"*.{suffix}"):
        os.truncate(file, length)
    with pytest.raises((EOFError, UnpicklingError)):
        compile_twice(tmp_path)
    assert load_or_compile(compile_twice, tmp_path)(21.0) == 42.0
    # And kept again.
    assert compile_twice(tmp_path)(21.0) == 42.0


def test_what_does_not_compile_is_not_tried_twice(tmp_path: Path) -> None:
    tried: list[Path] = []

    def fail(folder: Path) -> None:
        tried.append(folder)
        raise RuntimeError("no compiler")

    with pytest.raises(RuntimeError, match="no compiler"):
        load_or_compile(fail, tmp_path)
    assert tried == [tmp_path]


def told(code: str, **environment: str) -> list[str]:
    """Run a few lines in a process of their own; return the words they print."""
    done = subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout.split()


TRY = "from pulsetally.simulators.compiled import use_compiled; print(use_compiled())"


def test_the_environment_forbids_what_is_compiled() -> None:
    assert told(f"{TRY}; import sys; print('numba' in sys.modules)", PULSETALLY_JIT="0") == [
        "False",
        "False",
    ]


def test_without_numba_it_goes_in_numpy() -> None:
    assert told(f"import sys; sys.modules['numba'] = None; {TRY}") == ["False"]


def test_where_nothing_can_be_kept_it_goes_in_numpy(tmp_path: Path) -> None:
    occupied = tmp_path / "file"
    occupied.touch()
    assert told(TRY, NUMBA_CACHE_DIR=str(occupied)) == ["False"]


@pytest.mark.parametrize("command", [["--help"], ["check", "full_count"]])
def test_commands_that_simulate_nothing_do_not_load_numba(command: list[str]) -> None:
    code = (
        "import sys\nfrom pulsetally.sequencer.cli import main\n"
        f"sys.argv = ['pulsetally', *{command}]\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "print('numba' in sys.modules)"
    )
    assert told(code)[-1] == "False"
