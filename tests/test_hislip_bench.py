"""A run on instruments that speak HiSLIP: the programs as a person starts them."""

import json
import signal
import subprocess
import sys
from pathlib import Path

PROGRAM = Path(sys.executable).with_name("pulsetally")
RECIPE = """\
recipe: two counts
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us, rest: 1 ms}
steps:
  - repeat: 2
    steps:
      - preset: down
      - read: up
        until: 2.5 V
        at most: 60
"""


def test_a_run_on_a_bench_that_speaks_hislip(tmp_path: Path) -> None:
    (tmp_path / "counts.yaml").write_text(RECIPE, encoding="utf-8")
    with subprocess.Popen(
        [PROGRAM, "simulate", "--hislip", "--json", "--write-bench", "bench.yaml"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        text=True,
    ) as simulated:
        assert simulated.stdout is not None
        addresses = json.loads(simulated.stdout.readline())
        done = subprocess.run(
            [PROGRAM, "run", "counts.yaml", "--bench", "bench.yaml"],
            cwd=tmp_path,
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )
        simulated.send_signal(signal.SIGINT)
        assert simulated.wait(10) == 0
    assert done.returncode == 0, done.stderr
    bench = (tmp_path / "bench.yaml").read_text(encoding="utf-8")
    for name in ("generator", "oscilloscope"):
        assert "::hislip0," in addresses[name]
        assert addresses[name] in bench
    assert "2 of 2 rounds" in done.stdout
    assert "Outputs are off, and read back as off." in done.stdout


def test_two_transports_at_once_are_refused() -> None:
    for program in (
        [PROGRAM, "simulate"],
        [sys.executable, "-m", "pulsetally.simulators.simulate"],
    ):
        done = subprocess.run(
            [*program, "--serial", "--hislip"],
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )
        assert done.returncode == 2
        assert "--hislip" in done.stderr
        assert "--serial" in done.stderr
