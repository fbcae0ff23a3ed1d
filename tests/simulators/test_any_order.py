"""Messages in any order to the newer families leave the bench whole."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.scpi_engine import ScpiEngine
from pulsetally.simulators.simulate import Bench, SimulationSettings

# Whom: 0 generator, 1 oscilloscope, 2 control.
CLOCK = [(2, ":CLOC:ADV 20 US"), (2, ":CLOC:ADV 2 MS"), (2, ":CLOC:ADV 15 MS")]
MESSAGES = {
    "perdiv": [
        (0, "SOUR1:VOLT 4;VOLT:OFFS 2"),
        (0, "SOUR1:VOLT:OFFS -8"),
        (0, "SOUR1:VOLT 15"),
        (0, "OUTP1:POL INV"),
        (0, "SOUR1:FREQ 400;FUNC:PULS:WIDT 1 MS"),
        (0, "OUTP1:LOAD 50"),
        (0, "OUTP1 ON"),
        (0, "OUTP1 OFF"),
        (0, "SOUR1:BURS:STAT ON;NCYC 3"),
        (0, "SOUR1:BURS:STAT OFF"),
        (0, "TRIG1:SOUR IMM"),
        (0, "*TRG"),
        (0, "ABOR"),
        (0, "*RST"),
        (1, "TRIG:EDGE:SOUR EXT"),
        (1, "TRIG:EDGE:SOUR CHAN2;LEV 1"),
        (1, "TIM:SCAL 1E-5;POS -1"),
        (1, "TIM:SCAL 1E-7;POS 1E-3;:ACQ:POIN 5000"),
        (1, "SING"),
        (1, "STOP"),
        (1, "*WAI"),
        (1, "*RST"),
        *CLOCK,
    ],
    "stateword": [
        (0, "CH1:HIGH 4;LOW 0"),
        (0, "CH1:HIGH -2"),
        (0, "CH1:LOW -5"),
        (0, "CH1:POLARITY INV"),
        (0, "CH1:PERIOD 3E-3;WIDTH 1E-3;CYCLES 3"),
        (0, "CH1:LOAD 50"),
        (0, "CH1:OUTPUT 1"),
        (0, "CH1:OUTPUT 0"),
        (0, "CH1:TRIGMODE FREE"),
        (0, "CH1:TRIGMODE SOFT"),
        (0, "CH1:ARM"),
        (0, "CH1:FIRE"),
        (0, "CH1:ARM;FIRE"),
        (0, "CH1:STOP"),
        (0, "*RST"),
        (1, "TRIG:CHANNEL EXT"),
        (1, "TRIG:CHANNEL CH2;LEVEL 1"),
        (1, "HOR:RATE 1E6;LENGTH 50;DELAY -1"),
        (1, "HOR:DELAY 1E-3"),
        (1, "TRIG:MODE SINGLE"),
        (1, "TRIG:MODE HALT"),
        (1, "*WAI"),
        (1, "*RST"),
        *CLOCK,
    ],
}
STATES = {
    "perdiv": ("SOUR1:BURS:RUNN?", {"0", "1"}, "ACQ:STAT?", set("01234")),
    "stateword": (
        "CH1:STATE?",
        {"CH1:STATE IDLE", "CH1:STATE READY", "CH1:STATE RUN"},
        "TRIG:STATE?",
        {f"TRIG:STATE {word}" for word in ("HALT", "PREFILL", "READY", "ACQ", "DONE")},
    ),
}
DATA = {"perdiv": (b"WAV:DATA?\n", {b"4"}), "stateword": (b"DATA:COUNT?\n", {b"TRIG:STATE DONE"})}


@pytest.mark.parametrize("family", MESSAGES)
@settings(deadline=None, max_examples=40, derandomize=True)
@given(data=st.data())
def test_any_order_of_messages_keeps_the_bench_whole(family: str, data: st.DataObject) -> None:
    messages = data.draw(st.lists(st.sampled_from(MESSAGES[family]), max_size=15))
    bench = Bench(SimulationSettings(cell=CellDescription(regions=4), family=family))
    generator, oscilloscope, control = (
        ScpiEngine(device) for device in (bench.generator, bench.oscilloscope, bench.control)
    )
    burst_query, burst_states, scope_query, scope_states = STATES[family]
    fetch, complete = DATA[family]
    for index, message in messages:
        assert (generator, oscilloscope, control)[index].receive(f"{message}\n".encode()) == b""
        model = bench.generator_model
        assert model.wanted.conflict() == ""
        assert max(abs(model.wanted.high_volts), abs(model.wanted.low_volts)) <= 10
        assert not (model.is_running and model.is_waiting)
        burst = generator.receive(f"{burst_query}\n".encode()).decode().strip()
        assert burst in burst_states
        state = oscilloscope.receive(f"{scope_query}\n".encode()).strip()
        assert state.decode() in scope_states
        # There is something to fetch exactly when the state says so.
        assert bool(oscilloscope.receive(fetch)) == (state in complete)
