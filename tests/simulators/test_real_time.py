"""A bench that keeps real time, as a process of its own and by a clock that tests can turn."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from pulsetally.sequencer.bench import load_bench
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.clock import (
    LONGEST_SLEEP_SECONDS,
    BenchEndsError,
    VirtualClock,
    WallClock,
)
from pulsetally.simulators.simulate import Bench, SimulationSettings, chosen_settings
from pulsetally.simulators.table import Table
from tests.simulated import PlainClient
from tests.simulators.talking import Line


class Wall:
    """A clock on the wall that goes on when somebody sleeps, or is told to."""

    def __init__(self) -> None:
        self.seconds = 1000.0
        self.slept: list[float] = []

    def now(self) -> float:
        return self.seconds

    def sleep(self, seconds: float) -> None:
        self.slept.append(seconds)
        self.seconds += seconds


def clock_on(wall: Wall) -> WallClock:
    table = Table(CellDescription(), Wiring())
    return WallClock(table, wall=wall.now, sleep=wall.sleep)


def test_a_message_after_two_seconds_finds_two_seconds_passed() -> None:
    wall = Wall()
    clock = clock_on(wall)
    kept: list[float] = []
    clock.call_at(0.5, lambda: kept.append(clock.now))
    wall.seconds += 2.0
    assert clock.now == 0.0
    clock.catch_up()
    assert clock.now == 2.0
    assert kept == [0.5]
    assert wall.slept == []


def test_waiting_for_an_instant_takes_as_long_as_it_is_away() -> None:
    wall = Wall()
    clock = clock_on(wall)
    clock.advance_to(0.75)
    assert sum(wall.slept) == pytest.approx(0.75)
    assert clock.now == pytest.approx(0.75)


def test_an_instant_that_has_passed_is_not_waited_for() -> None:
    wall = Wall()
    clock = clock_on(wall)
    wall.seconds += 3.0
    clock.advance_to(1.0)
    assert wall.slept == []
    assert clock.now == 3.0


def test_waiting_ends_soon_after_it_is_asked_to() -> None:
    wall = Wall()
    clock = clock_on(wall)
    asked_seconds = wall.seconds + 3.0
    clock.is_to_end = lambda: wall.seconds >= asked_seconds
    with pytest.raises(BenchEndsError):
        clock.advance_to(60.0)
    assert asked_seconds <= wall.seconds <= asked_seconds + LONGEST_SLEEP_SECONDS


def test_a_virtual_clock_has_nothing_to_catch_up_with() -> None:
    clock = VirtualClock(Table(CellDescription(), Wiring()))
    clock.catch_up()
    assert clock.now == 0.0


def test_real_time_cannot_be_advanced() -> None:
    control = Line(Bench(SimulationSettings(real_time=True)).control)
    assert control.say(":CLOC:ADV 5") == ""
    entry = control.say(":SYST:ERR?")
    assert entry.startswith("-221,")
    assert "the clock follows real time; wait instead" in entry
    assert float(control.say(":CLOC:TIME?")) < 5


def test_real_time_is_chosen_by_a_flag_alone() -> None:
    for flag in (True, False):
        _, settings = chosen_settings(None, family=None, seed=None, domains=None, real_time=flag)
        assert settings.real_time is flag


@contextmanager
def served(*options: str) -> Iterator[dict[str, str]]:
    """Serve a bench in a process of its own; give the addresses that it announces."""
    module = "pulsetally.simulators.simulate"
    with subprocess.Popen(
        [sys.executable, "-m", module, "--json", "--until-stdin-closes", *options],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        try:
            yield json.loads(process.stdout.readline())
        finally:
            process.stdin.close()
            assert process.wait(10) == 0


def test_a_burst_takes_its_time() -> None:
    with served("--real-time") as addresses:
        generator, control = (PlainClient(addresses[name]) for name in ("generator", "control"))
        try:
            generator.write(":PULS:WIDT 1E-4;PER 0.05;COUN 9")
            assert generator.ask("*OPC?") == "1"
            began = time.monotonic()
            first = float(control.ask(":CLOC:TIME?"))
            # Eight periods of 50 ms and one pulse.
            assert generator.ask(":INIT;*TRG;*OPC?") == "1"
            taken = time.monotonic() - began
            assert taken >= 0.4
            assert generator.ask(":PULS:COUN:SENT?") == "9"
            passed = float(control.ask(":CLOC:TIME?")) - first
            # Each of the two was looked at a little later than the other.
            assert 0.4 <= passed <= time.monotonic() - began + 0.01
        finally:
            generator.close()
            control.close()


def test_the_bench_file_of_real_time_names_no_clock(tmp_path: Path) -> None:
    file = tmp_path / "bench.yaml"
    command = Path(sys.executable).with_name("pulsetally")
    with subprocess.Popen(
        [command, "simulate", "--real-time", "--write-bench", file, "--json"],
        stdout=subprocess.PIPE,
        text=True,
    ) as process:
        assert process.stdout is not None
        addresses = json.loads(process.stdout.readline())
        process.terminate()
        assert process.wait(10) == 0
    model = load_bench(file).model
    assert model.generator.address == addresses["generator"]
    assert model.clock is None


def end_by(process: subprocess.Popen[str], way: str) -> None:
    if way == "closed input":
        assert process.stdin is not None
        process.stdin.close()
    else:
        process.send_signal(signal.SIGINT if way == "Ctrl-C" else signal.SIGTERM)


@pytest.mark.parametrize("way", ["Ctrl-C", "terminated", "closed input"])
@pytest.mark.parametrize("busy", ["waits", "computes"])
def test_a_bench_ends_when_asked_even_in_a_long_message(busy: str, way: str) -> None:
    flags = ["--real-time"] if busy == "waits" else []
    module = "pulsetally.simulators.simulate"
    with subprocess.Popen(
        [sys.executable, "-m", module, "--json", "--until-stdin-closes", "--pulses=1", *flags],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        # A bench that ends in the middle of a message leaves a socket to the system.
        env=os.environ | {"PYTHONWARNINGS": "ignore::ResourceWarning"},
    ) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        addresses = json.loads(process.stdout.readline())
        clients = [PlainClient(addresses[name]) for name in ("generator", "oscilloscope")]
        generator, oscilloscope = clients
        no_error = '0,"No error"'
        # What comes in one piece is followed in one go: with the answer to the first message
        # the second one has begun.
        if busy == "waits":
            generator.write(":PULS:PER 100;WIDT 60;:OUTP ON")
            assert generator.ask(":INIT;*TRG;:SYST:ERR?\n*OPC?") == no_error
        else:
            generator.write(":PULS:PER 1E-6;WIDT 5E-7;COUN 1E9;:OUTP ON;*WAI")
            assert generator.ask(":INIT;*TRG;:SYST:ERR?") == no_error
            setting = ":SWE:TINT 0.1;POIN 10000;:TRIG:SOUR IMM"
            assert oscilloscope.ask(f"{setting};:INIT;:SYST:ERR?\n*OPC?") == no_error
        end_by(process, way)
        try:
            assert process.wait(10) == 0
        finally:
            process.kill()
        assert process.stderr.read() == ""
        for client in clients:
            client.close()
