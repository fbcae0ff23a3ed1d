"""Virtual time ends before its steps are too coarse for what is measured."""

import math

import pytest

from pulsetally.simulators.generator_model import LARGEST_STEP_SHARE, LATEST_SECONDS
from pulsetally.simulators.simulate import Bench, SimulationSettings
from tests.simulators.talking import LINEAR, Line


class Scene:
    """A scpi99 bench whose output is on, at 4 V."""

    def __init__(self) -> None:
        self.bench = Bench(SimulationSettings(cell=LINEAR))
        self.generator, self.control = Line(self.bench.generator), Line(self.bench.control)
        self.generator.say(":TRIG:SOUR BUS;:VOLT:HIGH 4;:OUTP ON")
        self.bench.clock.advance(0.1)

    def error(self) -> str:
        return self.generator.say(":SYST:ERR?")


def test_a_burst_beyond_the_end_of_time_is_refused_with_the_end() -> None:
    scene = Scene()
    scene.generator.say(":PULS:PER 2000;COUN 1E12;:INIT")
    assert scene.error() == (
        '-221,"Settings conflict;the burst would end at 2e+15 s; virtual time goes to 2e+09 s"'
    )
    assert not scene.bench.generator_model.is_waiting
    scene.generator.say(":PULS:PER 2E-3;COUN 3;:INIT;*TRG;*OPC?")
    assert scene.error() == '0,"No error"'
    assert scene.bench.table.delivered == 3


def test_a_burst_that_waited_until_it_is_too_late_is_refused() -> None:
    scene = Scene()
    scene.generator.say(":PULS:PER 1;COUN 1E9;:INIT")
    assert scene.error() == '0,"No error"'
    scene.bench.clock.advance(1.5e9)
    scene.generator.say("*TRG")
    assert scene.error().startswith('-221,"Settings conflict;the burst would end at 2.5e+09 s')
    assert scene.bench.table.delivered == 0
    assert scene.bench.generator_model.is_waiting


@pytest.mark.parametrize("late_seconds", [1e6, 1e8, 1.9e9])
def test_a_width_of_few_steps_of_the_clock_is_refused(late_seconds: float) -> None:
    scene = Scene()
    scene.bench.clock.advance(late_seconds)
    # IEEE 754: the distance of two numbers of 53 bits.
    step_seconds = 2.0 ** (math.floor(math.log2(late_seconds)) - 52)
    shortest = step_seconds / LARGEST_STEP_SHARE
    scene.generator.say(f":PULS:WIDT {0.98 * shortest - 1e-9:.9E};:INIT")
    assert scene.error().startswith('-221,"Settings conflict;the burst would end at')
    scene.generator.say(f":PULS:WIDT {1.02 * shortest + 1e-9:.9E};:INIT;*TRG;*OPC?")
    assert scene.error() == '0,"No error"'
    assert scene.bench.table.delivered == 1


def test_time_can_not_be_advanced_beyond_its_end() -> None:
    scene = Scene()
    for _ in range(4):
        scene.control.say(":CLOC:ADV 1E9")
    assert scene.control.say(":SYST:ERR?") == (
        '-221,"Settings conflict;it is 1e+09 s; virtual time goes to 2e+09 s"'
    )
    assert float(scene.control.say(":CLOC:TIME?")) < LATEST_SECONDS
