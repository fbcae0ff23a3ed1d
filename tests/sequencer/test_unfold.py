"""A recipe's repeats, sweeps, tunings and cyclings, written out as rounds."""

import math

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from pulsetally.sequencer.bench import Bench, CellVoltsUnreachable, parse_bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.quantities import NUMBER
from pulsetally.sequencer.ranges import axis_values
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.records import (
    POINTS,
    RecordTooLong,
    train_period,
    train_points,
    train_window,
)
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.rounds import Cycle, Loop, Preset, Pulse, Read, Step
from pulsetally.sequencer.unfold import Unfolding

HEAD = """\
recipe: test
parameters:
  {stored: 2, hold: 10 s, wide: 100 us, low: 2.5 V, size: 4 V, slow: 20 ms, share: 50 %, many: 9}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: wide}
  deep: {level: -5 V, width: 2 ms, at: cell}
steps:
"""
READ = "{read: up, until: low, at most: 9}"
BENCH = shipped_bench()


def plan_of(steps: str, bench: Bench = BENCH) -> Plan:
    return make_plan(parse_recipe(f"{HEAD}{steps}\n", file="r.yaml"), bench)


def settings_of(steps: str, *names: str) -> list[tuple[float, ...]]:
    return [tuple(each.settings[name] for name in names) for each in plan_of(steps).rounds]


# Ranges; the values are closed forms.


def test_a_range_with_points_has_even_steps_and_both_ends() -> None:
    found = settings_of(
        "  - {sweep: {up.level: {from: 3 V, to: 4 V, points: 5}}, steps: [{preset: down},"
        " {step: up}]}",
        "up.level",
    )
    assert found == [(3.0,), (3.25,), (3.5,), (3.75,), (4.0,)]


def test_a_range_per_decade_has_even_ratios_and_both_ends() -> None:
    found = settings_of(
        "  - {sweep: {up.width: {from: 10 us, to: 1 ms, per decade: 3}}, steps: [{preset: down},"
        " {step: up}]}",
        "up.width",
    )
    widths = [width for (width,) in found]
    assert (widths[0], widths[-1]) == (10e-6, 1e-3)
    assert widths == pytest.approx([10e-6 * 10 ** (step / 3) for step in range(7)])


def test_a_range_may_go_down() -> None:
    found = settings_of(
        "  - {sweep: {hold: {from: 100 s, to: 1 s, per decade: 1}}, steps: [{preset: down},"
        " {wait: hold}]}",
        "hold",
    )
    assert [hold for (hold,) in found] == pytest.approx([100, 10, 1])


@pytest.mark.parametrize(
    ("written", "values"),
    [
        # In decimal, as a person writes them.
        ({"from": 1, "to": 1000, "per decade": 1}, [1, 10, 100, 1000]),
        ({"from": 20000, "to": 2, "per decade": 1}, [20000, 2000, 200, 20, 2]),
        ({"from": 0.3, "to": 300, "per decade": 1}, [0.3, 3, 30, 300]),
        ({"from": 0.1, "to": 0.7, "points": 7}, [0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7]),
    ],
)
def test_whole_decades_and_points_of_a_range_are_exact(
    written: dict[str, float], values: list[float]
) -> None:
    assert axis_values("n", written, NUMBER) == values


def test_every_whole_decade_within_a_finer_range_is_exact() -> None:
    found = axis_values("n", {"from": 7, "to": 7e6, "per decade": 3}, NUMBER)
    assert found[::3] == [7 * 10**decade for decade in range(7)]
    assert found == pytest.approx([7 * 10 ** (step / 3) for step in range(19)], rel=1e-14)


def test_axes_that_move_together_form_no_grid() -> None:
    found = settings_of(
        "  - {sweep: {stored: [1, 2, 3], hold: [1 s, 5 s, 9 s]}, together: yes,"
        " steps: [{preset: down}, {step: up, count: stored}, {wait: hold}]}",
        "stored",
        "hold",
    )
    assert found == [(1, 1), (2, 5), (3, 9)]


SHUFFLED = (
    "  - {{sweep: {{stored: [1, 2, 3, 4], hold: [1 s, 2 s, 3 s]}}, order: shuffled, seed: {seed},"
    " steps: [{{preset: down}}, {{step: up, count: stored}}, {{wait: hold}}]}}"
)


