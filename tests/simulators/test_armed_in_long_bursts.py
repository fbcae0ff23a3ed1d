"""An oscilloscope that is armed sees each pulse of a long burst, as far as that is affordable."""

import numpy as np
from numpy.typing import NDArray

from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.talking import LINEAR, Line, block

Floats = NDArray[np.float64]


def test_a_pre_trigger_in_a_long_burst_has_its_pulses() -> None:
    bench = Bench(SimulationSettings(cell=LINEAR))
    generator, oscilloscope = Line(bench.generator), Line(bench.oscilloscope)
    generator.say(":PULS:PER 2E-6;WIDT 1E-6;COUN 1E6;:VOLT:HIGH 4;:TRIG:SOUR BUS;:OUTP ON")
    bench.clock.advance(0.1)
    generator.say(":INIT;*TRG")
    oscilloscope.say(":SENS1:VOLT:RANG:PTP 16;:SENS:SWE:TINT 1E-7;POIN 1000;OREF:LOC 0.5")
    oscilloscope.say(":TRIG:SOUR BUS;:INIT")
    bench.clock.advance(0.8e-3)
    assert oscilloscope.say("*TRG;*OPC?;:FORM:BORD NORM") == "1"
    codes = np.frombuffer(block(oscilloscope.ask(":TRAC? CHAN1"), behind=b"\n"), ">i2")
    volts = codes.astype(np.float64) * 16 / 4096
    rises = np.flatnonzero((volts[:-1] < 2) & (volts[1:] >= 2))
    # 20 samples a pulse: 25 in each half of the record, but for one that is cut.
    assert abs(int((rises < 500).sum()) - 25) <= 1
    assert abs(int((rises >= 500).sum()) - 25) <= 1


class Nobody:
    """Looks away."""

    def saw(self, times: Floats, terminal_volts: Floats, node_volts: Floats) -> None:
        del times, terminal_volts, node_volts


def seconds_to_the_end_of_the_record(*, in_detail: bool) -> float:
    bench = Bench(SimulationSettings())
    generator, oscilloscope = Line(bench.generator), Line(bench.oscilloscope)
    if in_detail:
        bench.table.observe(Nobody(), needs_detail=lambda: True)
    ended: list[float] = []
    tell = bench.digitizer.changed

    def note() -> None:
        tell()
        if not bench.digitizer.is_acquiring:
            ended.append(bench.clock.now)

    bench.digitizer.changed = note
    generator.say(":PULS:PER 1E-4;WIDT 5E-5;COUN 250;:VOLT:HIGH 2.5;:TRIG:SOUR BUS;:OUTP ON")
    bench.clock.advance(0.1)
    oscilloscope.say(":TRIG:SOUR INT2;LEV 1.655;:SENS:SWE:TINT 1E-6;POIN 10;:INIT")
    ended.clear()
    generator.say(":INIT;*TRG;*OPC?")
    return ended[0]


def test_a_level_that_the_node_creeps_up_to_triggers_at_its_pulse() -> None:
    seen = seconds_to_the_end_of_the_record(in_detail=False)
    assert seen == seconds_to_the_end_of_the_record(in_detail=True)
    # It is pulse 194 or so: neither the first nor one of the last.
    assert 0.1 + 100e-4 < seen < 0.1 + 240e-4


def test_a_long_burst_that_triggers_nothing_is_not_integrated_to_its_end() -> None:
    bench = Bench(SimulationSettings(cell=LINEAR))
    generator, oscilloscope = Line(bench.generator), Line(bench.oscilloscope)
    stretches = 0

    class Counting:
        def saw(self, times: Floats, terminal_volts: Floats, node_volts: Floats) -> None:
            nonlocal stretches
            stretches += 1

    bench.table.observe(Counting())
    bench.digitizer.most_armed_stretches = 100
    generator.say(":PULS:PER 1E-4;WIDT 5E-5;COUN 1E6;:VOLT:HIGH 2.5;:TRIG:SOUR BUS;:OUTP ON")
    bench.clock.advance(0.1)
    oscilloscope.say(":TRIG:SOUR INT2;LEV 3.9;:INIT")
    assert generator.say(":INIT;*TRG;*OPC?") == "1"
    # The first periods and the last ones are integrated in any case.
    assert 100 < stretches < 500
