"""The bench on pseudo-terminals: with plain PyVISA, and byte by byte as the line carries it."""

import json
import os
import select
import subprocess
import sys
from collections.abc import Iterator
from contextlib import closing

import numpy as np
import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.simulate import Addresses, SimulationSettings, main
from tests.simulators.counting import let_settle, wait_for
from tests.simulators.plain_visa import VisaLine
from tests.simulators.sockets import Client, served

LINEAR = CellDescription(remanent_polarization=1e-9)


class BareLine:
    """The client's end of a pseudo-terminal, opened without any line setting."""

    def __init__(self, address: str) -> None:
        path = address.removeprefix("ASRL").removesuffix("::INSTR")
        self._end = os.open(path, os.O_RDWR | os.O_NOCTTY)

    def __enter__(self) -> "BareLine":
        return self

    def __exit__(self, *_: object) -> None:
        os.close(self._end)

    def send(self, data: bytes) -> None:
        assert os.write(self._end, data) == len(data)

    def read_until(self, end: bytes) -> bytes:
        """Return what arrives until it ends so."""
        found = b""
        while not found.endswith(end):
            assert select.select([self._end], [], [], 10)[0], found
            found += os.read(self._end, 65_536)
        return found

    def read_exactly(self, count: int) -> bytes:
        found = b""
        while len(found) < count:
            assert select.select([self._end], [], [], 10)[0], found
            found += os.read(self._end, count - len(found))
        return found

    def is_silent(self) -> bool:
        return not select.select([self._end], [], [], 0)[0]


@pytest.fixture(scope="module")
def addresses() -> Iterator[Addresses]:
    settings = SimulationSettings(cell=LINEAR, family="perdiv", transport="serial")
    with served(settings) as found:
        yield found


@pytest.fixture
def control(addresses: Addresses) -> Iterator[Client]:
    with Client(addresses.control) as client:
        yield client


def let_it_notice(control: Client) -> None:
    """Return when the server has looked at everything that was there before the call."""
    for _ in range(5):
        control.ask("*OPC?")


def test_addresses_are_serial_and_the_control_port_is_not(addresses: Addresses) -> None:
    assert addresses.generator.startswith("ASRL/dev/")
    assert addresses.oscilloscope.startswith("ASRL/dev/")
    assert addresses.generator != addresses.oscilloscope
    assert addresses.control.startswith("TCPIP::127.0.0.1::")


def test_an_answer_comes_alone_without_echo_or_carriage_return(addresses: Addresses) -> None:
    with BareLine(addresses.generator) as line:
        line.send(b"*CLS\nSOUR1:BURS:NCYC 12\nSOUR1:BURS:NCYC?\n")
        assert line.read_until(b"\n") == b"12\n"
        assert line.is_silent()


def test_a_message_may_come_in_pieces(addresses: Addresses, control: Client) -> None:
    with BareLine(addresses.generator) as line:
        for piece in (b"SOUR1:BU", b"RS:NCYC 7;NC", b"YC?", b"\nSYST:", b"ERR?\n"):
            line.send(piece)
            let_it_notice(control)
        assert line.read_until(b'"\n') == b'7\n+0,"No error"\n'


def test_every_byte_passes(addresses: Addresses) -> None:
    with (
        closing(VisaLine(addresses.generator)) as generator,
        closing(VisaLine(addresses.oscilloscope)) as oscilloscope,
    ):
        # A slow ramp over the whole screen gives every code from 0 to 255.
        generator.write("*RST;:SOUR1:VOLT 10;:SOUR1:FREQ 50;:SOUR1:FUNC:PULS:WIDT 8E-3;TRAN 4E-3")
        generator.write("SOUR1:BURS:STAT ON;:OUTP1 ON")
        let_settle(generator)
        oscilloscope.write("*RST;:CHAN1:SCAL 1;OFFS 0.5;:TIM:SCAL 1E-3;POS 2E-3;:ACQ:POIN 4000")
        oscilloscope.write("TRIG:EDGE:SOUR EXT;:SING")
        wait_for(oscilloscope, "ACQ:STAT?", "2")
        generator.write("*TRG")
        wait_for(oscilloscope, "ACQ:STAT?", "4")
        fields = [float(field) for field in oscilloscope.ask("WAV:PRE?").split(",")]
        codes = np.frombuffer(oscilloscope.ask_block("WAV:DATA?"), np.uint8).astype(float)
        oscilloscope.write("WAV:FORM ASC")
        volts = [float(text) for text in oscilloscope.ask("WAV:DATA?").split(",")]
        assert set(codes) == set(range(256))
        assert (codes - fields[9]) * fields[7] + fields[8] == pytest.approx(volts, abs=1e-6)