@settings(deadline=None, max_examples=8)
@given(st.integers(0, 2**32))
@example(1)
def test_a_shuffled_sweep_does_each_combination_once_and_keeps_its_order(seed: int) -> None:
    steps = SHUFFLED.format(seed=seed)
    order = settings_of(steps, "stored", "hold")
    assert sorted(order) == [(stored, hold) for stored in (1, 2, 3, 4) for hold in (1, 2, 3)]
    assert settings_of(steps, "stored", "hold") == order


def test_another_seed_gives_another_order() -> None:
    orders = {tuple(settings_of(SHUFFLED.format(seed=seed), "stored", "hold")) for seed in range(9)}
    # Of 12! orders, nine that are drawn by chance don't repeat.
    assert len(orders) == 9


# Tune and cycle.


def test_a_tune_is_planned_with_all_its_rounds_and_gets_its_value_later() -> None:
    plan = plan_of(
        "  - {tune: up.width, between: [50 us, 200 us], full count: 9, at most: 5,"
        f" steps: [{{preset: down}}, {READ}]}}"
    )
    assert len(plan.rounds) == 5
    assert len({id(each.tune) for each in plan.rounds}) == 1
    tuned = plan.rounds[2].tuned(123e-6)
    assert tuned.settings["up.width"] == 123e-6
    (_, read) = tuned.actions
    assert isinstance(read, Read)
    assert read.pulse.width == read.settings["up.width"] == 123e-6
    assert tuned.number == 3


@pytest.mark.parametrize(
    ("pairs", "each_decade", "stops"),
    [
        (1, 1, [1]),
        (10, 1, [1, 10]),
        (1000, 1, [1, 10, 100, 1000]),
        (300, 1, [1, 10, 100, 300]),
        # closed form: 10^(1/3) = 2.154, 10^(2/3) = 4.642, rounded to whole pairs.
        (100, 3, [1, 2, 5, 10, 22, 46, 100]),
    ],
)
def test_a_cycle_pauses_so_often_a_decade(pairs: int, each_decade: int, stops: list[int]) -> None:
    plan = plan_of(
        f"  - {{cycle: {{down: down, up: up}}, pairs: {pairs}, pauses per decade: {each_decade},"
        f" steps: [{{preset: down}}, {READ}]}}"
    )
    actions = [action for each in plan.rounds for action in each.actions]
    cycles = [action for action in actions if isinstance(action, Cycle)]
    assert [each.done + each.pairs for each in cycles] == stops
    assert plan.pairs == sum(each.pairs for each in cycles) == pairs
    # Before the first pair, at each pause, and after the last.
    at = [
        each.settings["cycles"]
        for each in plan.rounds
        if any(isinstance(action, Preset) for action in each.actions)
    ]
    assert at == [0, *stops]


def test_stated_pauses_are_done_in_order_and_once() -> None:
    plan = plan_of(
        "  - {cycle: {down: down, up: up}, pairs: 50, pause at: [20, 5, 20, 1e6],"
        f" steps: [{{preset: down}}, {READ}]}}"
    )
    cycles = [
        action for each in plan.rounds for action in each.actions if isinstance(action, Cycle)
    ]
    assert [(each.done, each.pairs) for each in cycles] == [(0, 5), (5, 15), (20, 30)]


# Every refusal of the unfolding, with a recipe that deserves it; those of too many rounds and
# steps, which take a while to be found, are in test_plan.py.

