"""From recipe and bench to rounds, before power."""

import pytest

from pulsetally.sequencer.bench import parse_bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import find_recipe, parse_recipe, shipped_recipes
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.rounds import Preset, Read, Step, Wait

HEAD = """\
recipe: test
parameters: {stored: 2, hold: 10 s, wide: 100 us}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: wide}
steps:
"""


def plan_of(steps: str, overrides: dict[str, str] | None = None) -> Plan:
    recipe = parse_recipe(HEAD + steps, file="r.yaml", overrides=overrides)
    return make_plan(recipe, shipped_bench())


def test_each_preset_begins_a_round() -> None:
    plan = plan_of("  - {repeat: 3, steps: [{preset: down}, {step: up}, {wait: hold}]}\n")
    assert [each.number for each in plan.rounds] == [1, 2, 3]
    assert [type(action) for action in plan.rounds[0].actions] == [Preset, Step, Wait]
    assert plan.most_pulses == 6
    assert plan.seconds > 30


def test_a_sweep_of_several_axes_is_a_grid_in_the_order_written() -> None:
    plan = plan_of(
        "  - sweep: {stored: [1, 2], up.width: [80 us, 100 us]}\n"
        "    steps: [{preset: down}, {step: up, count: stored}]\n"
    )
    grid = [(each.settings["stored"], each.settings["up.width"]) for each in plan.rounds]
    assert grid == [(1, 80e-6), (1, 100e-6), (2, 80e-6), (2, 100e-6)]
    assert plan.swept == ("stored", "up.width")
    widths = [
        action.pulse.width
        for each in plan.rounds
        for action in each.actions
        if isinstance(action, Step)
    ]
    assert widths == [80e-6, 100e-6, 80e-6, 100e-6]


def test_a_swept_parameter_reaches_the_pulse_that_names_it() -> None:
    plan = plan_of("  - sweep: {wide: [80 us, 125 us]}\n    steps: [{preset: down}, {step: up}]\n")
    assert [each.settings["up.width"] for each in plan.rounds] == [80e-6, 125e-6]


def test_a_round_without_a_preset_is_not_repeatable_and_is_mentioned() -> None:
    plan = plan_of("  - {read: up, until: 2.5 V, at most: 9}\n")
    (only,) = plan.rounds
    assert not only.repeatable
    assert any("unknown state" in warning for warning in plan.warnings)
    (read,) = only.actions
    assert isinstance(read, Read)
    assert (read.threshold, read.at_most) == (2.5, 9)


@pytest.mark.parametrize(
    ("overrides", "words"),
    [
        ({"up.level": "7 V"}, "'up' of 7 V at the panel means 6.8.* V across the cell, beyond"),
        ({"down.level": "-12 V"}, "'down' of -12 V .* at the terminal, beyond the source limit"),
        ({"up.edge": "90 us"}, "leave no flat top"),
        ({"up.level": "0 V"}, "its level is its base"),
        ({"up.level": "2 V"}, "can't end, since the cell goes from 0 V to 1.957 V at most"),
    ],
)
def test_what_must_not_run_is_refused_before_power(overrides: dict[str, str], words: str) -> None:
    steps = "  - preset: down\n  - {read: up, until: 2.5 V, at most: 9}\n"
    with pytest.raises(PlanError, match=words):
        plan_of(steps, overrides)


def test_a_swept_level_beyond_the_limit_is_refused() -> None:
    with pytest.raises(PlanError, match="beyond the node limit of 6 V"):
        plan_of("  - sweep: {up.level: [4 V, 8 V]}\n    steps: [{preset: down}, {step: up}]\n")


def test_a_panel_told_50_ohm_counts_twice_against_the_limits() -> None:
    recipe = parse_recipe(HEAD + "  - preset: down\n", file="r.yaml")
    bench = parse_bench(shipped_bench().text.replace("high-z", "50 ohm"), file="b.yaml")
    with pytest.raises(PlanError, match=r"-5 V at the panel means -9\.78.* V across the cell"):
        make_plan(recipe, bench)


def test_too_many_rounds_are_refused_quickly() -> None:
    steps = "  - {repeat: 1000000, steps: [{preset: down}]}\n"
    with pytest.raises(PlanError, match="over 100000 rounds"):
        plan_of(steps)


def test_a_count_swept_over_fractions_is_refused() -> None:
    with pytest.raises(PlanError, match=r"count is 1\.5"):
        plan_of(
            "  - sweep: {stored: [1.5]}\n    steps: [{preset: down}, {step: up, count: stored}]\n"
        )


# What the shipped recipes promise: rounds, what they sweep, and how many rounds can't be repeated:
# a readback, what follows on a person, and the cycling itself.
SHIPPED: dict[str, tuple[int, tuple[str, ...], int]] = {
    "amplitude_sweep": (25, ("up.level",), 0),
    "disturb": (6, (), 0),
    "endurance": (23, ("cycles",), 7),
    "full_count": (20, (), 0),
    "hand_over": (2, (), 1),
    "hysteresis": (3, (), 0),
    "imprint": (12, ("fills", "hold"), 0),
    "pund": (5, (), 0),
    "readback": (1, (), 1),
    "rest_sweep": (24, ("up.rest",), 0),
    "retention": (18, ("hold",), 0),
    "scatter": (200, (), 0),
    "step_and_read": (5, ("stored",), 0),
    "switching_transients": (15, ("try.level", "try.width"), 0),
    "threshold_study": (90, ("up.level", "threshold"), 0),
    "tune_count": (12, ("up.width",), 0),
    "width_sweep": (15, ("up.width",), 0),
}


