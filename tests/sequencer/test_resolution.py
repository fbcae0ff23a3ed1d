"""What the oscilloscope resolves and the generator can do, told before any of them is asked."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from pulsetally.drivers.dialect import OscilloscopeDialect
from pulsetally.drivers.oscilloscope import interval_for
from pulsetally.sequencer import engine
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.dialects import find_dialect, shipped_dialects
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.events import RunEnded, RunState, ShotTaken
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.imperfections import DigitizerImperfections, SourceImperfections
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import simulated

HEAD = """\
recipe: test
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us}
  quick: {level: 4 V, width: 100 us, rest: 100 us}
  narrow: {level: 4 V, width: 100 ns, edge: 8 ns}
steps:
"""
SHIPPED = shipped_bench()


def with_scope(bench: Bench = SHIPPED, **abilities: Any) -> Bench:
    return replace(bench, oscilloscope_dialect=replace(bench.oscilloscope_dialect, **abilities))


def with_generator(**abilities: Any) -> Bench:
    return replace(
        SHIPPED,
        generator_dialect=replace(SHIPPED.generator_dialect, **abilities),
    )


def plan_of(steps: str, bench: Bench = SHIPPED) -> Plan:
    return make_plan(parse_recipe(f"{HEAD}{steps}\n", file="r.yaml"), bench)


def oscilloscope(name: str) -> OscilloscopeDialect:
    found = find_dialect(name, Path()).oscilloscope
    assert found is not None
    return found


# closed form: what is stepped is the sample interval, the rate, or a tenth of the window.
@pytest.mark.parametrize(
    ("name", "window", "points", "seconds"),
    [
        ("scpi99", 2.2e-4, 2000, 2e-7),
        ("scpi99", 2.0e-4, 2000, 1e-7),
        ("stateword", 2.2e-4, 2000, 2e-7),
        ("perdiv", 2.2e-4, 2000, 2.5e-7),
        ("perdiv", 1.9e-4, 2000, 1e-7),
        # Faster than a sample a nanosecond there is nothing.
        ("scpi99", 1e-7, 2000, 1e-9),
        ("stateword", 1e-7, 2000, 1e-9),
        ("perdiv", 1e-7, 2000, 1e-9),
    ],
)
def test_sample_intervals_are_rounded_as_the_instrument_does(
    name: str, window: float, points: int, seconds: float
) -> None:
    assert interval_for(oscilloscope(name), window, points) == pytest.approx(seconds, rel=1e-12)


@pytest.mark.parametrize("name", shipped_dialects())
def test_the_shipped_dialects_say_what_the_simulated_instruments_can_do(name: str) -> None:
    assert name in FAMILIES
    dialect = find_dialect(name, Path())
    assert dialect.oscilloscope is not None
    assert dialect.generator is not None
    can = DigitizerImperfections()
    assert dialect.oscilloscope.shortest_interval == can.shortest_interval_seconds
    assert dialect.oscilloscope.most_points == can.longest_record_points
    # One of the languages has twelve digits for it.
    assert dialect.generator.most_count in (SourceImperfections().most_pulses, 10**12 - 1)


def test_a_pulse_is_planned_with_the_samples_it_gets() -> None:
    (record,) = plan_of("  - preset: up").records
    assert (record.name, record.what, record.points) == ("up", "pulse", 2000)
    # closed form: 100 us less a ramp of 100 ns/0.8; 30 samples on it at least.
    assert record.needed == pytest.approx((100e-6 - 125e-9) / 30)
    # closed form: the next of 1-2-5 above 2 * 100.125 us/0.9/2000 and a bit.
    assert record.given == 200e-9
    assert record.samples == 499
    assert not record.coarse


def test_the_coarsest_of_a_sweep_is_shown() -> None:
    plan = plan_of("  - {sweep: {up.edge: [100 ns, 40 us]}, steps: [{preset: down}, {step: up}]}")
    (record,) = (each for each in plan.records if each.name == "up")
    # closed form: 50 us of flat top, 150 us of pulse: 2 * 150/0.9 us in 2000 samples of 200 ns.
    assert (record.given, record.samples) == (200e-9, 250)


@pytest.mark.parametrize(
    ("shortest", "samples"),
    # closed form: 90 ns of flat top.
    [(3e-9, 18), (2e-9, 45), (1e-9, 90)],
)
def test_a_pulse_needs_thirty_samples_on_its_top(shortest: float, samples: int) -> None:
    bench = with_scope(shortest_interval=shortest)
    if samples >= 30:
        plan = plan_of("  - preset: narrow", bench)
        assert plan.records[0].samples == samples
        assert any("resolved coarsely" in each for each in plan.warnings) == (samples < 60)
        return
    with pytest.raises(PlanError) as caught:
        plan_of("  - preset: narrow", bench)
    assert caught.value.problems == [
        "pulse 'narrow' (pulse) needs a sample every 3 ns or oftener, and the oscilloscope of"
        " simulated_bench.yaml takes one every 5 ns as fast as it can: 18 on the flat top. To fix"
        " it, lengthen the pulse, or use a faster oscilloscope."
    ]


def test_an_oscilloscope_of_unknown_speed_is_trusted() -> None:
    assert plan_of("  - preset: narrow", with_scope(shortest_interval=None)).records[0].given < 1e-9


def test_a_short_memory_limits_what_a_record_shows() -> None:
    plan = plan_of("  - preset: up\n  - {loop: 4 V, period: 20 ms}", with_scope(most_points=300))
    pulse, loop = plan.records
    assert (pulse.points, loop.points) == (300, 300)
    # closed form: 222.6 us in 300 samples are 1 us each; 24 ms are 100 us each.
    assert (pulse.given, pulse.samples) == (1e-6, 99)
    assert (loop.given, loop.samples) == (100e-6, 200)
    assert any("'loop' (loop) is resolved coarsely: 200 samples" in each for each in plan.warnings)
    with pytest.raises(PlanError, match="on the loop"):
        plan_of("  - {loop: 4 V, period: 20 ms}", with_scope(most_points=200))


def test_a_train_beyond_the_memory_is_refused_with_its_own_remedy() -> None:
    steps = "  - {preset: down}\n  - {step: up, count: 50, capture: train, train of: 50}"
    assert plan_of(steps).records[1].what == "train of 50"
    with pytest.raises(PlanError, match="make 'train of' smaller or the rest shorter"):
        plan_of(steps, with_scope(most_points=5000))


@pytest.mark.parametrize(
    ("steps", "abilities", "words"),
    [
        ("  - preset: up", {"fixed_edge": 5e-9},
         "the edges of pulse 'up' take 100 ns, and the generator of simulated_bench.yaml makes only"
         " edges of 5 ns. To fix it, write 'edge: 5 ns', or use another generator."),
        ("  - {loop: 4 V, period: 20 ms}", {"fixed_edge": 5e-9},
         "the edges of pulse 'loop' take 8 ms, and the generator of simulated_bench.yaml makes only"
         " edges of 5 ns. To fix it, leave the loop out, or use another generator."),
        ("  - {preset: up}\n  - {step: up, count: 5, capture: train, train of: 5}",
         {"most_count": 4},
         "a train of 5 with pulse 'up' is more than the 4 a trigger that the generator of"
         " simulated_bench.yaml sends. To fix it, write a smaller train."),
        ("  - {preset: up}\n  - {step: up, count: 5, capture: train, train of: 5}",
         {"settings": tuple(each for each in SHIPPED.generator_dialect.settings
                            if each.name != "count")},
         "a train of 5 with pulse 'up' is more than the 1 a trigger that the generator of"
         " simulated_bench.yaml sends. To fix it, write capture: each."),
        ("  - preset: down",
         {"settings": tuple(each for each in SHIPPED.generator_dialect.settings
                            if each.name != "polarity")},
         "pulse 'down' goes down from its base, and the generator of simulated_bench.yaml makes"
         " only pulses upwards. To fix it, use another generator."),
    ],
)  # fmt: skip
def test_what_the_generator_cannot_do_is_refused_before_power(
    steps: str, abilities: dict[str, object], words: str
) -> None:
    with pytest.raises(PlanError) as caught:
        plan_of(steps, with_generator(**abilities))
    assert words in caught.value.problems


def test_an_edge_near_the_only_one_is_fine() -> None:
    assert plan_of("  - preset: up", with_generator(fixed_edge=105e-9)).rounds


@pytest.mark.parametrize("family", sorted(FAMILIES))
def test_a_run_takes_the_records_that_the_plan_promised(family: str, tmp_path: Path) -> None:
    digitizer = DigitizerImperfections(longest_record_points=1000, shortest_interval_seconds=2e-9)
    settings = SimulationSettings(family=family, digitizer=digitizer)
    with simulated(settings) as table:
        bench = with_scope(table.bench, most_points=1000, shortest_interval=2e-9)
        plan = plan_of(
            "  - {preset: down}\n  - {step: narrow}\n"
            "  - {step: quick, count: 3, capture: train, train of: 3}",
            bench,
        )
        logbook = Logbook(tmp_path / "logbook.db")
        recorder = logbook.begin_run(plan, bench, mode="run")
        events = list(engine.run(plan, bench, recorder, StopSwitch()))
        logbook.close()
    assert isinstance(events[-1], RunEnded)
    assert events[-1].state is RunState.FINISHED, events[-1]
    shots = {event.pulse: event.shot for event in events if isinstance(event, ShotTaken)}
    for record in plan.records:
        assert shots[record.name].node.codes.size == record.points
        assert shots[record.name].sample_interval == pytest.approx(record.given, rel=1e-6)


# closed form: 1 - exp(-t / tau), with 220.05 kohm beside 10 Mohm and 307.1 pF: 66.1 us.
def test_a_pulse_that_is_over_before_the_cell_sees_it_is_mentioned() -> None:
    text = (
        "recipe: short\npulses:\n  down: {level: -5 V, width: 2 ms}\n"
        "  up: {level: 4 V, width: 1 us}\n"
        "steps:\n  - cycle: {down: down, up: up}\n    pairs: 10\n"
    )

    def told(recipe: str) -> list[str]:
        warnings = make_plan(parse_recipe(recipe, file="r.yaml"), shipped_bench()).warnings
        return [each for each in warnings if "is short against" in each]

    (words,) = told(text)
    assert "sees 0.015 of the voltage told" in words
    assert "time constant of 66.1 us" in words
    assert told(text.replace("1 us", "100 us")) == []
