"""The recipe language under any input: what is written is read back, and nothing else comes out
than a recipe or mistakes with places."""

import json
import random
import re
from importlib.resources import files
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from pulsetally.sequencer.errors import Mistake, PlanError, RecipeError
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import parse_recipe, shipped_recipes
from pulsetally.sequencer.recipe_text import recipe_text
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.schemas import recipe_schema
from pulsetally.sequencer.steps import RecipeModel
from pulsetally.sequencer.yaml_places import load_yaml

SCHEMA = Draft202012Validator(recipe_schema())
SHIPPED = {
    name: (files("pulsetally.recipes") / f"{name}.yaml").read_text(encoding="utf-8")
    for name in shipped_recipes()
}

# Recipes as plain data, as a YAML file would give them. Every step and setting comes up.

PULSES = ("down", "up", "touch-1", "steps")
PARAMETERS = {"hold": "10 s", "threshold": "2.5 V", "stored": 5, "share": "30 %", "n_2": "7"}
PREFIXES = {"V": ("", "m", "u", "k"), "s": ("", "m", "u", "n", "µ")}


def amounts(unit: str, low: float, high: float, name: str) -> st.SearchStrategy[Any]:
    """Draw quantities with a unit, with and without prefix and exponent, or a parameter."""
    number = st.floats(low, high, allow_subnormal=False)
    scaled = {"": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "n": 1e-9, "k": 1e3}
    quantity = st.builds(
        lambda value, prefix, gap: f"{value / scaled[prefix]!r}{gap}{prefix}{unit}",
        number,
        st.sampled_from(PREFIXES[unit]),
        st.sampled_from(("", " ")),
    )
    return quantity | st.just(name)


def counts(low: int, high: int, name: str | None = "stored") -> st.SearchStrategy[Any]:
    whole = st.integers(low, high)
    ways = whole | whole.map(float) | whole.map(str)
    return ways | st.just(name) if name else ways


VOLTS = amounts("V", -50, 50, "threshold")
ABOVE_ZERO = amounts("V", 1e-3, 50, "threshold")
TIMES = amounts("s", 1e-8, 99, "hold")
SHARES = st.floats(1e-6, 1).map(lambda share: f"{share * 100!r} %") | st.just("share")
CAPTURES = {"capture": st.sampled_from(("each", "train")), "train of": counts(1, 1000)}
SENTENCES = st.text(min_size=1, max_size=40).filter(lambda text: bool(text.strip())) | st.just("5")
NAMES = st.sampled_from(PULSES)
WHERE = st.sampled_from(("panel", "cell"))
YES_NO = st.sampled_from(("yes", "no", True, False))


def group(must: dict[str, Any], may: dict[str, Any] | None = None) -> st.SearchStrategy[Any]:
    return st.fixed_dictionaries(must, optional=may or {})


def values(unit: str, low: float) -> st.SearchStrategy[Any]:
    """Draw what an axis goes through: a list or a range, from low on."""
    one = st.floats(low, 3 * low).map(lambda value: f"{value!r} {unit}")
    begins, ends = one, st.floats(4 * low, 9 * low).map(lambda value: f"{value!r} {unit}")
    count = st.integers(2, 9)
    return (
        st.lists(one, min_size=1, max_size=3)
        | group({"from": begins, "to": ends, "per decade": count})
        | group({"from": ends, "to": begins, "points": count})
    )


AXES = group(
    {"hold": values("s", 0.5)}, {"up.width": values("s", 1e-4), "down.level": values("V", 1.0)}
)
PULSE = group(
    {"level": VOLTS, "width": TIMES},
    {"base": VOLTS | st.just(0), "edge": TIMES, "rest": TIMES, "at": WHERE},
)
PLAIN_STEPS = (
    group({"preset": NAMES}),
    group({"step": NAMES}, {"count": counts(0, 1_000_000), **CAPTURES}),
    group({"read": NAMES, "until": VOLTS, "at most": counts(1, 1_000_000)}, CAPTURES),
    group({"wait": TIMES}),
    group({"contact": NAMES}),
    group({"pund": NAMES}),
    group({"loop": ABOVE_ZERO, "period": TIMES}, {"at": WHERE}),
    group({"ask": SENTENCES}, {"within": TIMES, "otherwise": st.sampled_from(("stop", "go on"))}),
)


