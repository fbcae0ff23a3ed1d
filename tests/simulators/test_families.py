"""Every family counts the same default cell full, through sockets and its own words alone."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest

from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulators.sockets import Client, served

# Each function counts one default cell: preset -5 V for 2 ms, then pulses of 4 V for
# 100 us; it returns the voltage between 96 us and 98 us after each pulse's edge.
PULSES = 11
POINTS = 1200


def wait_for(client: Client, question: str, answer: str) -> None:
    for _ in range(200):
        if client.ask(question) == answer:
            return
    raise AssertionError(f"{question} never answered {answer}")


def let_settle(client: Client) -> None:
    # Each exchange takes a virtual millisecond, the relay ten of them.
    for _ in range(20):
        client.ask("*ESR?")


def end_volts(volts: "np.ndarray[tuple[int], np.dtype[np.float64]]", first: float) -> float:
    times = first + 1e-7 * np.arange(POINTS)
    return float(np.mean(volts[(times > 96e-6) & (times < 98e-6)]))


def count_scpi99(generator: Client, oscilloscope: Client) -> list[float]:
    generator.write(":VOLT:HIGH 0;LOW -5;:PULS:POL INV;WIDT 2E-3;PER 4E-3")
    generator.write(":PULS:TRAN 1E-7;TRAN:TRA 1E-7;:OUTP1 ON")
    let_settle(generator)
    assert generator.ask(":INIT;*TRG;*OPC?") == "1"
    generator.write(":VOLT:HIGH 4;LOW 0;:PULS:POL NORM;WIDT 1E-4;PER 1E-3")
    oscilloscope.write(":SENS1:VOLT:RANG:PTP 16;:SENS2:VOLT:RANG:PTP 8;OFFS 2;:FORM:BORD NORM")
    oscilloscope.write(f":SENS:SWE:POIN {POINTS};TINT 1E-7;OREF:LOC 0.1;:TRIG:SOUR INT1;LEV 2")
    found = []
    for _ in range(PULSES):
        oscilloscope.write(":INIT")
        wait_for(oscilloscope, ":STAT:OPER:COND?", "48")
        assert generator.ask(":INIT;*TRG;*OPC?") == "1"
        wait_for(oscilloscope, ":STAT:OPER:COND?", "0")
        words = oscilloscope.ask(":TRAC:DATA:PRE? CHAN2").split()
        codes = np.frombuffer(oscilloscope.ask_block(":TRAC:DATA? CHAN2"), ">i2")
        first = float(words[words.index("OFFSet") + 1])
        found.append(end_volts(codes * 8 / 4096 + 2, first))
    return found


def count_perdiv(generator: Client, oscilloscope: Client) -> list[float]:
    generator.write(":SOUR1:VOLT 5;VOLT:OFFS -2.5;:OUTP1:POL INV;:SOUR1:FREQ 250")
    generator.write(":SOUR1:FUNC:PULS:TRAN 1E-7;WIDT 2E-3;:SOUR1:BURS:STAT ON;NCYC 1;:OUTP1 ON")
    let_settle(generator)
    generator.write("*TRG")
    wait_for(generator, "SOUR1:BURS:RUNN?", "0")
    generator.write(":SOUR1:VOLT 4;VOLT:OFFS 2;:OUTP1:POL NORM;:SOUR1:FUNC:PULS:WIDT 1E-4")
    generator.write("SOUR1:FREQ 1000")
    oscilloscope.write("CHAN1:SCAL 2;:CHAN2:SCAL 1;OFFS 2;:TRIG:EDGE:SOUR CHAN1;LEV 2;SLOP POS")
    oscilloscope.write("TIM:SCAL 2E-5;POS 8E-5;:ACQ:POIN 2000;:WAV:SOUR CHAN2;FORM BYTE")
    found = []
    for _ in range(PULSES):
        oscilloscope.write("SING")
        wait_for(oscilloscope, "ACQ:STAT?", "2")
        generator.write("*TRG")
        wait_for(generator, "SOUR1:BURS:RUNN?", "0")
        wait_for(oscilloscope, "ACQ:STAT?", "4")
        fields = [float(field) for field in oscilloscope.ask("WAV:PRE?").split(",")]
        assert fields[:4] == [0, 0, 2000, 1]
        codes = np.frombuffer(oscilloscope.ask_block("WAV:DATA?"), np.uint8)
        volts = (codes.astype(float) - fields[9]) * fields[7] + fields[8]
        assert fields[4] == pytest.approx(1e-7)
        assert codes.size == 2000
        found.append(end_volts(volts[:POINTS], fields[5]))
    return found


def count_stateword(generator: Client, oscilloscope: Client) -> list[float]:
    generator.write("CH1:HIGH 0;:CH1:LOW -5;:CH1:POLARITY INV;:CH1:PERIOD 4E-3;:CH1:WIDTH 2E-3")
    generator.write("CH1:RISE 1E-7;:CH1:FALL 1E-7;:CH1:CYCLES 1;:CH1:TRIGMODE SOFT;:CH1:OUTPUT 1")
    let_settle(generator)
    generator.write("CH1:ARM")
    wait_for(generator, "CH1:STATE?", "CH1:STATE READY")
    generator.write("CH1:FIRE")
    wait_for(generator, "CH1:STATE?", "CH1:STATE IDLE")
    generator.write("CH1:HIGH 4;:CH1:LOW 0;:CH1:POLARITY NORM;:CH1:WIDTH 1E-4;:CH1:PERIOD 1E-3")
    oscilloscope.write("CH1:RANGE 16;:CH2:RANGE 8;:CH2:POSITION 2;:HOR:RATE 1E7")
    oscilloscope.write(f"HOR:LENGTH {POINTS};:HOR:DELAY -1E-5;:TRIG:CHANNEL CH1;:TRIG:LEVEL 2")
    oscilloscope.write("TRIG:SLOPE RISE;:DATA:SOURCE CH2")
    found = []
    for _ in range(PULSES):
        oscilloscope.write("TRIG:MODE SINGLE")
        wait_for(oscilloscope, "TRIG:STATE?", "TRIG:STATE READY")
        generator.write("CH1:ARM;:CH1:FIRE")
        wait_for(generator, "CH1:STATE?", "CH1:STATE IDLE")
        wait_for(oscilloscope, "TRIG:STATE?", "TRIG:STATE DONE")
        told = {
            name: float(oscilloscope.ask(f"DATA:{name}?").removeprefix(f"DATA:{name} "))
            for name in ("GAIN", "ZERO", "STEP", "START", "COUNT")
        }
        block = oscilloscope.ask_block("DATA:SAMPLES?", before=b"DATA:SAMPLES ", behind=b"")
        codes = np.frombuffer(block, "<i2")
        assert codes.size == told["COUNT"]
        assert told["STEP"] == pytest.approx(1e-7)
        found.append(end_volts(codes * told["GAIN"] + told["ZERO"], told["START"]))
    return found


COUNTS: dict[str, Callable[[Client, Client], list[float]]] = {
    "scpi99": count_scpi99,
    "perdiv": count_perdiv,
    "stateword": count_stateword,
}
ERROR_QUERIES = {
    "scpi99": (":SYST:ERR?", '0,"No error"'),
    "perdiv": ("SYST:ERR?", '+0,"No error"'),
    "stateword": ("ERROR?", "ERROR 0,No error"),
}


@contextmanager
def bench(family: str) -> Iterator[tuple[Client, Client, Client]]:
    with (
        served(SimulationSettings(family=family)) as addresses,
        Client(addresses.generator) as generator,
        Client(addresses.oscilloscope) as oscilloscope,
        Client(addresses.control) as control,
    ):
        yield generator, oscilloscope, control


@pytest.fixture(scope="module")
def counts() -> dict[str, list[float]]:
    found = {}
    for family, count in COUNTS.items():
        with bench(family) as (generator, oscilloscope, control):
            found[family] = count(generator, oscilloscope)
            query, nothing = ERROR_QUERIES[family]
            assert generator.ask(query) == oscilloscope.ask(query) == nothing
            assert control.ask(":TRUT:DEL?") == str(PULSES + 1)
    return found


def test_every_family_is_counted() -> None:
    assert set(COUNTS) == set(ERROR_QUERIES) == set(FAMILIES)


# design.md section 6: the default cell reaches 2.5 V in about nine pulses after a preset.
@pytest.mark.parametrize("family", FAMILIES)
def test_the_cell_is_full_after_about_nine_pulses(
    family: str, counts: dict[str, list[float]]
) -> None:
    full = 1 + next(index for index, volts in enumerate(counts[family]) if volts > 2.5)
    assert 8 <= full <= 10
    assert counts[family][0] < 2.3


@pytest.mark.parametrize("family", set(FAMILIES) - {"scpi99"})
def test_the_same_cell_gives_the_same_end_volts(
    family: str, counts: dict[str, list[float]]
) -> None:
    # Mean of 20 samples, five standard errors: 12 bits have 1.5 codes of noise (and twice
    # that counts in the difference), 8 bits half a code and as much from rounding. The
    # sample clock is free against the trigger by 100 ns, at less than 10 mV/us.
    code = 8 / 256 if family == "perdiv" else 8 / 4096
    noise = 0.6 * code if family == "perdiv" else 1.5 * code
    tolerance = 5 * np.hypot(noise, 1.5 * 8 / 4096) / np.sqrt(20) + 1e-3
    assert counts[family] == pytest.approx(counts["scpi99"], abs=tolerance)