def test_every_shipped_recipe_is_listed_here() -> None:
    assert shipped_recipes() == sorted(SHIPPED)


@pytest.mark.parametrize("name", sorted(SHIPPED))
def test_shipped_recipes_plan_on_the_shipped_bench(name: str) -> None:
    plan = make_plan(find_recipe(name), shipped_bench())
    once = sum(not each.repeatable for each in plan.rounds)
    assert (len(plan.rounds), plan.swept, once) == SHIPPED[name]
    assert plan.recipe.model.purpose


def test_a_threshold_is_compared_with_what_the_node_can_reach() -> None:
    recipe = parse_recipe(
        HEAD + "  - preset: down\n  - {read: up, until: 2.5 V, at most: 9}\n",
        file="r.yaml",
        overrides={"up.level": "2.2 V", "down.level": "-2.5 V"},
    )
    text = shipped_bench().text
    told_50 = parse_bench(text.replace("high-z", "50 ohm"), file="b.yaml")
    assert len(make_plan(recipe, told_50).rounds) == 1
    clamped = parse_bench(text.replace("clamp: none", "clamp: {breakdown: 2 V}"), file="b.yaml")
    with pytest.raises(PlanError, match="can't end, since the cell goes from 0 V to 2 V at most"):
        make_plan(
            parse_recipe(HEAD + "  - {read: up, until: 2.5 V, at most: 9}\n", file="r.yaml"),
            clamped,
        )


def test_what_a_diode_in_series_spoils_is_told() -> None:
    text = shipped_bench().text
    diode = text.replace("series diode: none", "series diode: {saturation current: 3 uA}")
    recipe = parse_recipe(HEAD + "  - pund: up\n  - {loop: 4 V, period: 9 ms}\n", file="r.yaml")
    told = " ".join(make_plan(recipe, parse_bench(diode, file="b.yaml")).warnings)
    assert "so the switched charge can't be measured well" in told
    assert "so the loop can't be measured well" in told
    assert "behind a series diode" not in " ".join(make_plan(recipe, shipped_bench()).warnings)


def test_what_the_driver_would_refuse_is_refused_in_the_plan() -> None:
    text = shipped_bench().text.replace("node: 6 V", "node: 4 V")
    text = text.replace("series diode: none", "series diode: {saturation current: 1e-12 A}")
    recipe = parse_recipe(HEAD + "  - preset: down\n", file="r.yaml")
    with pytest.raises(PlanError, match="the level of pulse 'down' is -5 V, beyond"):
        make_plan(recipe, parse_bench(text, file="b.yaml"))


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ("  - sweep: {stored: [-3]}\n    steps: [{repeat: stored, steps: [{preset: down}]}]\n",
         "repeat is -3"),
        ("  - sweep: {stored: [2.9]}\n    steps: [{repeat: stored, steps: [{preset: down}]}]\n",
         r"repeat is 2\.9"),
        ("  - sweep: {hold: [-3600 s]}\n    steps: [{preset: down}, {wait: hold}]\n",
         "wait of -3600 s"),
        ("  - sweep: {up.width: [2000 s]}\n    steps: [{preset: down}, {step: up}]\n",
         "out of bounds"),
        ("  - {repeat: 1000000, steps: [{repeat: 1000000, steps: [{wait: hold}]}]}\n",
         "over 1000000 steps"),
    ],
)  # fmt: skip
def test_swept_values_keep_the_bounds(steps: str, words: str) -> None:
    with pytest.raises(PlanError, match=words):
        plan_of(steps)


def test_settings_declared_as_parameters_are_known_in_every_round() -> None:
    plan = plan_of(
        "  - sweep: {up.width: [80 us]}\n    steps: [{preset: down}]\n  - preset: down\n"
    )
    assert [each.settings["up.width"] for each in plan.rounds] == [80e-6, 100e-6]


@pytest.mark.parametrize("level", ["6 V", "-6 V"])
def test_a_pulse_exactly_at_the_limit_is_planned_and_one_beyond_is_not(level: str) -> None:
    text = HEAD.replace("steps:", f"  most: {{level: {level}, width: 1 ms, at: cell}}\nsteps:")
    text += "  - preset: most\n"
    recipe = parse_recipe(text, file="r.yaml")
    (voltage, *_) = make_plan(recipe, shipped_bench()).volts
    # The shipped bench's limit across the cell.
    assert abs(voltage.cell) == pytest.approx(6, rel=1e-12)
    with pytest.raises(PlanError, match="beyond the node limit of 6 V"):
        make_plan(parse_recipe(text.replace("6 V", "6.000001 V"), file="r.yaml"), shipped_bench())


UP = "{read: up, until: 2.5 V, at most: 9}"


@pytest.mark.parametrize(
    ("steps", "told"),
    [
        (f"[{{preset: top}}, {{wait: hold}}, {UP}]", True),
        (f"[{{preset: top}}, {{step: up}}, {UP}]", True),
        (f"[{{preset: down}}, {UP}]", False),
        (f"[{{preset: top}}, {{step: down}}, {UP}]", False),
        (f"[{{preset: top}}, {{read: down, until: -2.5 V, at most: 9}}, {UP}]", False),
    ],
)
def test_a_read_that_goes_the_way_of_its_preset_is_mentioned(steps: str, *, told: bool) -> None:
    text = HEAD.replace("steps:", "  top: {level: 5 V, width: 2 ms}\nsteps:")
    text += f"  - repeat: 2\n    steps: {steps}\n"
    warnings = make_plan(parse_recipe(text, file="r.yaml"), shipped_bench()).warnings
    found = [each for each in warnings if "'top' goes up, and so does the read 'up'" in each]
    assert len(found) == told
