"""What a recipe does, in a few lines, and how a plan is shown."""

import json
import sqlite3
from contextlib import closing
from datetime import UTC, datetime, timedelta
from io import StringIO
from pathlib import Path

import pytest
from rich.console import Console

from pulsetally.sequencer import engine
from pulsetally.sequencer.forecast import end_of, free_bytes
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.outline import Branch, outline_of
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.plan_summary import plan_object, show_plan, warnings_of
from pulsetally.sequencer.recipe import find_recipe, parse_recipe, shipped_recipes
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.results import run_result
from pulsetally.sequencer.safety import StopSwitch
from tests.simulated import simulated

BENCH = shipped_bench()
NOON = datetime(2031, 12, 31, 12, tzinfo=UTC)
HEAD = """\
recipe: Everything
parameters: {n: 3, hold: 10 s, low: 2.5 V}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us, at: cell}
  top: {level: 4 V, width: 100 us}
steps:
"""
READ = "{read: top, until: low, at most: 60}"


def recipe_plan(steps: str) -> Plan:
    return make_plan(parse_recipe(HEAD + steps, file="r.yaml"), BENCH)


def lines(branches: tuple[Branch, ...], depth: int = 0) -> list[str]:
    found = []
    for each in branches:
        found += [f"{'  ' * depth}{each.verb} {each.words}", *lines(each.steps, depth + 1)]
    return found


def test_each_step_is_put_into_words() -> None:
    steps = f"""\
  - repeat: n
    steps: [{{preset: down}}, {READ}, {{wait: hold}}]
  - sweep: {{top.width: {{from: 10 us, to: 1 ms, per decade: 5}}, n: [1, 2]}}
    order: shuffled
    seed: 7
    steps: [{{preset: down}}, {{step: top, count: n, capture: train, train of: 2}}]
  - sweep: {{hold: [1 s, 2000 s, 7200 s], n: [1, 2, 3]}}
    together: yes
    steps: [{{preset: down}}, {{wait: hold}}, {{step: up}}, {{ask: "look [red]", within: 2 h}}]
  - tune: top.level
    between: [3.8 V, 4 V]
    full count: 9
    steps: [{{preset: down}}, {READ}]
  - cycle: {{down: down, up: top}}
    pairs: 1e6
    pauses per decade: 1
    stop when: {{switched charge below: 50 %, contact is lost: yes}}
    steps: [{{contact: top}}, {{pund: top}}]
  - {{loop: 4.5 V, period: 20 ms, at: cell}}
"""
    assert lines(outline_of(parse_recipe(HEAD + steps, file="r.yaml"))) == [
        "repeat 3 times",
        "  preset down, -5 V for 2 ms",
        "  read top, 4 V for 100 us, until 2.5 V, at most 60 pulses",
        "  wait 10 s",
        "sweep top.width: 10 us, 15.85 us, 25.12 us, ... 1 ms (11 values); n: 1, 2"
        " (11 x 2 = 22), shuffled with seed 7",
        "  preset down, -5 V for 2 ms",
        "  step top, 4 V for top.width, n pulses in trains of 2",
        "sweep hold: 1 s, 2000 s, 2 h 00 min; n: 1, 2, 3 (moving together, 3 steps)",
        "  preset down, -5 V for 2 ms",
        "  wait hold",
        "  step up, 4 V across the cell for 100 us, 1 pulse",
        "  ask 'look [red]', 2 h 00 min at most, otherwise stop",
        "tune top.level between 3.8 V and 4 V for a full count of 9 within 0.5, at most 12 rounds",
        "  preset down, -5 V for 2 ms",
        "  read top, top.level for 100 us, until 2.5 V, at most 60 pulses",
        "cycle between down, -5 V for 2 ms, and top, 4 V for 100 us; 1e6 pairs; steps at 0, 1, 10,"
        " ... 1e6 (8 values) pairs; stops when switched charge below 50 %, or contact is lost",
        "  contact top, 4 V for 100 us",
        "  pund top, 4 V for 100 us",
        "loop to 4.5 V across the cell, 20 ms a period",
    ]


@pytest.mark.parametrize("name", shipped_recipes())
def test_the_rounds_of_a_shipped_recipe_are_no_more_than_its_tree_says(name: str) -> None:
    plan = make_plan(find_recipe(name), BENCH)

    def presets(branches: tuple[Branch, ...]) -> int:
        # A loop may stand in a round of its own or in one with others.
        begin = ("preset", "pund", "loop", "contact")
        return sum(
            (each.verb in begin) + (each.times or 1) * presets(each.steps) for each in branches
        )

    cycles = sum(each.cycling is not None for each in plan.rounds)
    assert 1 <= len(plan.rounds) <= presets(plan.outline) + cycles


def shown(plan: Plan, *, free: int | None = None, width: int = 80) -> str:
    console = Console(file=StringIO(), width=width, highlight=False)
    show_plan(console, plan, BENCH, now=NOON, free_bytes=free)
    assert isinstance(console.file, StringIO)
    return console.file.getvalue()


