"""A plain PyVISA script and the bench, over every transport and in every language."""

from collections.abc import Callable, Iterator
from contextlib import ExitStack, closing
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray
from pyvisa import constants

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.settings import TRANSPORTS
from pulsetally.simulators.simulate import Addresses, SimulationSettings
from tests.simulators.counting import COUNTS, ERROR_QUERIES, let_settle, wait_for
from tests.simulators.plain_visa import VisaLine
from tests.simulators.sockets import Client, served

LINEAR = CellDescription(remanent_polarization=1e-9)

# One pulse of 4 V for 100 us; each returns the samples of the generator's terminal, V, from
# 10 us before the edge on, one each 100 ns.
Script = Callable[[VisaLine, VisaLine], NDArray[np.float64]]


def shoot_scpi99(generator: VisaLine, oscilloscope: VisaLine) -> NDArray[np.float64]:
    generator.write("*RST;:SOUR1:FUNC:SHAP PULS;:OUTP1:LOAD INF;:SOUR1:VOLT:HIGH 4;LOW 0")
    generator.write(":SOUR1:PULS:WIDT 1E-4;PER 1E-3;COUN 1;TRAN 1E-7;TRAN:TRA 1E-7")
    generator.write(":TRIG:SOUR BUS;:OUTP1 ON")
    let_settle(generator)
    oscilloscope.write("*RST;:SENS1:VOLT:RANG:PTP 16;OFFS 0;:FORM:DATA INT,16;:FORM:BORD NORM")
    oscilloscope.write(":SENS:SWE:POIN 1200;TINT 1E-7;OREF:LOC 0.0833333;:TRIG:SOUR INT1;LEV 2")
    oscilloscope.write(":INIT")
    wait_for(oscilloscope, ":STAT:OPER:COND?", "48")
    assert generator.ask(":INIT;*TRG;*OPC?") == "1"
    wait_for(oscilloscope, ":STAT:OPER:COND?", "0")
    words = oscilloscope.ask(":TRAC:DATA:PRE? CHAN1").split()
    scale, offset = float(words[words.index("EXPLicit") + 2]), float(words[-5])
    codes = np.frombuffer(oscilloscope.ask_block(":TRAC:DATA? CHAN1"), ">i2")
    return np.asarray(codes * scale + offset)


def shoot_perdiv(generator: VisaLine, oscilloscope: VisaLine) -> NDArray[np.float64]:
    generator.write("*RST;:SOUR1:VOLT 4;VOLT:OFFS 2;:SOUR1:FREQ 1000;:SOUR1:FUNC:PULS:WIDT 1E-4")
    generator.write("SOUR1:FUNC:PULS:TRAN 1E-7;:SOUR1:BURS:STAT ON;NCYC 1;:OUTP1 ON")
    let_settle(generator)
    oscilloscope.write("*RST;:CHAN1:SCAL 2;OFFS 0;:TRIG:EDGE:SOUR CHAN1;LEV 2;SLOP POS")
    oscilloscope.write("TIM:SCAL 2E-5;POS 9E-5;:ACQ:POIN 2000;:WAV:SOUR CHAN1;FORM BYTE;:SING")
    wait_for(oscilloscope, "ACQ:STAT?", "2")
    generator.write("*TRG")
    wait_for(generator, "SOUR1:BURS:RUNN?", "0")
    wait_for(oscilloscope, "ACQ:STAT?", "4")
    fields = [float(field) for field in oscilloscope.ask("WAV:PRE?").split(",")]
    codes = np.frombuffer(oscilloscope.ask_block("WAV:DATA?"), np.uint8)
    return np.asarray((codes.astype(float) - fields[9]) * fields[7] + fields[8])


def shoot_stateword(generator: VisaLine, oscilloscope: VisaLine) -> NDArray[np.float64]:
    generator.write("*RST;:CH1:HIGH 4;:CH1:LOW 0;:CH1:WIDTH 1E-4;:CH1:PERIOD 1E-3")
    generator.write("CH1:RISE 1E-7;:CH1:FALL 1E-7;:CH1:CYCLES 1;:CH1:TRIGMODE SOFT;:CH1:OUTPUT 1")
    let_settle(generator)
    oscilloscope.write("*RST;:CH1:RANGE 16;:CH1:POSITION 0;:HOR:RATE 1E7;:HOR:LENGTH 1200")
    oscilloscope.write("HOR:DELAY -1E-5;:TRIG:CHANNEL CH1;:TRIG:LEVEL 2;:TRIG:SLOPE RISE")
    oscilloscope.write("DATA:SOURCE CH1;:TRIG:MODE SINGLE")
    wait_for(oscilloscope, "TRIG:STATE?", "TRIG:STATE READY")
    generator.write("CH1:ARM;:CH1:FIRE")
    wait_for(generator, "CH1:STATE?", "CH1:STATE IDLE")
    wait_for(oscilloscope, "TRIG:STATE?", "TRIG:STATE DONE")
    gain, zero = (
        float(oscilloscope.ask(f"DATA:{name}?").removeprefix(f"DATA:{name} "))
        for name in ("GAIN", "ZERO")
    )
    block = oscilloscope.ask_block("DATA:SAMPLES?", before=b"DATA:SAMPLES ", behind=b"")
    return np.asarray(np.frombuffer(block, "<i2") * gain + zero)