TUNE = "tune: up.width, between: [50 us, 200 us], full count: 9"
CYCLE = "cycle: {down: down, up: up}, pairs: 10"
COUNT = "tune: up.width, between: [50 us, 200 us]"
ROUND = f"steps: [{{preset: down}}, {READ}]"
REFUSED = [
    (f"{{{CYCLE}, steps: [{{{TUNE}, steps: [{{preset: down}}, {READ}]}}]}}",
     "a tune stands inside a cycle"),
    (f"{{{CYCLE}, steps: [{{{CYCLE}}}]}}", "a cycle stands inside a cycle"),
    ("{tune: up.level, between: [-4 V, 4 V], full count: 9, steps: [{preset: down},"
     " {read: up, until: 0 V, at most: 9}]}", "turns a pulse round on the way"),
    (f"{{{TUNE}, steps: [{{preset: down}}, {READ}, {{pund: up}}]}}",
     "the steps of a tune hold something else than preset, step, read, wait and contact"),
    (f"{{{TUNE}, steps: [{{preset: down}}, {READ}, {{preset: down}}]}}",
     "the steps of a tune are not one round"),
    (f"{{{TUNE}, steps: [{{preset: down}}, {{step: up}}, {READ}]}}",
     "a tune has no read right after its preset"),
    ("{tune: stored, between: [20, 60], full count: 9, steps: [{preset: down},"
     " {read: up, until: low, at most: stored}]}",
     "a tune tries fractions of 'stored', and 'at most' in its steps is a whole number"),
    ("{tune: stored, between: [1, 20], full count: 9, steps: [{preset: down},"
     " {read: up, until: low, at most: 60, capture: train, train of: stored}]}",
     "a tune tries fractions of 'stored', and 'train of' in its steps is a whole number"),
    (f"{{tune: stored, between: [1, 20], full count: 9, steps: [{{preset: down}}, {READ},"
     " {step: up, count: stored}]}",
     "a tune tries fractions of 'stored', and 'count' in its steps is a whole number"),
    (f"{{tune: hold, between: [1 s, 9 s], full count: 9, steps: [{{preset: down}}, {READ},"
     " {wait: hold}]}", "nothing up to the first read of a tune depends on 'hold'"),
    (f"{{tune: slow, between: [1 s, 9 s], full count: 9, steps: [{{preset: down}}, {READ}]}}",
     "nothing up to the first read of a tune depends on 'slow'"),
    (f"{{sweep: {{stored: [12, 0.5]}}, steps: [{{{COUNT}, full count: stored, {ROUND}}}]}}",
     "a value swept as 'full count' does not fit: 0.5 is not above 1"),
    (f"{{sweep: {{stored: [0]}}, steps: [{{{COUNT}, full count: 9, within: stored, {ROUND}}}]}}",
     "a value swept as 'within' does not fit: 0 is not above 0"),
    (f"{{sweep: {{many: [300]}}, steps: [{{{COUNT}, full count: 9, at most: many, {ROUND}}}]}}",
     "at most is 300 in a sweep"),
    ("{sweep: {hold: [-5 s]}, steps: [{preset: down}, {ask: hello, within: hold}]}",
     "a value swept as 'within' does not fit: -5"),
    ("{sweep: {hold: [1e12 s]}, steps: [{preset: down}, {ask: hello, within: hold}]}",
     "a value swept as 'within' does not fit: 1"),
    (f"{{sweep: {{share: [500 %]}}, steps: [{{{CYCLE}, stop when: {{switched charge below: share}},"
     " steps: [{pund: up}]}]}", "a value swept as 'switched charge below' does not fit: "),
    (f"{{sweep: {{share: [-50 %]}}, steps: [{{{CYCLE}, stop when: {{full count off by: share}},"
     f" {ROUND}}}]}}", "a value swept as 'full count off by' does not fit: -"),
    ("{cycle: {down: up, up: down}, pairs: 10}", "cycling from 4 V to -5 V does not go up"),
    (f"{{{CYCLE}, stop when: {{switched charge below: 50 %}}, steps: [{{preset: down}}, {READ}]}}",
     "a cycle stops on 'switched charge below', and nothing in its steps measures that"),
    (f"{{{CYCLE}, stop when: {{full count off by: 50 %}}, steps: [{{pund: up}}]}}",
     "a cycle stops on 'full count off by', and nothing in its steps measures that"),
    (f"{{{CYCLE}, stop when: {{contact is lost: yes}}, steps: [{{pund: up}}]}}",
     "a cycle stops on 'contact is lost', and nothing in its steps measures that"),
    ("{sweep: {hold: [-1 s]}, steps: [{preset: down}, {wait: hold}]}", "a wait of -1 s is swept"),
    ("{pund: down}", "pund with pulse 'down' needs a pulse up from 0 V"),
    ("{read: up, until: 4.5 V, at most: 9}",
     "reading with pulse 'up' until 4.5 V can't end, since the cell goes from 0 V to 3.914 V"),
    ("{sweep: {size: [-4 V]}, steps: [{loop: size, period: slow}]}",
     "a loop of -4 V and 0.02 s is swept"),
    ("{sweep: {stored: [1.5]}, steps: [{preset: down}, {step: up, count: stored}]}",
     "count is 1.5 in a sweep"),
    ("{sweep: {up.level: [0 V]}, steps: [{preset: down}, {step: up}]}",
     "pulse 'up': its level is its base"),
    ("{sweep: {up.width: [-1 us]}, steps: [{preset: down}, {step: up}]}",
     "pulse 'up': a time in it is out of bounds"),
    ("{sweep: {up.edge: [90 us]}, steps: [{preset: down}, {step: up}]}",
     "pulse 'up': its edges of 90 us leave no flat top in a width of 100 us"),
]  # fmt: skip


