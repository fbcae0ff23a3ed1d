"""The view in a real terminal: tmux runs the program, and the screen is read back."""

import shutil
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

PROGRAM = Path(sys.executable).with_name("pulsetally")

pytestmark = pytest.mark.skipif(shutil.which("tmux") is None, reason="tmux is not installed")


class Terminal:
    """A tmux server of its own, with one window."""

    def __init__(self, folder: Path) -> None:
        self._tmux = ["tmux", "-S", str(folder / "socket"), "-f", "/dev/null"]
        self._folder = folder

    def start(self, columns: int, rows: int, environment: str = "") -> None:
        size = ["-x", str(columns), "-y", str(rows)]
        shell = f"cd {self._folder} && {environment} exec sh"
        self._run("new-session", "-d", *size, shell)

    def type(self, *keys: str) -> None:
        self._run("send-keys", *keys)

    def resize(self, columns: int, rows: int) -> None:
        self._run("resize-window", "-x", str(columns), "-y", str(rows))

    def screen(self) -> str:
        return self._run("capture-pane", "-p")

    def wait_for(self, words: str, seconds: float = 30.0) -> str:
        deadline = time.monotonic() + seconds
        while words not in (screen := self.screen()):
            assert time.monotonic() < deadline, f"{words!r} did not appear:\n{screen}"
            time.sleep(0.05)
        return screen

    def end(self) -> None:
        subprocess.run([*self._tmux, "kill-server"], capture_output=True, check=False)

    def _run(self, *arguments: str) -> str:
        done = subprocess.run(
            [*self._tmux, *arguments], capture_output=True, text=True, check=True, timeout=20
        )
        return done.stdout


@pytest.fixture
def terminal(tmp_path: Path) -> Iterator[Terminal]:
    opened = Terminal(tmp_path)
    yield opened
    opened.end()


def rehearse(rounds: int) -> str:
    return f"{PROGRAM} rehearse full_count --set rounds={rounds}; echo status=$?"


@pytest.mark.parametrize(("columns", "rows"), [(80, 24), (120, 40)])
def test_the_view_shows_progress_pulses_and_counts(
    terminal: Terminal, columns: int, rows: int
) -> None:
    terminal.start(columns, rows)
    terminal.type(rehearse(2000), "Enter")
    terminal.wait_for("full count")
    screen = terminal.wait_for("threshold 2.5 V")
    assert "round " in screen
    assert "of 2000" in screen
    assert " left" in terminal.wait_for("s left")
    assert "pulses so far" in screen
    assert max(len(line) for line in screen.splitlines()) <= columns
    terminal.resize(columns + 10, rows + 3)
    terminal.wait_for("of 2000")
    terminal.type("C-c")
    screen = terminal.wait_for("status=1")
    assert "Outputs are off, and read back as off." in screen
    assert "Full count: " in screen


def test_a_whole_run_ends_with_its_answer_on_the_screen(terminal: Terminal) -> None:
    terminal.start(100, 30)
    terminal.type(rehearse(3), "Enter")
    screen = terminal.wait_for("status=0")
    assert "standard deviation of 3 rounds" in screen
    assert "logbook.db as run 1" in screen


@pytest.mark.parametrize("environment", ["TERM=dumb", "NO_COLOR=1"])
def test_terminals_that_can_do_less(terminal: Terminal, environment: str) -> None:
    terminal.start(80, 24, f"export {environment};")
    terminal.type(rehearse(2), "Enter")
    screen = terminal.wait_for("status=0")
    assert "standard deviation of 2 rounds" in screen
