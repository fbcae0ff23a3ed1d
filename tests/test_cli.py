"""The commands, as a person or a program runs them: real processes, real files."""

import json
import os
import resource
import signal
import socket
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from tests.drivers.misbehaving import server
from tests.simulated import PlainClient

PROGRAM = Path(sys.executable).with_name("pulsetally")


def pulsetally(*arguments: str, cwd: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [PROGRAM, *arguments],
        cwd=cwd,
        capture_output=True,
        text=True,
        timeout=60,
        env=os.environ | {"COLUMNS": "120"} | environment,
        check=False,
    )


@contextmanager
def running_bench(folder: Path) -> Iterator[dict[str, str]]:
    """Start 'pulsetally simulate'; it writes bench.yaml into the folder."""
    with subprocess.Popen(
        [PROGRAM, "simulate", "--json", "--write-bench", "bench.yaml"],
        cwd=folder,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        addresses: dict[str, str] = json.loads(process.stdout.readline())
        try:
            yield addresses
        finally:
            process.send_signal(signal.SIGINT)
            assert process.wait(10) == 0


def shown(folder: Path, which: str = "latest") -> dict[str, Any]:
    answer: dict[str, Any] = json.loads(pulsetally("show", which, "--json", cwd=folder).stdout)
    return answer


def ask(address: str, command: str) -> str:
    client = PlainClient(address)
    try:
        return client.ask(command)
    finally:
        client.close()


def test_a_rehearsal_says_what_it_found_and_where_it_is_kept(tmp_path: Path) -> None:
    done = pulsetally("rehearse", "full_count", "--set", "rounds=3", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "round 3 of 3: full after" in done.stdout
    assert "Full count: " in done.stdout
    assert "logbook.db as run 1" in done.stdout
    assert "Outputs are off, and read back as off." in done.stdout
    found = shown(tmp_path)
    assert found["state"] == "finished"
    assert found["full_count"]["rounds"] == len(found["rounds"]) == 3
    assert found["shots"] == 3 + sum(each["reads"][0]["count"] for each in found["rounds"])
    first = found["rounds"][0]
    assert first["settings"]["up.width"] == pytest.approx(1e-4)
    read = first["reads"][0]
    assert (first["round"], first["spoiled"], first["stepped"]) == (1, False, 0)
    assert (read["pulse"], read["threshold"], read["reached"]) == ("up", 2.5, True)
    assert len(read["end_voltages"]) == read["count"]
    assert read["end_voltages"][-1] > 2.5 >= read["end_voltages"][-2]
    assert read["count"] - 1 <= read["crossing"] <= read["count"]


def test_a_seed_gives_the_same_rehearsal_again(tmp_path: Path) -> None:
    for seed in ("7", "7", "8"):
        arguments = ("rehearse", "full_count", "--set", "rounds=1", "--seed", seed)
        assert pulsetally(*arguments, cwd=tmp_path).returncode == 0
    first, again, other = (
        [each["reads"] for each in shown(tmp_path, which)["rounds"]] for which in "123"
    )
    assert first == again
    assert first != other


def test_the_logbook_is_where_option_or_environment_say(tmp_path: Path) -> None:
    arguments = ("rehearse", "full_count", "--set", "rounds=1")
    assert pulsetally(*arguments, "--logbook", "a.db", cwd=tmp_path).returncode == 0
    assert pulsetally(*arguments, cwd=tmp_path, PULSETALLY_LOGBOOK="b.db").returncode == 0
    assert sorted(path.name for path in tmp_path.glob("*.db")) == ["a.db", "b.db"]


BAD_RECIPE = """\
recipe: three mistakes
pulses:
  down: {level: -5 V, width: 2 V}
  up: {level: 4 V, width: 100 us}
steps:
  - prest: down
  - read: upp
    until: 2.5 V
    at most: 60
"""


def test_every_mistake_of_recipe_and_bench_is_told_before_anything_is_touched(
    tmp_path: Path,
) -> None:
    (tmp_path / "bad.yaml").write_text(BAD_RECIPE)

    def touched(connection: object, line: bytes) -> None:
        raise AssertionError("an instrument was asked something")

    with server(touched) as address:
        text = f"""\
bench: one mistake
generator: {{address: "{address}"}}
oscilloscope: {{address: "{address}"}}
wiring: {{series resistance: 220 kV}}
limits: {{source: 10 V, node: 6 V}}
cell: {{area: 10000 um2, thickness: 150 nm}}
"""
        (tmp_path / "bench.yaml").write_text(text)
        done = pulsetally("run", "bad.yaml", "--bench", "bench.yaml", cwd=tmp_path)
    assert done.returncode == 2
    lines = done.stderr.splitlines()
    assert [line.split(" ")[0] for line in lines] == [
        "bad.yaml:3:30",
        "bad.yaml:6:5",
        "bad.yaml:7:11",
        "bench.yaml:4:29",
    ]
    assert all("To fix it, " in line for line in lines)
    assert not (tmp_path / "logbook.db").exists()
    for name in ("bad.yaml", "bench.yaml"):
        assert pulsetally("check", name, cwd=tmp_path).returncode == 2


def test_check_shows_the_volts_along_the_way(tmp_path: Path) -> None:
    done = pulsetally("check", "width_sweep", cwd=tmp_path)
    assert done.returncode == 0
    assert "15 rounds" in done.stdout
    assert "3.914 V" in done.stdout
    plan = json.loads(pulsetally("check", "width_sweep", "--json", cwd=tmp_path).stdout)
    assert plan["rounds"] == 15
    assert plan["pulses"][1]["panel"] == 4.0


def test_a_pulse_above_the_limits_is_refused(tmp_path: Path) -> None:
    done = pulsetally("rehearse", "full_count", "--set", "up.level=7V", cwd=tmp_path)
    assert done.returncode == 2
    assert "beyond the node limit of 6 V" in done.stderr
    assert "Traceback" not in done.stderr


def bench_at(folder: Path, generator: str, oscilloscope: str) -> None:
    from pulsetally.sequencer.rehearsal import shipped_bench

    text = shipped_bench().text.replace("TCPIP::127.0.0.1::5025::SOCKET", generator)
    text = text.replace("TCPIP::127.0.0.1::5026::SOCKET", oscilloscope)
    (folder / "bench.yaml").write_text(text)


def test_an_instrument_that_is_not_there_gives_a_sentence(tmp_path: Path) -> None:
    bench_at(tmp_path, "TCPIP::127.0.0.1::1::SOCKET", "TCPIP::127.0.0.1::2::SOCKET")
    done = pulsetally("run", "full_count", "--bench", "bench.yaml", cwd=tmp_path)
    assert done.returncode == 1
    assert "TCPIP::127.0.0.1::1::SOCKET: nobody answers there" in done.stderr
    assert "check that the instrument is on" in done.stderr
    assert "Traceback" not in done.stderr + done.stdout


def test_something_else_at_the_address_gives_a_sentence(tmp_path: Path) -> None:

    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"220 mail ready\x1b[2J\n")

    with server(answer) as address:
        bench_at(tmp_path, address, address)
        done = pulsetally("run", "full_count", "--bench", "bench.yaml", cwd=tmp_path)
    assert done.returncode == 1
    assert "is not an identity" in done.stderr
    assert "Traceback" not in done.stderr + done.stdout
    assert "\x1b" not in done.stderr + done.stdout


def test_ctrl_c_leaves_the_outputs_off_and_what_was_measured(tmp_path: Path) -> None:
    with running_bench(tmp_path) as addresses:
        with subprocess.Popen(
            [PROGRAM, "run", "full_count", "--bench", "bench.yaml", "--set", "rounds=5000"],
            cwd=tmp_path,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        ) as process:
            assert process.stdout is not None
            while "round 2 of" not in process.stdout.readline():
                assert process.poll() is None
            assert shown(tmp_path)["state"] == "running"
            process.send_signal(signal.SIGINT)
            rest, complaints = process.communicate(timeout=20)
        assert process.returncode == 1
        assert "stopping after this round" in rest
        assert "Outputs are off, and read back as off." in rest
        assert "the run stopped: Ctrl-C" in complaints
        assert ask(addresses["generator"], ":OUTPut1:STATe?") == "0"
        assert float(ask(addresses["control"], ":TRUTh:OUTPut?")) == 0
    found = shown(tmp_path)
    assert found["state"] == "stopped"
    assert found["outputs_off"] is True
    assert found["full_count"]["rounds"] >= 2
    assert not any(each["spoiled"] for each in found["rounds"])


def test_a_killed_run_is_seen_as_interrupted(tmp_path: Path) -> None:
    with running_bench(tmp_path):
        with subprocess.Popen(
            [PROGRAM, "run", "full_count", "--bench", "bench.yaml", "--set", "rounds=5000"],
            cwd=tmp_path,
            stdout=subprocess.PIPE,
            text=True,
        ) as process:
            assert process.stdout is not None
            while "round 1 of" not in process.stdout.readline():
                assert process.poll() is None
            process.kill()
        found = shown(tmp_path)
    assert found["state"] == "interrupted"
    assert found["shots"] >= 9
    assert "interrupted" in pulsetally("runs", cwd=tmp_path).stdout


def test_a_rehearsal_leaves_no_process_behind(tmp_path: Path) -> None:
    with subprocess.Popen(
        [PROGRAM, "rehearse", "full_count", "--set", "rounds=5000"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        while "round 1 of" not in process.stdout.readline():
            assert process.poll() is None
        children = f"/proc/{process.pid}/task/{process.pid}/children"
        (child,) = (int(each) for each in Path(children).read_text().split())
        process.kill()
    deadline = time.monotonic() + 10
    while Path(f"/proc/{child}").exists():
        assert time.monotonic() < deadline, "the simulated bench outlived a killed rehearsal"
        time.sleep(0.02)


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        (("show",), 2, "there is no logbook here"),
        (("rehearse", "nothing_such"), 2, "can't be read: No such file"),
        (("rehearse", "full_count", "--set", "rounds"), 2, "this is not NAME=VALUE"),
        (("rehearse", "full_count", "--logbook", "/proc/x.db"), 2, "the logbook can't be"),
        (("run", "full_count", "--bench", "nothing.yaml"), 2, "the bench file can't be read"),
    ],
)
def test_wrong_input_gives_a_sentence(
    tmp_path: Path, arguments: tuple[str, ...], status: int, words: str
) -> None:
    done = pulsetally(*arguments, cwd=tmp_path)
    assert done.returncode == status
    assert words in done.stderr
    assert "Traceback" not in done.stderr + done.stdout


def test_a_file_that_is_no_logbook_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "notes.txt"
    path.write_text("these are my notes, not a logbook\n" * 100)
    done = pulsetally("rehearse", "full_count", "--logbook", "notes.txt", cwd=tmp_path)
    assert done.returncode == 2
    assert "that it is a logbook" in done.stderr
    assert path.read_text().startswith("these are my notes")


def test_help_is_quick_and_names_every_command(tmp_path: Path) -> None:
    done = pulsetally("--help", cwd=tmp_path)
    for command in ("check", "rehearse", "run", "runs", "show", "simulate"):
        assert command in done.stdout
    heavy = ["numpy", "scipy", "pydantic", "sqlalchemy", "pyvisa", "ruamel", "rich.live"]
    code = (
        "import sys; sys.argv = ['pulsetally', '--help']\n"
        "from pulsetally.sequencer.cli import main\n"
        "try: main()\n"
        f"except SystemExit: print([m for m in {heavy!r} if m in sys.modules], file=sys.stderr)"
    )
    probed = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, cwd=tmp_path, check=True
    )
    assert probed.stderr.strip() == "[]"


