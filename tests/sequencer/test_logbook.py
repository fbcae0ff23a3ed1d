"""The logbook: what is entered is committed, and comes back as it was."""

import sqlite3
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from pulsetally.sequencer.analysis.pulses import EndVoltage
from pulsetally.sequencer.errors import LogbookError
from pulsetally.sequencer.events import (
    PulseArmed,
    PulseSetUp,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RunBegan,
    RunEnded,
    RunState,
    Shot,
    ShotTaken,
    Waveform,
)
from pulsetally.sequencer.logbook import LOGBOOK_VERSION, Logbook, Recorder, _pack, unpack
from pulsetally.sequencer.models import units_of
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import find_recipe, parse_recipe
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.results import find_run, list_runs, run_result, run_shots


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "logbook.db"


@pytest.fixture
def logbook(path: Path) -> Iterator[Logbook]:
    book = Logbook(path)
    yield book
    book.close()


def plan() -> Plan:
    return make_plan(find_recipe("full_count"), shipped_bench())


def invented_shot(first: int = 0) -> Shot:
    codes = np.arange(first, first + 20, dtype=np.int16)
    return Shot(
        source=Waveform(codes=codes, scale=1e-3, offset=0.5),
        node=Waveform(codes=-codes, scale=2e-3, offset=0.0),
        sample_interval=1e-7,
        first_seconds=-1e-6,
        clipped=False,
        bench_seconds=12.5,
    )


def begin(recorder: Recorder) -> None:
    planned = plan()
    recorder.record(
        RunBegan(rounds=20, most_pulses=9, seconds=1.0, identities={"oscilloscope": "A,B,C,D"})
    )
    recorder.record(RoundBegan(round=planned.rounds[0], attempt=1))
    recorder.record(PulseSetUp(pulse="up", settings={"level": 4.0}))


def armed(order: int, role: Role) -> PulseArmed:
    return PulseArmed(round=1, order=order, role=role, pulse="up")


def taken(order: int, role: Role, volts: float) -> ShotTaken:
    end = EndVoltage(volts=volts, uncertainty=1e-3, samples=9, seconds=1e-4)
    shot = invented_shot(order)
    return ShotTaken(round=1, order=order, role=role, pulse="up", shot=shot, ends=(end,))


def seen_from_outside(path: Path, table: str) -> int:
    with sqlite3.connect(path) as other:
        (count,) = other.execute(f"select count(*) from {table}").fetchone()
    other.close()
    return int(count)


def test_each_event_is_committed_when_record_returns(path: Path, logbook: Logbook) -> None:
    recorder = logbook.begin_run(plan(), shipped_bench(), mode="run")
    assert seen_from_outside(path, "runs") == 1
    begin(recorder)
    recorder.record(armed(1, Role.PRESET))
    assert seen_from_outside(path, "pulses") == 1
    assert seen_from_outside(path, "shots") == 0
    recorder.record(taken(1, Role.PRESET, -4.0))
    assert seen_from_outside(path, "shots") == 1


def test_commits_reach_the_disk(path: Path, logbook: Logbook) -> None:
    with logbook._engine.connect() as connection:
        # 2 is FULL: the journal is synced at each commit (SQLite's own numbering).
        assert connection.exec_driver_sql("PRAGMA synchronous").scalar() == 2
        assert connection.exec_driver_sql("PRAGMA journal_mode").scalar() == "wal"


def test_a_run_comes_back_as_it_was_entered(path: Path, logbook: Logbook) -> None:
    recorder = logbook.begin_run(plan(), shipped_bench(), mode="rehearsal")
    begin(recorder)
    for order, (role, volts) in enumerate(
        [(Role.PRESET, -4.0), (Role.STEP, 1.0), (Role.READ, 2.4), (Role.READ, 2.8)], start=1
    ):
        recorder.record(armed(order, role))
        recorder.record(taken(order, role, volts))
    recorder.record(
        ReadFinished(
            round=1,
            pulse="up",
            threshold=2.5,
            count=2,
            crossing=1.25,
            reached=True,
            stepped=1,
            end_voltages=(2.4, 2.8),
        )
    )
    recorder.record(RoundFinished(round=1))
    recorder.close(RunEnded(state=RunState.FINISHED, reason="", outputs_off=True))
    logbook.close()

    again = Logbook(path, create=False)
    (summary,) = list_runs(again)
    assert (summary.state, summary.mode, summary.outputs_off) == ("finished", "rehearsal", True)
    assert (summary.rounds, summary.planned_rounds, summary.shots) == (1, 20, 4)
    result = run_result(again, find_run(again, "latest"))
    (only,) = result.rounds
    assert (only.stepped, only.complete, only.spoiled, only.preset) == (1, True, False, True)
    assert only.reads[0].crossing == 1.25
    assert only.reads[0].end_voltages == (2.4, 2.8)
    # Something was stepped before, so this is no full count.
    assert result.full_count is None
    assert result.identities == {"oscilloscope": "A,B,C,D"}
    for order, shot in enumerate(run_shots(again, 1), start=1):
        expected = invented_shot(order)
        assert np.array_equal(shot.source.codes, expected.source.codes)
        assert np.array_equal(shot.node.volts, expected.node.volts)
        assert np.array_equal(shot.times, expected.times)
        assert shot.bench_seconds == 12.5
    assert len(list(run_shots(again, 1, round_number=2))) == 0
    again.close()


