"""The table files that ship, and rehearsals with a table file of one's own."""

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from pulsetally.sequencer import engine
from pulsetally.sequencer.bench import load_bench, parse_bench
from pulsetally.sequencer.events import ContactChecked, Event, ReadFinished, RunEnded, RunState
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import Recipe, find_recipe, parse_recipe
from pulsetally.sequencer.rehearsal import addressed_bench_text, shipped_bench
from pulsetally.sequencer.results import run_result
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.facts import facts_of
from pulsetally.simulators.settings import SimulationSettings
from pulsetally.simulators.table_file import find_table, shipped_tables
from tests.simulated import simulated

PROGRAM = Path(sys.executable).with_name("pulsetally")

CONTACT = """\
recipe: contact
pulses: {touch: {level: 0.2 V, width: 500 us, rest: 5 ms}}
steps: [{contact: touch}]
"""

# What full_count finds: the counts of its reads, regression values of our own model; None
# where the threshold is not reached. An open socket has nothing to fill, so that the first
# pulse passes (closed form: it charges 12 pF through 220 kohm, 2.6 us, within 100 us).
COUNTS = {
    "fresh": {9, 10},
    "worn": {4, 5},
    "leaky": {11, 12, 13},
    "behind_diode": {9, 10},
    "open_socket": {1},
    "shorted_socket": None,
    "six_pulses": {6},
}
VERDICTS = {"open_socket": "open", "shorted_socket": "short"}


def pulsetally(*arguments: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [PROGRAM, *arguments],
        cwd=cwd,
        capture_output=True,
        text=True,
        timeout=120,
        env=os.environ | {"COLUMNS": "120"},
        check=False,
    )


def rehearsed(name: str, recipe: Recipe) -> tuple[list[Event], RunEnded]:
    table = find_table(name)
    with simulated(table.settings, title=table.title) as served:
        plan = make_plan(recipe, served.bench)
        recorder = Logbook(Path(":memory:")).begin_run(plan, served.bench, mode="rehearsal")
        *events, ended = engine.run(plan, served.bench, recorder, StopSwitch())
    assert isinstance(ended, RunEnded)
    assert ended.outputs_off
    return events, ended


def test_each_table_that_ships_has_an_outcome_here_and_one_sentence_of_purpose() -> None:
    assert shipped_tables() == sorted(COUNTS)
    for name in COUNTS:
        purpose = find_table(name).purpose
        assert purpose.endswith(".")
        assert ". " not in purpose.replace("2.5 V", "").replace("2.6 V", "")


@pytest.mark.parametrize("name", COUNTS)
def test_each_table_rehearses_the_full_count(name: str) -> None:
    events, ended = rehearsed(name, find_recipe("full_count", {"rounds": "2"}))
    assert ended.state is RunState.FINISHED
    reads = [each for each in events if isinstance(each, ReadFinished)]
    assert len(reads) == 2
    wanted = COUNTS[name]
    for read in reads:
        assert read.reached == (wanted is not None)
        assert wanted is None or read.count in wanted


@pytest.mark.parametrize("name", COUNTS)
def test_contact_tells_an_open_and_a_shorted_socket_from_a_cell(name: str) -> None:
    events, ended = rehearsed(name, parse_recipe(CONTACT, file="contact.yaml"))
    (found,) = (each.result for each in events if isinstance(each, ContactChecked))
    assert found.verdict == VERDICTS.get(name, "good")
    good = name not in VERDICTS
    assert ended.state is (RunState.FINISHED if good else RunState.FAILED)
    if not good:
        assert f"the cell looks {VERDICTS[name]}" in ended.reason


def counts_of(folder: Path) -> list[int]:
    result = run_result(Logbook(folder / "logbook.db", create=False), 1)
    return [read.count for each in result.rounds for read in each.reads]


