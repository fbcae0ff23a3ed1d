"""The recipe language: what it accepts, and how it tells what is wrong."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.sequencer.errors import Mistake, RecipeError
from pulsetally.sequencer.recipe import load_recipe, parse_recipe

GOOD = """\
recipe: Full count
parameters: {stored: 5, hold: 10 s}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us, rest: 1 ms}
steps:
  - sweep: {hold: [1 s, 10 s], up.width: [80 us, 100 us]}
    steps:
      - repeat: 2
        steps:
          - preset: down
          - step: up
            count: stored
          - wait: hold
          - read: up
            until: 2.5 V
            at most: 60
"""


def mistakes_of(text: str, overrides: dict[str, str] | None = None) -> list[Mistake]:
    with pytest.raises(RecipeError) as caught:
        parse_recipe(text, file="r.yaml", overrides=overrides)
    mistakes: list[Mistake] = caught.value.mistakes
    return mistakes


def outcome(text: str) -> list[Mistake] | None:
    """Read a recipe; return None when it is good, else its mistakes; nothing else may come."""
    try:
        parse_recipe(text, file="r.yaml")
    except RecipeError as error:
        return error.mistakes
    return None


def test_a_good_recipe_is_read() -> None:
    recipe = parse_recipe(GOOD, file="r.yaml")
    assert recipe.title == "Full count"
    assert recipe.model.pulses["up"].width == 100e-6
    assert recipe.model.pulses["up"].base == 0.0


def test_three_mistakes_are_told_at_once_each_with_its_place() -> None:
    text = (
        GOOD.replace("- wait: hold", "- wiat: hold")
        .replace("width: 2 ms", "width: 2 V")
        .replace("read: up", "read: upp")
    )
    found = [(each.line, each.column, each.problem, each.remedy) for each in mistakes_of(text)]
    assert found == [
        (
            4,
            30,
            "'2 V' is not a time (its unit is s, min, h, d, with or without an SI prefix)",
            "write a time such as '100 us'",
        ),
        (14, 13, "there is no step 'wiat'", "write 'wait'"),
        (
            15,
            19,
            "'upp' is not a pulse of this recipe",
            "write 'up', or declare it under pulses",
        ),
    ]


# What is changed in the good recipe, and words of the one mistake it makes.
MISTAKES = [
    ("level: 4 V", "levle: 4 V", "there is no setting 'levle'"),
    ("level: 4 V, ", "", "the setting 'level' is missing"),
    ("level: 4 V", "level: 4", "4 has no unit"),
    ("width: 100 us", "width: -1 us", "not above 0"),
    ("width: 100 us", "width: .nan", "neither a time nor"),
    ("rest: 1 ms", "rest: -1 ms", "below 0"),
    ("repeat: 2", "repeat: 0", "below 1"),
    ("repeat: 2", "repeat: 2.5", "not a whole number"),
    ("repeat: 2", "repeat: often", "neither a plain number nor a declared parameter"),
    ("count: stored", "count: hold", "parameter 'hold' does not fit"),
    ("at most: 60", "at most: 60 V", "not a plain number"),
    ("            at most: 60\n", "", "the setting 'at most' is missing"),
    ("at most: 60", "at_most: 60", "at_most"),
    ("until: 2.5 V", "until: 2.5 s", "not a voltage"),
    ("hold: [1 s, 10 s]", "hold: []", "a sweep without values"),
    ("hold: [1 s, 10 s]", "hold: [1 V]", "not a time, which hold needs"),
    ("hold: [1 s, 10 s]", "hodl: [1 s]", "'hodl' is not a parameter"),
    ("hold: [1 s, 10 s]", "hold: 1 s", "neither a list nor a range"),
    ("stored: 5", "stored: five", "not a quantity"),
    ("recipe: Full count", "recipe:", "a recipe has a title"),
    ("recipe: Full count", "recipe: Full count\nauthor: me", "there is no setting 'author'"),
    ("  up: {", "  down: {", "stands twice"),
    ("stored: 5", "stored: &a 5", "anchors"),
    ("pulses:\n", "pulses:\n\t", "tab"),
    ("pulses:\n", "pulses: [\n", "Flow|flow|bracket|expected"),
]


@pytest.mark.parametrize(("good", "bad", "words"), MISTAKES)
def test_each_mistake_has_a_place_and_a_remedy(good: str, bad: str, words: str) -> None:
    assert good in GOOD
    found = mistakes_of(GOOD.replace(good, bad, 1))
    told = [each for each in found if any(word in each.problem for word in words.split("|"))]
    assert told, [str(each) for each in found]
    for each in found:
        assert each.line >= 1
        assert each.column >= 1
        assert each.remedy


def test_a_step_with_two_mistakes_tells_both() -> None:
    found = mistakes_of(GOOD.replace("until: 2.5 V", "until: 2.5 s").replace("most: 60", "most: 0"))
    assert [each.line for each in found] == [16, 17]


def test_overrides_reach_pulses_and_parameters() -> None:
    recipe = parse_recipe(GOOD, file="r.yaml", overrides={"down.width": "1ms", "stored": "3"})
    assert recipe.model.pulses["down"].width == pytest.approx(1e-3)
    assert recipe.model.parameters["stored"] == 3


def test_a_wrong_override_is_told_as_one() -> None:
    told = [str(each) for each in mistakes_of(GOOD, {"up.widht": "80us"})]
    assert told == [
        "--set up.widht=80us: this recipe has no parameter or pulse setting 'up.widht'."
        " To fix it, write 'up.width'."
    ]
    (told_unit,) = mistakes_of(GOOD, {"down.width": "80 V"})
    assert told_unit.file == "--set down.width=80 V"
    assert "not a time" in told_unit.problem
    (told_use,) = mistakes_of(GOOD, {"stored": "-2"})
    assert told_use.file == "--set stored=-2"
    (told_swept,) = mistakes_of(GOOD, {"up.width": "80 us"})
    assert "would change nothing" in told_swept.problem


def test_a_missing_file_is_a_mistake_and_no_traceback(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match="can't be read: No such file"):
        load_recipe(tmp_path / "nothing.yaml")
    with pytest.raises(RecipeError, match="can't be read: Is a directory"):
        load_recipe(tmp_path)


def test_a_file_that_is_too_large_for_a_recipe_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "large.yaml"
    path.write_text("#" * 200_001)
    with pytest.raises(RecipeError, match="over 200000 bytes"):
        load_recipe(path)


def test_deep_nesting_is_refused() -> None:
    with pytest.raises(RecipeError, match="deep"):
        parse_recipe("recipe: x\nsteps: " + "[" * 200 + "]" * 200, file="r.yaml")


@given(st.text(max_size=300))
def test_any_text_is_a_recipe_or_mistakes_with_places(text: str) -> None:
    mistakes = outcome(text)
    assert mistakes is None or mistakes
    assert all(each.line >= 1 and each.column >= 1 for each in mistakes or [])


@given(st.data())
def test_a_mangled_recipe_gives_mistakes_and_nothing_else(data: st.DataObject) -> None:
    begin = data.draw(st.integers(0, len(GOOD) - 1))
    end = data.draw(st.integers(begin, min(len(GOOD), begin + 20)))
    middle = data.draw(st.text(alphabet=":-[]{}'\"&*!|>#%@ \n\tabc01", max_size=10))
    mistakes = outcome(GOOD[:begin] + middle + GOOD[end:])
    assert mistakes is None or mistakes


@pytest.mark.parametrize(
    ("step", "place"),
    [
        ("{sweep: {stored: [1, 2], wide: [1 ms, 2 ms]}", "steps[0].sweep.wide"),
        ("{tune: wide, between: [1 ms, 2 ms], full count: 9", "steps[0].tune"),
    ],
)
def test_an_override_that_takes_the_place_of_a_swept_parameter_is_refused(
    step: str, place: str
) -> None:
    text = (
        "recipe: test\nparameters: {stored: 2, wide: 1 ms}\n"
        "pulses: {down: {level: -5 V, width: 2 ms}, up: {level: 4 V, width: wide}}\n"
        f"steps:\n  - {step}, steps: [{{preset: down}}, {{read: up, until: 2 V, at most: 9}}]}}\n"
    )
    (told,) = mistakes_of(text, {"up.width": "3ms"})
    assert told.path == place
    assert "--set up.width takes its place" in told.problem
    assert "leave that --set out" in told.remedy
    parse_recipe(text, file="r.yaml", overrides={"up.edge": "3us"})


@pytest.mark.parametrize(
    ("step", "place"),
    [
        ("{sweep: {hold: [0, 3]}", "steps[0].sweep.hold"),
        ("{sweep: {hold: {from: 1, to: 3, points: 3}}", "steps[0].sweep.hold"),
        ("{tune: hold, between: [0, 3], full count: 9", "steps[0].between"),
    ],
)
def test_numbers_without_a_unit_are_refused_for_what_is_used_as_a_time(
    step: str, place: str
) -> None:
    round_ = "steps: [{preset: down}, {wait: hold}, {read: up, until: 2 V, at most: 9}]"
    text = (
        "recipe: test\nparameters: {hold: 0}\n"
        "pulses: {down: {level: -5 V, width: 2 ms}, up: {level: 4 V, width: 1 ms}}\n"
        f"steps:\n  - {step}, {round_}}}\n"
    )
    (told,) = mistakes_of(text)
    assert told.path == place
    assert "used as a time" in told.problem
    assert "declare it as 'hold: 0 s'" in told.remedy