def test_a_plan_says_when_a_run_that_begins_now_would_end() -> None:
    plan = recipe_plan(
        "  - {preset: down}\n  - {wait: 36 h}\n  - {ask: ready, within: 3 h}\n  - {step: top}\n"
    )
    text = shown(plan)
    # A day and a half after noon of New Year's Eve.
    assert "1 d 12 h; started now, it would end on Fri 2 Jan 2032 at 00:00." in text
    assert "Waiting for a person may add 3 h 00 min to that." in text
    found = plan_object(plan, BENCH, now=NOON, free_bytes=None)
    ends, latest = (
        datetime.fromisoformat(str(found[name]))
        for name in ("would_end", "would_end_at_the_latest")
    )
    assert latest - ends == timedelta(hours=3)


def test_an_end_beyond_the_calendar_is_left_open() -> None:
    assert end_of(1e13, NOON) is None
    plan = recipe_plan("  - {cycle: {down: down, up: top}, pairs: 1e12}\n  - {preset: down}\n")
    assert "started now" in shown(plan)
    found = plan_object(plan, BENCH, now=NOON.replace(year=9999), free_bytes=None)
    assert found["would_end"] is None
    json.dumps(found, allow_nan=False)


def test_too_small_a_disk_is_warned_of() -> None:
    plan = make_plan(find_recipe("full_count"), BENCH)
    assert warnings_of(plan, plan.disk_bytes) == list(plan.warnings)
    (warning,) = warnings_of(plan, 3_000_000)
    assert warning.startswith("the logbook may grow by 10.6 MB and its disk has 3 MB free")
    assert "Note: the logbook may grow by" in shown(plan, free=3_000_000)
    assert "3 MB are free" in shown(plan, free=3_000_000)


def test_the_free_space_is_that_of_the_nearest_folder_that_exists(tmp_path: Path) -> None:
    here, deeper = (free_bytes(tmp_path / name) for name in ("a.db", "not/yet/there/a.db"))
    assert here is not None
    assert deeper is not None
    # Others write meanwhile.
    assert deeper == pytest.approx(here, rel=0.2)


def test_a_plan_shows_both_ends_and_the_largest_against_the_limits() -> None:
    plan = recipe_plan("  - {loop: 5.5 V, period: 20 ms}\n  - {preset: down}\n")
    found = plan_object(plan, BENCH, now=NOON, free_bytes=None)
    pulses = found["pulses"]
    assert isinstance(pulses, list)
    assert [(each["pulse"], each["end"], each["panel"]) for each in pulses] == [
        ("loop", "level", 5.5), ("loop", "base", -5.5), ("down", "level", -5.0)
    ]  # fmt: skip
    # closed form: divider of 220.05 kohm and 10 Mohm.
    share = 10e6 / (10e6 + 220_050)
    assert found["largest"] == pytest.approx({"panel": 5.5, "terminal": 5.5, "cell": 5.5 * share})
    assert found["limits"] == pytest.approx({"panel": 6 / share, "source": 10, "node": 6})


@pytest.mark.parametrize("width", [80, 120])
@pytest.mark.parametrize("name", shipped_recipes())
def test_a_plan_fits_the_terminal(name: str, width: int) -> None:
    text = shown(make_plan(find_recipe(name), BENCH), width=width)
    # Sentences are left to the terminal; tree and tables are drawn.
    drawn = [line for line in text.splitlines() if line[:1] in "│├└┏┡┃"]
    assert len(drawn) > 8
    assert max(map(len, drawn)) <= width
    assert "…" not in text


def test_what_a_recipe_calls_its_pulses_is_no_markup() -> None:
    text = shown(recipe_plan('  - {preset: down}\n  - {ask: "[red]\\e[31m now"}\n'))
    assert "[red]" in text
    assert "\x1b" not in text


def test_a_logbook_says_in_which_order_shuffled_rounds_were_done(tmp_path: Path) -> None:
    steps = (
        "  - {sweep: {top.width: [80 us, 90 us, 100 us], n: [1, 2]}, order: shuffled, seed: 5,"
        " steps: [{preset: down}, {step: top, count: n}]}\n"
    )
    with simulated() as table:
        recipe = parse_recipe(HEAD + steps, file="r.yaml")
        plan = make_plan(recipe, table.bench)
        logbook = Logbook(tmp_path / "logbook.db")
        recorder = logbook.begin_run(plan, table.bench, mode="run")
        list(engine.run(plan, table.bench, recorder, StopSwitch()))
        result = run_result(logbook, recorder.run)
        logbook.close()
    planned = [(each.settings["top.width"], each.settings["n"]) for each in plan.rounds]
    assert planned != sorted(planned)
    assert [(each.settings["top.width"], each.settings["n"]) for each in result.rounds] == planned
    # The seed is in the recipe, which is kept as it was written, and gives the same order again.
    with closing(sqlite3.connect(tmp_path / "logbook.db")) as kept:
        ((text,),) = kept.execute("SELECT recipe_text FROM runs")
    assert "seed: 5" in text
    again = make_plan(parse_recipe(text, file="r.yaml"), BENCH)
    assert [each.settings for each in again.rounds] == [each.settings for each in plan.rounds]