@pytest.mark.parametrize("threshold", ["2.5V", "2.6V"])
def test_six_pulses_fill_the_cell_at_either_threshold(tmp_path: Path, threshold: str) -> None:
    settings = ("--set", "rounds=2", "--set", f"threshold={threshold}")
    done = pulsetally("rehearse", "full_count", "--table", "six_pulses", *settings, cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert counts_of(tmp_path) == [6, 6]


# The fresh cell with twice the area, every resistance halved and every capacitance doubled: each
# term of the node's equation is multiplied by 2, so it takes as many pulses (closed form).
OWN = """\
table: the fresh cell, scaled
cell: {area: 20000 um2, domains: none}
wiring:
  source resistance: 25 ohm
  series resistance: 110 kohm
  probe: {resistance: 5 Mohm, capacitance: 24 pF}
instruments: {family: perdiv}
"""


def test_a_rehearsal_knows_the_wiring_the_cell_and_the_language_of_its_table(
    tmp_path: Path,
) -> None:
    (tmp_path / "own.yaml").write_text(OWN)
    with subprocess.Popen(
        [PROGRAM, "simulate", "--table", "own.yaml", "--write-bench", "bench.yaml", "--json"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        announced = json.loads(process.stdout.readline())
        bench = load_bench(tmp_path / "bench.yaml").model
        process.send_signal(signal.SIGINT)
        assert process.wait(10) == 0
    assert announced["table"]["title"] == bench.bench == OWN.split("\n")[0][len("table: ") :]
    assert bench.generator.dialect == bench.oscilloscope.dialect == "perdiv"
    assert (bench.generator.address, bench.clock) == (announced["generator"], announced["control"])
    wiring = bench.wiring
    assert (wiring.source_resistance, wiring.series_resistance) == (25.0, 110e3)
    assert (wiring.probe.resistance, wiring.probe.capacitance) == (5e6, 24e-12)
    assert (bench.cell.area, bench.cell.thickness) == (2e-8, 150e-9)
    settings = ("--set", "rounds=1", "--seed", "3")
    done = pulsetally("rehearse", "full_count", "--table", "own.yaml", *settings, cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "FUNCTION GENERATOR PERDIV,3," in done.stdout.replace("\n", "")
    # Of 8.83, the crossing of the fresh cell without scatter: a regression value.
    assert counts_of(tmp_path) == [9]


def test_a_series_diode_and_a_clamp_of_the_table_are_in_the_plan() -> None:
    table = find_table("behind_diode")
    with simulated(table.settings, title=table.title) as served:
        wiring = served.bench.model.wiring
        assert wiring.series_diode is not None
        assert wiring.series_diode.saturation_current == 3e-6
        assert wiring.series_diode.emission == 1.05
        assert wiring.clamp is not None
        assert wiring.clamp.breakdown == 15.0


def test_the_usual_table_has_the_wiring_and_cell_of_the_shipped_bench() -> None:
    text = addressed_bench_text("A::1", "B::2", None, table=facts_of(SimulationSettings(), ""))
    usual, shipped = parse_bench(text, file="usual.yaml").model, shipped_bench().model
    assert (usual.wiring, usual.cell) == (shipped.wiring, shipped.cell)
    assert (usual.limits, usual.bench) == (shipped.limits, shipped.bench)


def test_any_title_of_a_table_is_that_of_its_bench_file() -> None:
    title = 'six: "pulses" \\ \U0001f600 \x07 # \u2028'
    text = addressed_bench_text("A::1", "B::2", None, table=facts_of(SimulationSettings(), title))
    assert parse_bench(text, file="b.yaml").model.bench == title


def test_mistakes_of_recipe_and_table_are_told_at_once(tmp_path: Path) -> None:
    (tmp_path / "bad.yaml").write_text("table: t\ncell: {arae: 1 um2}\nseed: x\n")
    (tmp_path / "r.yaml").write_text("recipe: r\nsteps: [{preset: down}]\n")
    done = pulsetally("rehearse", "r.yaml", "--table", "bad.yaml", cwd=tmp_path)
    assert done.returncode == 2
    begins = [line.partition(" ")[0] for line in done.stderr.splitlines()]
    assert begins[-2:] == ["bad.yaml:2:8", "bad.yaml:3:7"]
    assert begins[0].startswith("r.yaml:2:")
    assert all(". To fix it, " in line for line in done.stderr.splitlines())
    assert not (tmp_path / "logbook.db").exists()
    done = pulsetally("simulate", "--table", "bad.yaml", cwd=tmp_path)
    assert done.returncode == 2
    assert [line.partition(" ")[0] for line in done.stderr.splitlines()] == begins[-2:]


def test_a_wiring_that_no_bench_file_can_say_is_told_so(tmp_path: Path) -> None:
    (tmp_path / "bare.yaml").write_text("table: bare\nwiring: {series resistance: 0}\n")
    done = pulsetally("rehearse", "full_count", "--table", "bare.yaml", cwd=tmp_path)
    assert done.returncode == 2
    assert "wiring.series resistance: 0 ohm is not above 0 ohm" in done.stderr
    assert "Traceback" not in done.stderr


def program(*arguments: str, cwd: Path) -> "subprocess.CompletedProcess[str]":
    return subprocess.run(
        [PROGRAM, *arguments], cwd=cwd, capture_output=True, text=True, timeout=60, check=False
    )


def test_a_table_file_can_be_checked_and_copied(tmp_path: Path) -> None:
    copied = program("check", "worn", "--text", cwd=tmp_path)
    assert copied.returncode == 0
    (tmp_path / "mine.yaml").write_text(copied.stdout)
    assert find_table(str(tmp_path / "mine.yaml")).settings == find_table("worn").settings
    checked = program("check", "mine.yaml", cwd=tmp_path)
    assert (checked.returncode, checked.stdout.split(":")[0]) == (0, "worn cell")
    (tmp_path / "mine.yaml").write_text(copied.stdout.replace("imprint: 300 mV", "imprnt: 300 mV"))
    refused = program("check", "mine.yaml", cwd=tmp_path)
    assert refused.returncode == 2
    assert "imprnt" in refused.stderr
    assert "write 'imprint'" in refused.stderr


def test_a_shipped_recipe_can_be_copied(tmp_path: Path) -> None:
    copied = program("check", "retention", "--text", cwd=tmp_path)
    (tmp_path / "mine.yaml").write_text(copied.stdout)
    assert parse_recipe(copied.stdout, file="mine.yaml").model == find_recipe("retention").model


def test_a_rehearsal_says_which_faults_of_its_table_came(tmp_path: Path) -> None:
    (tmp_path / "t.yaml").write_text(
        "table: late\nfaults:\n"
        "  - {fault: late answer, instrument: oscilloscope, exchange: 30, time: 10 ms}\n"
        "  - {fault: no answer, instrument: oscilloscope, exchange: 999999}\n"
    )
    arguments = ("rehearse", "full_count", "--set", "rounds=1", "--table", "t.yaml")
    done = program(*arguments, cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "Faults of the simulated bench: 1 happened, 1 did not come (yet)." in done.stdout
    shown = program("show", cwd=tmp_path)
    assert "bench: late" in shown.stdout