@given(arrays.arrays(np.int16, st.integers(0, 50)))
def test_samples_survive_bit_for_bit(codes: "np.ndarray[tuple[int], np.dtype[np.int16]]") -> None:
    packed = _pack(Waveform(codes=codes, scale=1.0, offset=0.0))
    assert np.array_equal(unpack(packed, 1.0, 0.0).codes, codes)
    assert len(packed) == 2 * codes.size


def test_a_logbook_of_a_newer_version_is_refused(path: Path, logbook: Logbook) -> None:
    logbook.close()
    with sqlite3.connect(path) as other:
        other.execute("update about set version = ?", (LOGBOOK_VERSION + 1,))
    other.close()
    with pytest.raises(LogbookError, match="written by a newer version"):
        Logbook(path)


def test_a_run_that_is_not_there_is_named(logbook: Logbook) -> None:
    with pytest.raises(LogbookError, match="no run is in this logbook yet"):
        find_run(logbook, "latest")
    logbook.begin_run(plan(), shipped_bench(), mode="run")
    assert find_run(logbook, "latest") == 1
    with pytest.raises(LogbookError, match=r"there is no run '7'.*the last is 1"):
        find_run(logbook, "7")
    with pytest.raises(LogbookError, match="there is no run '1; drop table runs'"):
        find_run(logbook, "1; drop table runs")


def test_a_run_without_an_end_whose_process_lives_is_running(logbook: Logbook) -> None:
    recorder = logbook.begin_run(plan(), shipped_bench(), mode="run")
    begin(recorder)
    (summary,) = list_runs(logbook)
    assert summary.state == "running"
    (only,) = run_result(logbook, 1).rounds
    assert (only.complete, only.spoiled, only.reason) == (False, False, "still going")


def test_an_archived_logbook_is_read_and_not_written(path: Path, logbook: Logbook) -> None:
    logbook.begin_run(plan(), shipped_bench(), mode="run")
    logbook.close()
    before = path.read_bytes()
    again = Logbook(path, create=False)
    assert len(list_runs(again)) == 1
    with pytest.raises(LogbookError, match="readonly"):
        again.begin_run(plan(), shipped_bench(), mode="run")
    again.close()
    assert path.read_bytes() == before


@pytest.mark.parametrize("which", ["²", "9" * 30, "-1", "one"])
def test_what_is_no_run_number_is_refused(logbook: Logbook, which: str) -> None:
    logbook.begin_run(plan(), shipped_bench(), mode="run")
    with pytest.raises(LogbookError, match="there is no run"):
        find_run(logbook, which)


def test_swept_parameters_have_their_units_beside_what_was_overridden(logbook: Logbook) -> None:
    text = (
        "recipe: r\nparameters: {w: 100 us, volts: 4 V, rounds: 3}\n"
        "pulses:\n  down: {level: -5 V, width: 2 ms}\n  up: {level: volts, width: w}\n"
        "steps:\n  - sweep: {w: [80 us, 90 us]}\n    steps:\n      - repeat: rounds\n"
        "        steps: [{preset: down}, {step: up}]\n"
    )
    recipe = parse_recipe(text, file="r.yaml", overrides={"rounds": "1", "volts": "3 V"})
    swept = make_plan(recipe, shipped_bench())
    logbook.begin_run(swept, shipped_bench(), mode="rehearsal")
    found = run_result(logbook, 1)
    assert (found.swept, found.units) == (("w",), {"w": "s", "volts": "V"})
    assert units_of(recipe.model.parameters) == found.units