def test_a_view_that_can_not_be_written_ends_the_run_in_order(tmp_path: Path) -> None:
    with running_bench(tmp_path) as addresses:
        with Path("/dev/full").open("w") as full:
            done = subprocess.run(
                [PROGRAM, "run", "full_count", "--bench", "bench.yaml"],
                cwd=tmp_path,
                stdout=full,
                stderr=subprocess.PIPE,
                text=True,
                timeout=60,
                check=False,
            )
        assert ask(addresses["generator"], ":OUTPut1:STATe?") == "0"
    assert done.returncode == 1
    assert "the view could not be written (No space left on device)" in done.stderr
    assert "Traceback" not in done.stderr
    found = shown(tmp_path)
    assert (found["state"], found["outputs_off"]) == ("stopped", True)


def test_outputs_that_are_not_known_to_be_off_are_the_last_word(tmp_path: Path) -> None:
    with subprocess.Popen(
        [PROGRAM, "simulate", "--json", "--write-bench", "bench.yaml"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        text=True,
    ) as doomed:
        assert doomed.stdout is not None
        doomed.stdout.readline()
        with subprocess.Popen(
            [PROGRAM, "run", "full_count", "--bench", "bench.yaml", "--set", "rounds=5000"],
            cwd=tmp_path,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        ) as process:
            assert process.stdout is not None
            while "round 1 of" not in process.stdout.readline():
                assert process.poll() is None
            doomed.kill()
            _, complaints = process.communicate(timeout=40)
    assert process.returncode == 3
    last = complaints.splitlines()[-1]
    assert last.startswith("OUTPUTS NOT CONFIRMED OFF: the function generator at TCPIP::127.0.0.1")
    assert last.endswith("Switch its output off by hand before you touch the cell.")


def test_another_database_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "theirs.db"
    with sqlite3.connect(path) as theirs:
        theirs.execute("create table runs (distance real)")
    theirs.close()
    before = path.read_bytes()
    done = pulsetally("rehearse", "full_count", "--logbook", "theirs.db", cwd=tmp_path)
    assert done.returncode == 2
    assert "is not a logbook; nothing was changed" in done.stderr
    assert path.read_bytes()[100:] == before[100:]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("check", "ful_count"), "or 'full_count'"),
        (("rehearse", "width_sweep", "--set", "up.width=80us"), "'up.width' is swept here"),
        (("rehearse", "full_count", "--set", "rounds=-2"), "--set rounds=-2"),
        (("rehearse", "bench.yaml"), "this is a bench file, not a recipe"),
        (("run", "full_count", "--bench", "recipe.yaml"), "this is a recipe, not a bench file"),
    ],
)
def test_hurried_mistakes_are_understood(
    tmp_path: Path, arguments: tuple[str, ...], words: str
) -> None:
    bench_at(tmp_path, "TCPIP::127.0.0.1::1::SOCKET", "TCPIP::127.0.0.1::2::SOCKET")
    (tmp_path / "recipe.yaml").write_text("recipe: one\nsteps: [{preset: down}]\n")
    done = pulsetally(*arguments, cwd=tmp_path)
    assert done.returncode == 2
    assert words in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_a_disk_that_fills_up_ends_the_run_safely_and_says_why(tmp_path: Path) -> None:
    def limit() -> None:
        # No file may grow beyond this: what a full disk looks like to the logbook.
        resource.setrlimit(resource.RLIMIT_FSIZE, (800_000, 800_000))

    with running_bench(tmp_path) as addresses:
        done = subprocess.run(
            [PROGRAM, "run", "full_count", "--bench", "bench.yaml"],
            cwd=tmp_path,
            capture_output=True,
            text=True,
            timeout=60,
            preexec_fn=limit,
            check=False,
        )
        assert ask(addresses["generator"], ":OUTPut1:STATe?") == "0"
    assert done.returncode == 1
    assert "the run failed: " in done.stderr
    assert "the logbook can't be written" in done.stderr
    assert "Outputs are off, and read back as off." in done.stdout
    assert "Traceback" not in done.stderr
    # What was committed before is there.
    assert shown(tmp_path)["shots"] > 5


def test_a_number_without_end_is_a_mistake_and_no_traceback(tmp_path: Path) -> None:
    (tmp_path / "r.yaml").write_text(
        "recipe: r\npulses: {down: {level: -5 V, width: 2 ms}}\n"
        f"steps:\n  - {{repeat: {'9' * 400}, steps: [{{preset: down}}]}}\n"
    )
    done = pulsetally("check", "r.yaml", cwd=tmp_path)
    assert done.returncode == 2
    assert "not a finite number" in done.stderr
    assert "Traceback" not in done.stderr