SCRIPTS: dict[str, Script] = {
    "scpi99": shoot_scpi99,
    "perdiv": shoot_perdiv,
    "stateword": shoot_stateword,
}


@cache
def counted_over_bare_sockets(family: str) -> list[float]:
    with (
        served(SimulationSettings(family=family)) as addresses,
        Client(addresses.generator) as generator,
        Client(addresses.oscilloscope) as oscilloscope,
    ):
        return COUNTS[family](generator, oscilloscope, 2)


def opened(addresses: Addresses, stack: ExitStack) -> tuple[VisaLine, VisaLine]:
    generator = stack.enter_context(closing(VisaLine(addresses.generator)))
    return generator, stack.enter_context(closing(VisaLine(addresses.oscilloscope)))


@pytest.mark.parametrize("transport", TRANSPORTS)
@pytest.mark.parametrize("family", FAMILIES)
def test_plain_visa_sets_up_arms_fires_and_fetches(family: str, transport: str) -> None:
    settings = SimulationSettings(cell=LINEAR, family=family, transport=transport)
    with ExitStack() as stack:
        generator, oscilloscope = opened(stack.enter_context(served(settings)), stack)
        assert generator.ask("*IDN?").startswith("PULSETALLY,SIMULATED FUNCTION GENERATOR")
        volts = SCRIPTS[family](generator, oscilloscope)
        query, nothing = ERROR_QUERIES[family]
        assert generator.ask(query) == oscilloscope.ask(query) == nothing
    times = (np.arange(volts.size) - 100) * 1e-7
    # Nothing before the pulse; on its top the source's 4 V but for the 50 ohm before more
    # than 200 kohm, and for offset and gain errors far below a tenth of a volt.
    assert np.mean(volts[times < -1e-6]) == pytest.approx(0, abs=0.1)
    assert np.mean(volts[(times > 1e-6) & (times < 98e-6)]) == pytest.approx(4, abs=0.1)


@pytest.mark.parametrize("transport", TRANSPORTS)
@pytest.mark.parametrize("family", FAMILIES)
def test_a_cell_counts_alike_over_every_transport(family: str, transport: str) -> None:
    settings = SimulationSettings(family=family, transport=transport)
    with ExitStack() as stack:
        lines = opened(stack.enter_context(served(settings)), stack)
        found = COUNTS[family](*lines, 2)
    assert found[1] > found[0]
    # Not equal: how often a client asked moves the sample clock, and with it the noise.
    assert found == pytest.approx(counted_over_bare_sockets(family), abs=0.03)


# What only HiSLIP has.


@pytest.fixture
def oscilloscope() -> Iterator[VisaLine]:
    with (
        served(SimulationSettings(transport="hislip")) as addresses,
        closing(VisaLine(addresses.oscilloscope)) as line,
    ):
        yield line


def test_plain_visa_reads_the_status_byte(oscilloscope: VisaLine) -> None:
    assert oscilloscope.resource.read_stb() == 0
    oscilloscope.write("*IDN?")
    assert oscilloscope.resource.read_stb() & 16
    assert oscilloscope.resource.read().startswith("PULSETALLY")
    assert oscilloscope.resource.read_stb() == 0


def test_plain_visa_clears_the_device_and_keeps_its_settings(oscilloscope: VisaLine) -> None:
    oscilloscope.write(":SENS:SWE:POIN 2000")
    oscilloscope.resource.clear()
    assert oscilloscope.ask(":SENS:SWE:POIN?") == "2000"
    assert oscilloscope.ask(":SYST:ERR?") == '0,"No error"'


def test_plain_visa_takes_a_block_in_small_messages(oscilloscope: VisaLine) -> None:
    oscilloscope.resource.set_visa_attribute(
        constants.ResourceAttribute.tcpip_hislip_max_message_kb, 1
    )
    oscilloscope.write(":SENS:SWE:POIN 50000;TINT 1E-7;:TRIG:SOUR IMM;:INIT")
    wait_for(oscilloscope, ":STAT:OPER:COND?", "0")
    assert len(oscilloscope.ask_block(":TRAC:DATA? CHAN1")) == 100_000
    assert oscilloscope.ask("*OPC?") == "1"