@pytest.mark.parametrize(("step", "words"), REFUSED)
def test_what_makes_no_rounds_is_refused_with_a_remedy(step: str, words: str) -> None:
    recipe = parse_recipe(f"{HEAD}  - {step}\n", file="r.yaml")
    unfolding = Unfolding(recipe, BENCH)
    unfolding.rounds()
    assert any(words in problem for problem in unfolding.problems)
    for problem in unfolding.problems:
        assert problem.startswith("r.yaml: ")
        assert ". To fix it, " in problem
    with pytest.raises(PlanError) as caught:
        make_plan(recipe, BENCH)
    assert set(unfolding.problems) <= set(caught.value.problems)


# Volts across the cell.


def wired(**parts: str) -> Bench:
    """Return the shipped bench with another load, diode or clamp."""
    text = BENCH.text
    for old, new in (
        ("high-z", parts.get("load")),
        ("series diode: none", parts.get("diode")),
        ("clamp: none", parts.get("clamp")),
    ):
        text = text.replace(old, new or old)
    return parse_bench(text, file="b.yaml")


DIODE = "series diode: {saturation current: 3 uA, emission: 1.05}"
BLOCKING = "series diode: {saturation current: 1e-12 A}"
CLAMP = "clamp: {breakdown: 5 V}"
BENCHES = {
    "high-z": wired(),
    "50 ohm": wired(load="50 ohm"),
    "1 kohm": wired(load="1 kohm"),
    "diode": wired(diode=DIODE),
    "diode and 50 ohm": wired(diode=DIODE, load="50 ohm"),
    "clamp": wired(clamp=CLAMP),
}


@pytest.mark.parametrize("name", sorted(BENCHES))
@settings(deadline=None)
@given(st.floats(-4.9, 4.9))
@example(0.0)
@example(4.9)
@example(-4.9)
def test_the_panel_for_a_voltage_at_the_cell_gives_that_voltage(name: str, volts: float) -> None:
    bench = BENCHES[name]
    panel = bench.panel_volts_for_cell(volts)
    assert bench.cell_volts(panel) == pytest.approx(volts, abs=1e-9)
    assert math.copysign(1, panel) == math.copysign(1, volts) or abs(volts) < 1e-9


def test_a_generator_told_50_ohm_is_set_to_half() -> None:
    # closed form: the panel shows what 50 ohm would get.
    whole, half = (BENCHES[name].panel_volts_for_cell(4.0) for name in ("high-z", "50 ohm"))
    assert half == pytest.approx(whole / 2)
    # closed form: divider of 220.05 kohm and 10 Mohm.
    assert whole == pytest.approx(4.0 * (1 + 220_050 / 10e6))


def test_a_polarity_that_the_diode_blocks_is_refused() -> None:
    bench = wired(diode=BLOCKING)
    with pytest.raises(CellVoltsUnreachable, match="the series diode blocks that polarity"):
        bench.panel_volts_for_cell(-5.0)
    words = "the level of 'deep' shall be -5 V across the cell, and the series diode blocks that"
    with pytest.raises(PlanError, match=words):
        plan_of("  - preset: deep", bench)
    with pytest.raises(PlanError, match="a loop of 4 V shall be -4 V across the cell, and the"):
        plan_of("  - {loop: 4 V, period: 20 ms, at: cell}", bench)


