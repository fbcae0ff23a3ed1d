"""bench probe, list and quiet, on simulated benches and on a dialect that doesn't fit."""

import json
import re
import time
from pathlib import Path

import pytest

from pulsetally.sequencer.dialects import parse_dialect
from pulsetally.sequencer.discovery import PATIENCE_SECONDS, identify_all
from pulsetally.sequencer.instruments import open_instruments, open_links, quiet_bench
from pulsetally.sequencer.probe import Check, probe
from pulsetally.simulators.simulate import SimulationSettings
from tests.drivers.misbehaving import server
from tests.simulated import Simulated, simulated
from tests.test_cli import pulsetally


def checks_of(table: Simulated) -> list[Check]:
    with open_links(table.bench) as (generator, oscilloscope):
        return list(probe(table.bench, generator, oscilloscope))


@pytest.mark.parametrize("family", ["scpi99", "perdiv", "stateword"])
def test_everything_holds_on_an_instrument_of_the_dialect(family: str) -> None:
    with simulated(SimulationSettings(family=family)) as table:
        checks = checks_of(table)
        assert [each for each in checks if not each.holds] == []
        assert {each.name for each in checks} >= {
            "identity",
            "round trip",
            "error queue",
            "output",
            "idle",
            *(["sending"] if family != "perdiv" else []),
            "armed",
            "record and line end",
        }
        assert table.truth("DELivered") == 0
        assert table.truth("MAXimum") == 0
        assert table.truth("OUTPut") == 0


def test_what_does_not_hold_comes_with_the_exact_exchange(tmp_path: Path) -> None:
    from importlib.resources import files

    text = (files("pulsetally.drivers") / "scpi99.yaml").read_text(encoding="utf-8")
    text = text.replace(":PULSe:WIDTh", ":PULSe:DURation").replace(
        "dialect: scpi99", "dialect: mine"
    )
    parse_dialect(text, file="mine.yaml")
    (tmp_path / "mine.yaml").write_text(text)
    with simulated() as table:
        bench = tmp_path / "bench.yaml"
        bench.write_text(table.bench.text.replace("dialect: scpi99", "dialect: mine.yaml"))
        done = pulsetally("bench", "probe", "bench.yaml", "--json", cwd=tmp_path)
        assert done.returncode == 1
        failed = [each for each in json.loads(done.stdout) if each["holds"] is False]
        assert table.truth("DELivered") == 0
        told = pulsetally("bench", "probe", "bench.yaml", cwd=tmp_path).stdout
    assert {each["name"] for each in failed} >= {"settings, channel 1", "width, channel 1"}
    (width,) = [each for each in failed if each["name"] == "width, channel 1"][:1]
    assert width["exchange"][0] == "> :SOURce1:PULSe:DURation 0.0001"
    assert any("-113" in line for line in width["exchange"])
    assert "> :SOURce1:PULSe:DURation 0.0001" in told


def test_quiet_works_while_somebody_else_holds_the_bench() -> None:
    with simulated() as table, open_instruments(table.bench) as instruments:
        instruments.generator.prepare()
        instruments.generator.switch(on=True)
        assert table.truth("OUTPut") == 1
        quiet_bench(table.bench)
        assert table.truth("OUTPut") == 0


def test_quiet_says_that_somebody_may_switch_the_output_on_again(tmp_path: Path) -> None:
    with simulated() as table, open_instruments(table.bench) as instruments:
        (tmp_path / "bench.yaml").write_text(table.bench.text)
        instruments.generator.prepare()
        instruments.generator.switch(on=True)
        done = pulsetally("bench", "quiet", "bench.yaml", cwd=tmp_path)
        assert table.truth("OUTPut") == 0
    assert done.returncode == 1
    assert "the output is off, and reads back as off" in done.stdout
    assert re.search(r"process \d+ .* may switch its output on again", done.stderr)


def test_a_bench_in_use_is_refused_naming_who_has_it(tmp_path: Path) -> None:
    with simulated() as table:
        (tmp_path / "bench.yaml").write_text(table.bench.text)
        with open_instruments(table.bench):
            done = pulsetally("run", "full_count", "--bench", "bench.yaml", cwd=tmp_path)
    assert done.returncode == 1
    assert "it is in use by process" in done.stderr


def test_a_list_never_waits_longer_than_its_patience(tmp_path: Path) -> None:
    with simulated() as table, server(lambda connection, line: None) as silent:
        addresses = [
            table.addresses.generator,
            silent,
            "TCPIP::127.0.0.1::1::SOCKET",
            "ASRL/dev/nothing::INSTR",
            "no address",
        ]
        began = time.monotonic()
        found = {each.address: each for each in identify_all(addresses)}
        assert time.monotonic() - began < PATIENCE_SECONDS + 0.5
        assert found[table.addresses.generator].identity.startswith("PULSETALLY,SIMULATED")
        assert "no answer within" in found[silent].note
        assert "nobody answers there" in found["TCPIP::127.0.0.1::1::SOCKET"].note
        assert "not asked unless --serial" in found["ASRL/dev/nothing::INSTR"].note
        assert "not a VISA address" in found["no address"].note
        (tmp_path / "bench.yaml").write_text(table.bench.text)
        listed = pulsetally("bench", "list", "bench.yaml", "--no-search", "--json", cwd=tmp_path)
    identities = [each["identity"] for each in json.loads(listed.stdout)]
    assert sorted(each.split(",")[1] for each in identities) == [
        "SIMULATED FUNCTION GENERATOR",
        "SIMULATED OSCILLOSCOPE",
    ]


def test_quiet_says_loudly_when_nobody_is_there(tmp_path: Path) -> None:
    with simulated() as table:
        (tmp_path / "bench.yaml").write_text(table.bench.text)
    done = pulsetally("bench", "quiet", "bench.yaml", cwd=tmp_path)
    assert done.returncode == 3
    assert "OUTPUTS NOT CONFIRMED OFF" in done.stderr
