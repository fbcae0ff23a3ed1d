"""The served bench over real sockets, with a client that knows nothing but sockets."""

import json
import math
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator

import numpy as np
import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.simulate import Addresses, SimulationSettings, main
from tests.simulators.sockets import Client, served
from tests.simulators.talking import TRUE

LINEAR = CellDescription(remanent_polarization=1e-9)


@pytest.fixture(scope="module")
def addresses() -> Iterator[Addresses]:
    with served(SimulationSettings(cell=LINEAR, digitizer=TRUE, seed=3)) as found:
        yield found


@pytest.fixture
def generator(addresses: Addresses) -> Iterator[Client]:
    with Client(addresses.generator) as client:
        client.write("*RST;*CLS")
        yield client


@pytest.fixture
def oscilloscope(addresses: Addresses) -> Iterator[Client]:
    with Client(addresses.oscilloscope) as client:
        client.write("*RST;*CLS")
        yield client


@pytest.fixture
def control(addresses: Addresses) -> Iterator[Client]:
    with Client(addresses.control) as client:
        client.write("*CLS")
        yield client


def test_each_instrument_tells_who_it_is(
    generator: Client, oscilloscope: Client, control: Client
) -> None:
    names = [client.ask("*IDN?").split(",")[1] for client in (generator, oscilloscope, control)]
    assert names == [
        "SIMULATED FUNCTION GENERATOR",
        "SIMULATED OSCILLOSCOPE",
        "SIMULATED BENCH CONTROL",
    ]


def test_a_setting_an_error_and_its_number(generator: Client) -> None:
    generator.write(":SOUR1:PULS:WIDT 250 US")
    assert float(generator.ask(":SOUR1:PULS:WIDT?")) == pytest.approx(250e-6)
    generator.write(":SOUR1:PULS:WIDE 1")
    assert generator.ask(":SYST:ERR?").startswith("-113,")
    assert generator.ask(":SYST:ERR?") == '0,"No error"'


def test_no_delay_is_set_on_both_ways(generator: Client) -> None:
    # Write, write, query: with a delayed segment this took 44 ms a time on loopback.
    generator.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    for _ in range(20):
        generator.write("*CLS")
        generator.write("*CLS")
        assert generator.ask("*OPC?") == "1"


def test_clients_share_the_instrument_and_not_the_message(
    addresses: Addresses, generator: Client
) -> None:
    with Client(addresses.generator) as other:
        generator.socket.sendall(b":SOUR1:PULS:COUN 1")
        other.write(":SOUR1:PULS:COUN 3")
        assert other.ask(":SOUR1:PULS:COUN?") == "3"
        generator.write("7")
        assert generator.ask(":SOUR1:PULS:COUN?") == "17"


def test_half_a_message_of_a_client_that_left_harms_nobody(
    addresses: Addresses, generator: Client
) -> None:
    with Client(addresses.generator) as other:
        other.socket.sendall(b":SOUR1:PULS:COUN 9;:TEXT 'never closed")
    with Client(addresses.generator) as other:
        other.socket.sendall(b"*IDN?\n*IDN?\n*IDN?\n")  # and answers that nobody reads
    assert generator.ask("*OPC?") == "1"
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '1;0,"No error"'


def test_every_exchange_takes_a_millisecond(control: Client) -> None:
    before = float(control.ask(":CLOC:TIME?"))
    after = float(control.ask(":CLOC:TIME?"))
    assert after - before == pytest.approx(1e-3, abs=1e-9)


# A: closed form of an RC charge from a ramp of negligible length (half an edge is
# 62.5 ns against tau = 66 us), through the whole path: sockets, SCPI, relay, trigger,
# record, block. Noise is 1.5 codes of 16 V / 4096 (channel 1) and 8 V / 4096 (channel 2).
def test_a_whole_shot_follows_the_closed_form(
    generator: Client, oscilloscope: Client, control: Client
) -> None:
    generator.write(":SOUR1:FUNC:SHAP PULS;:OUTP1:LOAD INF;:SOUR1:VOLT:HIGH 4;LOW 0")
    generator.write(":SOUR1:PULS:POL NORM;WIDT 1E-4;PER 1E-3;COUN 1;TRAN 1E-7;TRAN:TRA 1E-7")
    generator.write(":TRIG:SOUR BUS;:OUTP1 ON")
    while generator.ask(":STAT:OPER:COND?") != "0":  # the relay settles
        pass
    oscilloscope.write(":SENS1:VOLT:RANG:PTP 16;OFFS 0;:SENS2:VOLT:RANG:PTP 8;OFFS 2")
    oscilloscope.write(":SENS:SWE:POIN 2000;TINT 1E-7;OREF:LOC 0.1")
    oscilloscope.write(":TRIG:SOUR INT1;LEV 2;SLOP POS;:FORM:DATA INT,16;:FORM:BORD NORM;:INIT")
    while int(oscilloscope.ask(":STAT:OPER:COND?")) & 32 == 0:
        pass
    generator.write(":INIT;*TRG")
    assert generator.ask("*OPC?") == "1"
    while int(oscilloscope.ask(":STAT:OPER:COND?")) & 16:
        pass
    volts = []
    for channel in (1, 2):
        words = oscilloscope.ask(f":TRAC:DATA:PRE? CHAN{channel}").split()
        assert words[words.index("SIZE") + 1] == "2000"
        first = float(words[words.index("OFFSet") + 1])
        scale, offset = (float(words[i]) for i in (words.index("EXPLicit") + 2, -5))
        codes = np.frombuffer(oscilloscope.ask_block(f":TRAC:DATA? CHAN{channel}"), ">i2")
        volts.append(codes * scale + offset)
    times = first + 1e-7 * np.arange(2000)

    high = float(generator.ask(":SOUR1:VOLT:HIGH?"))
    series, probe = 220_050.0, 10e6
    farads = float(control.ask(":TRUT:CAP?"))
    tau = farads * series * probe / (series + probe)
    final = high * probe / (series + probe)
    on_top = (times > 1e-6) & (times < 99e-6)
    charge = final * (1 - np.exp(-times[on_top] / tau))
    after = times > 101e-6
    peak = final * (1 - math.exp(-100e-6 / tau))
    discharge = peak * np.exp(-(times[after] - 100e-6) / tau)
    for where, expected in ((on_top, charge), (after, discharge)):
        residual = volts[1][where] - expected
        noise = 1.5 * 8 / 4096
        assert np.std(residual) == pytest.approx(noise, rel=0.15)
        assert abs(np.mean(residual)) < 5 * noise / math.sqrt(residual.size) + 2e-4
    assert np.mean(volts[0][on_top]) == pytest.approx(high, abs=1.5e-3)
    assert float(control.ask(":TRUT:MAX?")) == pytest.approx(high)
    for client in (generator, oscilloscope, control):
        assert client.ask(":SYST:ERR?") == '0,"No error"'


