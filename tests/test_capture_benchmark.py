"""What the benchmark of capturing counts: exchanges by the bench's clock, waveforms by bytes."""

import json
import subprocess
import sys
from pathlib import Path

import pytest
import sqlalchemy as sa

from pulsetally.sequencer import logbook as tables
from pulsetally.sequencer.logbook import Logbook

ROOT = Path(__file__).parents[1]
# The benchmarks belong to the checkout and not to the package.
ONE_WAY = """
import json, sys
from dataclasses import asdict
from pathlib import Path
from benchmarks.capture import measure
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import simulated

with simulated(SimulationSettings(exchange_seconds=5e-3)) as table:
    pace = measure(
        table, Path(sys.argv[1]), capture="train", case="9 pulses", rounds=1, bytes_a_second=1e4
    )
print(json.dumps(asdict(pace)))
"""


def test_the_transfer_of_waveforms_is_part_of_the_bench_time(tmp_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-c", ONE_WAY, str(tmp_path)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    pace = json.loads(done.stdout)
    book = Logbook(tmp_path / "logbook.db")
    shots = tables.shots.c
    rows = book.select(sa.select(shots.source_codes, shots.node_codes))
    book.close()
    # Both channels at two bytes a sample: scpi99's FORMat:DATA INTeger,16, kept as it came.
    assert pace["waveform_bytes"] == sum(len(codes) for row in rows for codes in row)
    assert pace["transfer_seconds"] == pytest.approx(pace["waveform_bytes"] / 1e4)
    assert pace["seconds"] > pace["transfer_seconds"] > 1
    assert pace["rounds_per_minute"] == pytest.approx(60 / pace["seconds"])