def test_half_a_message_of_a_client_that_left_harms_nobody(
    addresses: Addresses, control: Client
) -> None:
    with BareLine(addresses.generator) as line:
        line.send(b"*RST;*CLS;*OPC?\n")
        assert line.read_until(b"\n") == b"1\n"
        line.send(b"SOUR1:BURS:NCYC 9;:TEXT 'never closed")
    let_it_notice(control)
    with BareLine(addresses.generator) as line:
        line.send(b"SOUR1:BURS:NCYC?;:SYST:ERR?\n")
        assert line.read_until(b"\n") == b'1;+0,"No error"\n'


def test_a_whole_message_of_a_client_that_left_is_followed(
    addresses: Addresses, control: Client
) -> None:
    with BareLine(addresses.generator) as line:
        line.send(b"SOUR1:BURS:NCYC 5\n")
    with BareLine(addresses.generator) as line:
        line.send(b"SOUR1:BURS:NCYC?\n")
        assert line.read_until(b"\n") == b"5\n"


def test_answers_nobody_read_are_not_the_next_clients(
    addresses: Addresses, control: Client
) -> None:
    with BareLine(addresses.generator) as line:
        line.send(b"*OPC?\n")
        assert line.read_until(b"\n") == b"1\n"
        line.send(b"*IDN?\n*IDN?\n*IDN?\n")
        let_it_notice(control)
    let_it_notice(control)
    with BareLine(addresses.generator) as line:
        line.send(b"SOUR1:BURS:MODE?\n")
        assert line.read_until(b"\n") == b"TRIG\n"


def test_a_client_that_never_reads_stops_nobody(addresses: Addresses, control: Client) -> None:
    with BareLine(addresses.oscilloscope) as line:
        line.send(b"*RST;:ACQ:POIN 1000000;:TRIG:EDGE:SOUR EXT;:TIM:SCAL 0.01;POS 0.05;:SING\n")
        line.send(b"ACQ:STAT?\n")
        assert line.read_until(b"\n") == b"2\n"
        with BareLine(addresses.generator) as generator:
            generator.send(b"SOUR1:BURS:STAT ON;*TRG;*OPC?\n")
            assert generator.read_until(b"\n") == b"1\n"
        control.write(":CLOC:ADV 0.3")
        line.send(b"ACQ:STAT?\n")
        assert line.read_until(b"\n") == b"4\n"
        # More than a pseudo-terminal holds, and more than the server keeps.
        line.send(b"WAV:DATA?\n" * 3)
        assert control.ask("*OPC?") == "1"
        assert line.read_exactly(9) == b"#71000000"
    let_it_notice(control)
    assert control.ask("*OPC?") == "1"
    with BareLine(addresses.oscilloscope) as line:
        line.send(b"ACQ:STAT?\n")
        assert line.read_until(b"\n") == b"4\n"


def test_faulty_settings_are_refused(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(ValueError, match="generator_port"):
        SimulationSettings(transport="serial", generator_port=5025)
    with pytest.raises(ValueError, match="scpi99, perdiv, stateword"):
        SimulationSettings(family="latin")
    with pytest.raises(SystemExit):
        main(["--serial", "--oscilloscope-port", "5025"])
    assert "oscilloscope_port" in capsys.readouterr().err


def test_the_program_serves_a_family_on_serial_lines() -> None:
    command = [sys.executable, "-m", "pulsetally.simulators.simulate", "--json", "--serial"]
    with subprocess.Popen(
        [*command, "--family", "stateword", "--until-stdin-closes"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
    ) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        addresses = json.loads(process.stdout.readline())
        with BareLine(addresses["oscilloscope"]) as line:
            line.send(b"*IDN?\nERROR?\n")
            assert line.read_until(b"No error\n") == (
                b"PULSETALLY,SIMULATED OSCILLOSCOPE STATEWORD,1,1\nERROR 0,No error\n"
            )
        process.stdin.close()
        assert process.wait(10) == 0
