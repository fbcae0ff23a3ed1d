"""Whoever answers: a person at a real terminal, and nobody where there is none."""

import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.sequencer.running import PULSES
from tests.simulated import Simulated, simulated
from tests.test_terminal import PROGRAM, Terminal


@pytest.fixture(scope="module")
def table() -> Iterator[Simulated]:
    with simulated() as running:
        yield running


@pytest.fixture
def files(table: Simulated, tmp_path: Path) -> Path:
    """Write a recipe and a bench file; return their folder."""
    (tmp_path / "ask.yaml").write_text(
        PULSES + "  - preset: down\n  - {ask: Change the cell., within: 5 s}\n  - preset: down\n"
    )
    (tmp_path / "bench.yaml").write_text(table.bench.text)
    return tmp_path


RUN = "run ask.yaml --bench bench.yaml"


@pytest.mark.skipif(shutil.which("tmux") is None, reason="tmux is not installed")
def test_a_run_waits_for_enter_at_a_real_terminal(table: Simulated, files: Path) -> None:
    recipe = files / "ask.yaml"
    recipe.write_text(recipe.read_text().replace("5 s", "100 h"))
    terminal = Terminal(files)
    try:
        terminal.start(100, 40)
        # A key pressed before the question is no answer to it: it is typed with the command.
        terminal.type(f"{PROGRAM} {RUN}; echo status=$?", "Enter", "Enter")
        screen = terminal.wait_for("a person is needed")
        assert "Change the cell. Then press Enter." in screen
        assert table.truth("OUTPut") == 0
        terminal.type("Enter")
        screen = terminal.wait_for("status=0")
        assert "round 1: answered" in screen
        assert "Outputs are off, and read back as off." in screen
    finally:
        terminal.end()


def test_what_is_piped_in_is_no_answer(table: Simulated, files: Path) -> None:
    done = subprocess.run(
        [PROGRAM, *RUN.split()],
        cwd=files,
        input="\n\n\n",
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 1, done.stderr
    assert "round 1: no answer" in done.stdout
    assert "nobody answered: Change the cell." in done.stdout + done.stderr
    assert table.truth("OUTPut") == 0


@pytest.mark.skipif(shutil.which("tmux") is None, reason="tmux is not installed")
def test_a_program_in_the_background_does_not_read_from_its_terminal(tmp_path: Path) -> None:
    script = tmp_path / "look.py"
    script.write_text(
        "import time\n"
        "from pathlib import Path\n"
        "from pulsetally.sequencer.person import whoever_is_there\n"
        "person = whoever_is_there()\n"
        "for _ in range(10):\n"
        "    said = person.answered()\n"
        "    time.sleep(0.1)\n"
        f"Path({str(tmp_path / 'end')!r}).write_text(f'{{type(person).__name__}} {{said}}')\n"
    )
    terminal = Terminal(tmp_path)
    try:
        terminal.start(80, 24)
        # The shell gives jobs groups of their own; what is typed while it is busy can be read.
        terminal.type(f"set -m; {sys.executable} look.py & sleep 2", "Enter")
        terminal.type("Enter", "Enter")
        terminal.type("cat end; echo; echo over", "Enter")
        assert "AtTerminal False" in terminal.wait_for("\nover")
    finally:
        terminal.end()