# design.md section 6: the default cell reaches 2.5 V in about nine pulses after a preset.
def test_the_default_cell_is_full_after_about_nine_pulses() -> None:
    with (
        served(SimulationSettings()) as addresses,
        Client(addresses.generator) as generator,
        Client(addresses.oscilloscope) as oscilloscope,
    ):
        generator.write(":VOLT:HIGH 0;LOW -5;:PULS:POL INV;WIDT 2E-3;PER 4E-3")
        generator.write(":PULS:TRAN 1E-7;TRAN:TRA 1E-7;:OUTP1 ON")
        while generator.ask(":STAT:OPER:COND?") != "0":
            pass
        assert generator.ask(":INIT;*TRG;*OPC?") == "1"
        generator.write(":VOLT:HIGH 4;LOW 0;:PULS:POL NORM;WIDT 1E-4;PER 1E-3")
        oscilloscope.write(":SENS1:VOLT:RANG:PTP 16;:SENS2:VOLT:RANG:PTP 8")
        oscilloscope.write(":SENS:SWE:POIN 1200;TINT 1E-7;:TRIG:SOUR INT1;LEV 2")
        count, end_volts = 0, 0.0
        while end_volts < 2.5:
            oscilloscope.write(":INIT")
            while int(oscilloscope.ask(":STAT:OPER:COND?")) & 32 == 0:
                pass
            assert generator.ask(":INIT;*TRG;*OPC?") == "1"
            while int(oscilloscope.ask(":STAT:OPER:COND?")) & 16:
                pass
            codes = np.frombuffer(oscilloscope.ask_block(":TRAC:DATA? CHAN2"), ">i2")
            end_volts = float(np.mean(codes[970:990])) * 8 / 4096
            count += 1
            assert count < 20
        assert 8 <= count <= 10
        assert generator.ask(":SYST:ERR?") == oscilloscope.ask(":SYST:ERR?") == '0,"No error"'


COMMAND = [sys.executable, "-m", "pulsetally.simulators.simulate"]


@pytest.mark.parametrize("how", ["SIGTERM", "SIGINT", "stdin"])
def test_the_program_announces_serves_and_ends_quietly(how: str) -> None:
    extra = ["--until-stdin-closes"] if how == "stdin" else []
    with subprocess.Popen(
        [*COMMAND, "--json", "--seed", "5", *extra],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    ) as process:
        assert process.stdout is not None
        assert process.stdin is not None
        addresses = json.loads(process.stdout.readline())
        assert list(addresses) == ["generator", "oscilloscope", "control", "table"]
        with Client(addresses["generator"]) as client:
            assert client.ask("*IDN?").split(",")[2] == "5"
            if how == "stdin":
                process.stdin.close()
            else:
                process.send_signal(signal.Signals[how])
            assert process.wait(10) == 0
        assert process.stdout.read() == b""
        assert process.stderr is not None
        assert process.stderr.read() == b""


def test_a_taken_port_is_said_so(addresses: Addresses, capsys: pytest.CaptureFixture[str]) -> None:
    port = addresses.control.split("::")[2]
    assert main(["--control-port", port]) == 1
    assert port in capsys.readouterr().err


def test_faulty_settings_are_refused() -> None:
    with pytest.raises(ValueError, match="control_port"):
        SimulationSettings(control_port=70_000)
    with pytest.raises(ValueError, match="exchange_seconds"):
        SimulationSettings(exchange_seconds=-1.0)
    with pytest.raises(ValueError, match="seed must be 0 or more, not -1"):
        SimulationSettings(seed=-1)


def test_a_seed_below_0_is_a_mistake_of_usage(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit, match="2"):
        main(["--seed", "-1"])
    assert "seed must be 0 or more, not -1" in capsys.readouterr().err
