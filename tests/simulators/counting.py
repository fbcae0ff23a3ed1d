"""Count a cell in each family's own words.

Each function presets with -5 V for 2 ms, then sends pulses of 4 V for 100 us; it returns
the voltage between 96 us and 98 us after each pulse's edge. It knows no code of ours.
"""

from collections.abc import Callable
from typing import Protocol

import numpy as np
import pytest
from numpy.typing import NDArray


class Talk(Protocol):
    """A line to one instrument."""

    def write(self, text: str) -> None:
        """Send a message."""

    def ask(self, text: str) -> str:
        """Send a query and return its line without the newline."""

    def ask_block(self, text: str, *, before: bytes = b"", behind: bytes = b"\n") -> bytes:
        """Return a block's payload; before and behind are what must stand around it."""


POINTS = 1200


def wait_for(client: Talk, question: str, answer: str) -> None:
    for _ in range(200):
        if client.ask(question) == answer:
            return
    raise AssertionError(f"{question} never answered {answer}")


def let_settle(client: Talk) -> None:
    # Each exchange takes a virtual millisecond, the relay ten of them.
    for _ in range(20):
        client.ask("*ESR?")


def end_volts(volts: NDArray[np.float64], first: float) -> float:
    times = first + 1e-7 * np.arange(POINTS)
    return float(np.mean(volts[(times > 96e-6) & (times < 98e-6)]))


def count_scpi99(generator: Talk, oscilloscope: Talk, pulses: int) -> list[float]:
    generator.write(":VOLT:HIGH 0;LOW -5;:PULS:POL INV;WIDT 2E-3;PER 4E-3")
    generator.write(":PULS:TRAN 1E-7;TRAN:TRA 1E-7;:OUTP1 ON")
    let_settle(generator)
    assert generator.ask(":INIT;*TRG;*OPC?") == "1"
    generator.write(":VOLT:HIGH 4;LOW 0;:PULS:POL NORM;WIDT 1E-4;PER 1E-3")
    oscilloscope.write(":SENS1:VOLT:RANG:PTP 16;:SENS2:VOLT:RANG:PTP 8;OFFS 2;:FORM:BORD NORM")
    oscilloscope.write(f":SENS:SWE:POIN {POINTS};TINT 1E-7;OREF:LOC 0.1;:TRIG:SOUR INT1;LEV 2")
    found = []
    for _ in range(pulses):
        oscilloscope.write(":INIT")
        wait_for(oscilloscope, ":STAT:OPER:COND?", "48")
        assert generator.ask(":INIT;*TRG;*OPC?") == "1"
        wait_for(oscilloscope, ":STAT:OPER:COND?", "0")
        words = oscilloscope.ask(":TRAC:DATA:PRE? CHAN2").split()
        codes = np.frombuffer(oscilloscope.ask_block(":TRAC:DATA? CHAN2"), ">i2")
        first = float(words[words.index("OFFSet") + 1])
        found.append(end_volts(codes * 8 / 4096 + 2, first))
    return found


def count_perdiv(generator: Talk, oscilloscope: Talk, pulses: int) -> list[float]:
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
    for _ in range(pulses):
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


def count_stateword(generator: Talk, oscilloscope: Talk, pulses: int) -> list[float]:
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
    for _ in range(pulses):
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


COUNTS: dict[str, Callable[[Talk, Talk, int], list[float]]] = {
    "scpi99": count_scpi99,
    "perdiv": count_perdiv,
    "stateword": count_stateword,
}
ERROR_QUERIES = {
    "scpi99": (":SYST:ERR?", '0,"No error"'),
    "perdiv": ("SYST:ERR?", '+0,"No error"'),
    "stateword": ("ERROR?", "ERROR 0,No error"),
}