def nesting_steps(inner: st.SearchStrategy[Any]) -> st.SearchStrategy[Any]:
    steps = st.lists(inner, min_size=1, max_size=3)
    stops = {"switched charge below": SHARES, "full count off by": SHARES,
             "contact is lost": YES_NO}  # fmt: skip
    order = st.sampled_from(("as written", "shuffled"))
    return st.one_of(
        group({"repeat": counts(1, 1_000_000), "steps": steps}),
        group({"sweep": AXES, "steps": steps}, {"order": order, "seed": counts(0, 2**32, None)}),
        group(
            {"sweep": group({"hold": st.just(["1 s", "2 s"]), "up.rest": st.just(["1 s", "0 s"])}),
             "together": YES_NO, "steps": steps}
        ),
        group(
            {"tune": st.just("up.width"), "between": st.just(["80 us", "2 ms"]),
             "full count": counts(2, 1000), "steps": steps},
            {"within": st.floats(0.01, 5), "at most": counts(3, 200)},
        ),
        group(
            {"cycle": group({"down": NAMES, "up": NAMES}), "pairs": counts(1, 10**12)},
            {"pause at": st.lists(counts(1, 10**12, None), max_size=3), "steps": steps,
             "pauses per decade": counts(0, 20, None), "stop when": group({}, stops)},
        ),
    )  # fmt: skip


STEPS = st.recursive(st.one_of(PLAIN_STEPS), nesting_steps, max_leaves=6)
RECIPES = group(
    {
        "recipe": SENTENCES,
        "parameters": st.just(PARAMETERS),
        "pulses": st.fixed_dictionaries(dict.fromkeys(PULSES, PULSE)),
        "steps": st.lists(STEPS, min_size=1, max_size=4),
    },
    {"purpose": st.text(max_size=40)},
)


def as_text(data: object) -> str:
    """Write plain data as YAML of our own: JSON is YAML, but for characters beyond 16 bits."""
    return re.sub(
        r"\\ud[89ab]..\\ud[c-f]..",
        lambda pair: f"\\U{ord(json.loads(chr(34) + pair[0] + chr(34))):08x}",
        json.dumps(data, ensure_ascii=True),
    )


def model_of(text: str) -> RecipeModel:
    return parse_recipe(text, file="r.yaml").model


@settings(derandomize=True, max_examples=20, deadline=None)
@given(RECIPES)
def test_a_recipe_that_is_written_is_read_back_as_the_same_models(data: dict[str, Any]) -> None:
    model = model_of(as_text(data))
    text = recipe_text(model)
    again = model_of(text)
    assert again == model
    # What is written from what was read back is the same text: nothing creeps.
    assert recipe_text(again) == text
    # A schema accepts whatever the program does.
    SCHEMA.validate(data)
    SCHEMA.validate(load_yaml(text, "r.yaml").data)


@pytest.mark.parametrize("name", SHIPPED)
def test_a_shipped_recipe_is_written_and_read_back(name: str) -> None:
    model = model_of(SHIPPED[name])
    assert model_of(recipe_text(model)) == model


def test_a_written_recipe_reads_well() -> None:
    model = model_of(SHIPPED["full_count"])
    bare = [line for line in SHIPPED["full_count"].splitlines() if line and line[0] != "#"]
    assert recipe_text(model).splitlines() == [line.replace(":   ", ": ") for line in bare]


def mistakes_of(text: str) -> list[Mistake] | None:
    """Read a text; return its mistakes, or None where it is a recipe. Nothing else may come."""
    try:
        parse_recipe(text, file="r.yaml")
    except RecipeError as error:
        return error.mistakes
    return None


def check_places(text: str) -> None:
    mistakes = mistakes_of(text)
    if mistakes is None:
        return
    assert mistakes
    lines = text.count("\n") + text.count("\r") + 2
    for each in mistakes:
        assert 1 <= each.line <= lines, each
        assert each.column >= 1, each
        assert each.problem, each
        assert each.remedy, each


@settings(derandomize=True, max_examples=150, deadline=None)
@given(st.text(max_size=200) | st.text(":-[]{}'\"&*!|>#%@?, \n\tab1", max_size=60))
def test_any_text_is_a_recipe_or_mistakes_with_places_and_remedies(text: str) -> None:
    check_places(text)


