"""The documents say what is there: every command, recipe, step, dialect, setting and file."""

import re
import subprocess
import sys
from pathlib import Path

import pytest

from pulsetally.sequencer.bench import parse_bench
from pulsetally.sequencer.dialects import shipped_dialects
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import parse_recipe, shipped_recipes
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.steps import PULSE_KINDS, STEP_MODELS
from pulsetally.simulators.table_file import parse_table, shipped_tables, table_text
from pulsetally.simulators.table_file_words import WORDS

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def fenced(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


@pytest.mark.parametrize("word", [*STEP_MODELS, *PULSE_KINDS, *shipped_recipes()])
def test_the_readme_names_every_step_pulse_setting_and_recipe(word: str) -> None:
    assert f"`{word}" in README or f"{word}:" in README


def test_the_readme_names_every_dialect() -> None:
    for name in shipped_dialects():
        assert f"`{name}`" in README


def test_the_readme_names_every_command() -> None:
    done = subprocess.run(
        [Path(sys.executable).with_name("pulsetally"), "--help"],
        capture_output=True,
        text=True,
        check=True,
        env={"COLUMNS": "200"},
    )
    commands = re.findall(r"^│ ([a-z]+) ", done.stdout, re.MULTILINE)
    assert len(commands) >= 7
    for command in commands:
        assert f"`pulsetally {command}" in README


def test_the_recipe_and_bench_of_the_readme_run_as_they_stand() -> None:
    recipes = [text for text in fenced("yaml") if text.startswith("recipe:")]
    benches = [text for text in fenced("yaml") if text.startswith("bench:")]
    assert (len(recipes), len(benches)) == (1, 1)
    bench = parse_bench(benches[0], file="README.md")
    assert len(make_plan(parse_recipe(recipes[0], file="README.md"), bench).rounds) == 20
    # The shipped bench and the one in the README differ in names and addresses only.
    assert bench.model.wiring == shipped_bench().model.wiring
    assert bench.model.limits == shipped_bench().model.limits


def test_the_readme_names_every_table_and_every_setting_of_one() -> None:
    for name in shipped_tables():
        assert f"`{name}`" in README
    section = README.partition("\n## The simulated bench\n")[2].partition("\n## ")[0]
    section = " ".join(section.split())
    words = [word for words in WORDS.values() for word in words.values()]
    for word in words:
        for part in (*word.path, *word.choices):
            assert re.search(rf"\b{part}\b", section), part


def test_the_table_file_of_the_readme_is_read_as_it_stands() -> None:
    (text,) = (text for text in fenced("yaml") if text.startswith("table:"))
    found = parse_table(text, file="README.md")
    assert found.settings.cell.fatigue is not None
    assert found.settings.wiring.clamp_volts == 15.0
    assert [fault.kind for fault in found.settings.faults] == ["late answer"]
    again = table_text(found.settings, title=found.title, purpose=found.purpose)
    assert parse_table(again, file="again.yaml") == found


def test_the_readme_sets_up_with_two_commands() -> None:
    commands = [text for text in fenced("sh") if "venv" in text]
    assert [text.count("\n") for text in commands] == [1, 1]
    ci = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    assert commands[1].strip() in ci


@pytest.mark.parametrize("folder", ["sequencer", "simulators"])
def test_the_developers_page_names_every_file(folder: str) -> None:
    for path in (ROOT / folder).glob("*.py"):
        if path.name == "__init__.py":
            continue
        group = re.sub(r"_.*", "_*.py", path.name)
        assert path.name in DEVELOPERS or group in DEVELOPERS, path.name