def test_what_a_clamp_cuts_off_is_refused() -> None:
    with pytest.raises(PlanError, match="shall be -5 V across the cell, and the clamp conducts at"):
        plan_of("  - preset: deep", wired(clamp=CLAMP))


def test_a_pulse_at_the_cell_is_planned_with_what_the_panel_must_show() -> None:
    plan = plan_of("  - {preset: deep}\n  - {loop: 4 V, period: 20 ms, at: cell}")
    preset, loop = (action for each in plan.rounds for action in each.actions)
    assert isinstance(preset, Preset)
    assert isinstance(loop, Loop)
    assert BENCH.cell_volts(preset.pulse.level) == pytest.approx(-5)
    assert preset.pulse.base == 0
    assert BENCH.cell_volts(loop.pulse.level) == pytest.approx(4)
    assert loop.pulse.base == -loop.pulse.level
    # What is listed by its settings has what was written.
    assert plan.rounds[0].settings["deep.level"] == -5


# Records of trains.


def a_pulse(width: float = 100e-6, rest: float = 1e-3) -> Pulse:
    return Pulse(name="up", level=4.0, base=0.0, width=width, edge=80e-9, rest=rest)


def test_a_train_has_200_samples_on_each_flat_top() -> None:
    pulse = a_pulse()
    for count in (2, 10, 50):
        points = train_points(pulse, count)
        top = (pulse.width - pulse.ramp) / (count * train_period(pulse)) * points
        assert top == pytest.approx(200, rel=1e-3)
        window = train_window(pulse, count)
        assert window.points == points
        # The whole last period is in it, and some base before the first.
        begin = window.before * window.seconds
        assert begin > pulse.ramp / 2
        assert window.seconds - begin >= count * train_period(pulse) - pulse.ramp / 2 - 1e-12


def test_a_long_train_has_fewer_samples_on_a_top_and_at_last_too_few() -> None:
    pulse = a_pulse()
    # closed form: a period is 11 flat tops and a bit; 1e6 samples are 200 on each of 450 tops.
    assert train_points(pulse, 450) < 1_000_000
    assert train_points(pulse, 460) == 1_000_000
    assert train_points(pulse, 1100) == 1_000_000
    with pytest.raises(RecordTooLong, match=r"a train of 1200 needs .* samples"):
        train_points(pulse, 1200)


def test_a_short_train_has_no_fewer_samples_than_one_pulse() -> None:
    assert train_points(a_pulse(rest=0.0), 2) == POINTS


def test_trains_send_as_many_pulses_as_were_asked_for() -> None:
    plan = plan_of(
        "  - {preset: down}\n"
        "  - {step: up, count: 5, capture: train, train of: 3}\n"
        "  - {read: up, until: low, at most: 7, capture: train, train of: 3}"
    )
    (only,) = plan.rounds
    _, step, read = only.actions
    assert isinstance(step, Step)
    assert isinstance(read, Read)
    assert (step.count, step.train, read.train) == (5, 3, 3)
    # The last train is as long as is left.
    assert plan.most_pulses == 1 + 5 + 7


def test_a_parameter_is_listed_only_inside_its_sweep() -> None:
    plan = plan_of(
        "  - {preset: down}\n"
        "  - sweep: {hold: [1 s, 10 s]}\n"
        "    steps: [{preset: down}, {wait: hold}]\n"
        "  - {preset: down}"
    )
    assert [each.settings.get("hold") for each in plan.rounds] == [None, 1, 10, None]


def test_what_is_swept_is_not_swept_inside_again() -> None:
    steps = (
        "  - sweep: {up.level: [3 V, 4 V]}\n"
        "    steps:\n"
        "      - sweep: {up.level: [3.5 V]}\n"
        "        steps: [{preset: down}]\n"
    )
    with pytest.raises(PlanError, match="swept inside its own sweep"):
        plan_of(steps)


def test_trains_are_captured_as_trains() -> None:
    with pytest.raises(PlanError, match="add 'capture: train'"):
        plan_of("  - {preset: down}\n  - {step: up, count: 5, train of: 3}")