def mangled(text: str, seed: int) -> str:
    """Spoil a text as slips of the hand do: by seed, one to three times."""
    drawn = random.Random(seed)
    for _ in range(drawn.randint(1, 3)):
        at = drawn.randrange(1, len(text) - 2)
        line = text.rfind("\n", 0, at) + 1
        text = drawn.choice((
            text[:at] + text[at + 1 :],
            text[:at] + text[at] + text[at:],
            text[:at] + text[at + 1] + text[at] + text[at + 2 :],
            text[:line] + " " + text[line:],
            text[:line] + text[line:].lstrip(" "),
            text[:line] + "\t" + text[line:],
            text[:at] + drawn.choice("{}[]:,-'\"#&*!|>%@`\t\n\r 0.") + text[at:],
            text[:at],
            text.replace(" us", drawn.choice((" V", "", " us us", " Us")), 1),
        ))  # fmt: skip
        if len(text) < 8:
            return text
    return text


@pytest.mark.parametrize("name", SHIPPED)
def test_a_shipped_recipe_that_was_spoiled_is_read_or_told_with_places(name: str) -> None:
    spoiled = {mangled(SHIPPED[name], seed) for seed in range(8)} - {SHIPPED[name]}
    assert len(spoiled) >= 6
    for text in spoiled:
        check_places(text)
    assert any(mistakes_of(text) for text in spoiled)


HEAD = """\
recipe: nasty
parameters: {hold: 1 s, n: 2, volts: 4 V}
pulses: {down: {level: -5 V, width: 2 ms}, up: {level: 4 V, width: 1 ms}}
steps:
"""


def swept(values: str) -> str:
    return HEAD + f"  - {{sweep: {{hold: {values}}}, steps: [{{preset: down}}, {{wait: hold}}]}}\n"


def repeated(step: str, deep: int = 5) -> str:
    return HEAD + "  - " + "{repeat: 1000000, steps: [" * deep + step + "]}" * deep + "\n"


BAD_TUNE = "{tune: n, between: [1, 2], full count: 5, steps: [{wait: hold}]}"
GRID = "{from: 1 s, to: 2 s, points: 1000}"

# What would hang, fill the memory or raise something of Python's own if nobody minded.
NASTY = {
    "a range of endless decades": (swept("{from: 1e-300 s, to: 1e300 s, per decade: 1}"),
        "the range spans 600 decades"),
    "a range of endless values": (swept("{from: 1 s, to: 1e300 s, per decade: 100000}"),
        "the range spans 300 decades"),
    "a range of too many values": (swept("{from: 1 us, to: 1000 s, per decade: 100000}"),
        "that are 900000 values"),
    "a range beyond floats": (swept("{from: 1 s, to: 1e400 s, per decade: 1}"),
        "'1e400 s' is beyond every range"),
    "a range of a billion points": (swept("{from: 1 s, to: 2 s, points: 1e9}"),
        "1e+09 is no count of values"),
    "a range in a range": (swept("{from: {from: 1 s}, to: 2 s, points: 2}"), "is not a time"),
    "a range of one value": (swept("{from: 1 s, to: 1 s, points: 2}"), "begins and ends at one"),
    "a range through nought": (swept("{from: -1 s, to: 1 s, per decade: 2}"), "touch or pass 0"),
    "a grid of a billion": (HEAD + f"  - sweep: {{hold: {GRID}, up.width: {GRID}, up.rest: {GRID}}}"
        "\n    steps: [{preset: down}]\n", "over 100000 rounds"),
    "a shuffled grid of a billion": (HEAD + f"  - sweep: {{hold: {GRID}, up.width: {GRID},"
        f" up.rest: {GRID}}}\n    order: shuffled\n    steps: [{{preset: down}}]\n",
        "over 100000 rounds"),
    "sweeps of problems": (swept("{from: -1e6 s, to: -1 s, points: 100000}"), "is swept"),
    "repeats of repeats": (repeated("{preset: down}"), "over 100000 rounds"),
    "repeats of what can't be done": (repeated(BAD_TUNE), "the steps of a tune"),
    "repeats of nothing": (HEAD + "  - sweep: {n: [0]}\n    steps: [{repeat: 1000000, steps:"
        " [{repeat: 1000000, steps: [{repeat: n, steps: [{preset: down}]}]}]}]\n",
        "over 100000 rounds"),
    "repeats of cyclings": (repeated("{cycle: {down: down, up: up}, pairs: 1e12,"
        " pauses per decade: 20}"), "over 100000 rounds"),
    "cyclings in repeats in a cycling": (HEAD + "  - cycle: {down: down, up: up}\n    pairs: 1e12\n"
        "    pauses per decade: 20\n    steps: [{repeat: 1000000, steps:"
        " [{cycle: {down: down, up: up}, pairs: 2}]}]\n", "over 100000 rounds"),
    "a number beyond floats": (HEAD + "  - {repeat: 1e400, steps: [{preset: down}]}\n",
        "inf is not a finite number"),
    "a number of 5000 digits": (HEAD + f"  - {{repeat: {'9' * 5000}, steps: [{{preset: down}}]}}\n",
        "inf is not a finite number"),
    "a pause of 400 digits": (HEAD + "  - {cycle: {down: down, up: up}, pairs: 9,"
        f" pause at: [{'9' * 400}]}}\n", "is not a number of pairs"),
    "a time beyond floats": (HEAD + "  - {wait: 1e400 s}\n", "'1e400 s' is beyond every range"),
    "a prefix beyond floats": (HEAD + "  - {loop: 1e300 kV, period: 1 s}\n",
        "'1e300 kV' is beyond every range"),
    "an answer for ever": (HEAD + "  - {ask: hello, within: 1e300 s}\n", "is above 320000000 s"),
    "a rest for ever": (HEAD.replace("width: 1 ms", "width: 1 ms, rest: 1e300 s")
        + "  - {preset: up}\n", "is above 320000000 s"),
    "anchors that explode": ("a: &a [x, x]\n" + "".join(f"a{n}: &a{n} [*a, *a]\n"
        for n in range(30)) + "recipe: x\n", "anchors and aliases are not allowed"),
    "brackets": ("recipe: " + "[" * 100_000, "nested over 50 deep"),
    "dashes": ("- " * 90_000, "nested over 50 deep"),
    "question marks": ("? " * 90_000, "nested over 50 deep"),
    "indentation": ("\n".join(" " * depth + "a:" for depth in range(500)), "nested over 50 deep"),
    "a megabyte": ("recipe: " + "x" * 1_000_000, "over 200000 bytes"),
    "a megabyte of lists": ("recipe: [" + "[]," * 330_000 + "]", "over 200000 bytes"),
    "many values": ("recipe: [" + "[]," * 60_000 + "]", "beyond 20000 keys and values"),
    "many keys": ("\n".join(f"k{n}:" for n in range(20_000)), "beyond 20000 keys and values"),
    "many pulses": ("recipe: x\npulses:\n" + "".join(f"  p{n}: {{level: 1 V}}\n"
        for n in range(1000)) + "steps:\n" + "- preset: q\n" * 1000,
        "'q' is not a pulse of this recipe"),
    "a long name": (HEAD + f"  - {{preset: {'d' * 100_000}}}\n", "is not a pulse"),
    "a lone surrogate": ("recipe: \ud800", "this is not YAML"),
    "a nought byte": ("recipe: \0", "this is not YAML"),
    "a long version": ("%YAML 1." + "9" * 5000 + "\n---\nrecipe: x", "this is not YAML"),
    "a tag": (HEAD + "  - !!python/object/apply:os.system [ls]\n", "is not a step|tag|this is not"),
    "a binary": (HEAD.replace("nasty", "!!binary aGk=") + "  - preset: down\n", "the tag"),
    "merged keys": (HEAD + "  - {<<: {preset: down}}\n", "there is no step '<<'"),
    "two documents": (HEAD + "  - preset: down\n---\nrecipe: b\n", "another document"),
}  # fmt: skip


@pytest.mark.parametrize("name", NASTY)
def test_nasty_input_gives_a_clear_error(name: str) -> None:
    text, words = NASTY[name]
    with pytest.raises((RecipeError, PlanError)) as caught:
        make_plan(parse_recipe(text, file="r.yaml"), shipped_bench())
    error = caught.value
    if isinstance(error, RecipeError):
        told = [each.problem for each in error.mistakes]
        for each in error.mistakes:
            assert each.line >= 1
            assert each.column >= 1
            assert each.remedy
    else:
        assert isinstance(error, PlanError)
        told = error.problems
        assert all("To fix it, " in each for each in told)
    assert any(word in each for each in told for word in words.split("|")), told[:3]
    # A person must be able to read each.
    assert all(len(each) < 1000 for each in told)
