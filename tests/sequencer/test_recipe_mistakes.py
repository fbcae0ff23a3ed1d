"""Every setting of every step, wrong once: which place is told, and what to write instead."""

import pytest

from pulsetally.sequencer.errors import Mistake, RecipeError
from pulsetally.sequencer.models import field_names
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.steps import STEP_MODELS, CyclePair, PulseModel, StopWhen

HEAD = """\
recipe: mistakes
parameters: {hold: 10 s, wide: 1 ms}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 1 ms}
steps:
"""
FIRST_LINE = HEAD.count("\n") + 1
ROUND = "steps: [{preset: down}, {read: up, until: 2 V, at most: 9}]"
STEPS = {
    "preset": "{preset: down}",
    "step": "{step: up, count: 2, capture: each, train of: 2}",
    "read": "{read: up, until: 2 V, at most: 9, capture: each, train of: 2}",
    "wait": "{wait: hold}",
    "contact": "{contact: up}",
    "pund": "{pund: up}",
    "loop": "{loop: 4 V, period: 1 ms, at: panel}",
    "ask": "{ask: hello, within: 1 h, otherwise: stop}",
    "repeat": f"{{repeat: 2, {ROUND}}}",
    "sweep": f"{{sweep: {{hold: [1 s]}}, together: no, order: shuffled, seed: 1, {ROUND}}}",
    "tune": "{tune: up.width, between: [1 ms, 2 ms], full count: 9, within: 0.5, at most: 12,"
    f" {ROUND}}}",
    "cycle": "{cycle: {down: down, up: up}, pairs: 100, pause at: [10], pauses per decade: 1,"
    " stop when: {switched charge below: 50 %, full count off by: 30 %, contact is lost: yes},"
    f" {ROUND}}}",
}

# Step; what is changed in it; where that is told; words of the problem and of the remedy.
MISTAKES = [
    ("preset", "preset: down", "preset: dwon", "preset", "not a pulse", "write 'down'"),
    ("step", "step: up", "step: 5", "step", "not a pulse", "declare it"),
    ("step", "count: 2", "count: -1", "count", "below 0", "0 or more"),
    ("step", "count: 2", "count: 1.5", "count", "not a whole number", "write 1 or 2"),
    ("step", "capture: each", "capture: trains", "capture", "not known here", "write 'train'"),
    ("step", "train of: 2", "train of: 0", "train of", "below 1", "1 or more"),
    ("read", "read: up", "read: [up]", "read", "not a pulse", "declare it"),
    ("read", "until: 2 V", "until: 2 s", "until", "not a voltage", "'2.5 V'"),
    ("read", "at most: 9", "at most: 2e6", "at most", "above 1000000", "1000000 or less"),
    ("read", ", at most: 9", "", "", "'at most' is missing", "add 'at most: ...'"),
    ("read", "capture: each", "capture: yes", "capture", "not known here", "write one of"),
    ("read", "train of: 2", "train of: hold", "train of", "parameter 'hold' does not", "write 5"),
    ("wait", "wait: hold", "wait: -1 s", "wait", "below 0 s", "0 s or more"),
    ("wait", "wait: hold", "wait: hodl", "wait", "neither a time nor", "'hold'"),
    ("contact", "contact: up", "contact: upp", "contact", "not a pulse", "write 'up'"),
    ("pund", "pund: up", "pund: 4 V", "pund", "not a pulse", "declare it"),
    ("loop", "loop: 4 V", "loop: -4 V", "loop", "not above 0 V", "more than 0 V"),
    ("loop", "period: 1 ms", "period: 0 s", "period", "not above 0 s", "more than 0 s"),
    ("loop", "period: 1 ms", "period: 1 h", "period", "above 1000 s", "1000 s or less"),
    ("loop", "at: panel", "at: pannel", "at", "not known here", "write 'panel'"),
    ("ask", "ask: hello", "ask: ''", "ask", "0 characters", "1 or more"),
    ("ask", "ask: hello", "ask: 5", "ask", "'5' is not text", "a word or a sentence"),
    ("ask", "within: 1 h", "within: 60", "within", "60 has no unit", "'60 us'"),
    ("ask", "within: 1 h", "within: 20000 d", "within", "above 320000000 s",
     "write 320000000 s or less"),
    ("ask", "otherwise: stop", "otherwise: go", "otherwise", "not known here", "stop, go on"),
    ("repeat", "repeat: 2", "repeat: 0", "repeat", "below 1", "1 or more"),
    ("repeat", ROUND, "steps: []", "steps", "the list is empty", "at least one item"),
    ("repeat", ROUND, "steps: {preset: down}", "steps", "not a list", "write '- '"),
    ("sweep", "{hold: [1 s]}", "{}", "sweep", "names what it changes", "write 'sweep:"),
    ("sweep", "hold: [1 s]", "hodl: [1 s]", "sweep.hodl", "not a parameter", "write 'hold'"),
    ("sweep", "[1 s]", "[1 s, 2 V]", "sweep.hold[1]", "is not a time", "'100 us'"),
    ("sweep", "[1 s]", "{from: 1 s, to: 2 s}", "sweep.hold", "how many", "per decade: 5"),
    ("sweep", "[1 s]", "{from: 1 s, points: 2}", "sweep.hold", "no 'to'", "add 'to:"),
    ("sweep", "[1 s]", "{form: 1 s}", "sweep.hold.form", "no 'form'", "write 'from'"),
    ("sweep", "[1 s]", "{from: 1 s, to: 2 s, points: 1}", "sweep.hold.points", "two ends", "2"),
    ("sweep", "together: no", "together: maybe", "together", "neither yes nor no", "'yes' or 'no'"),
    ("sweep", "{hold: [1 s]}, together: no", "{hold: [1 s], wide: [1 s, 2 s]}, together: yes",
     "sweep", "1 and 2 values", "as many values"),
    ("sweep", "order: shuffled", "order: random", "order", "not known here", "write one of"),
    ("sweep", "seed: 1", "seed: -1", "seed", "below 0", "0 or more"),
    ("sweep", ROUND, "steps: [{prest: down}]", "steps[0]", "no step 'prest'", "write 'preset'"),
    ("tune", "tune: up.width", "tune: up.widht", "tune", "not a parameter or", "'up.width'"),
    ("tune", "tune: up.width", "tune: 5", "tune", "'5' is not text", "a word"),
    ("tune", "[1 ms, 2 ms]", "[1 ms]", "between", "the list has one item", "write 2 items"),
    ("tune", "[1 ms, 2 ms]", "[1 s, 2 s, 3 s]", "between", "the list has 3 items", "2 items"),
    ("tune", "[1 ms, 2 ms]", "[2 ms, 1 ms]", "between", "not the smaller", "[smaller, larger]"),
    ("tune", "[1 ms, 2 ms]", "[1 V, 2 ms]", "between[0]", "is not a time", "'100 us'"),
    ("tune", "full count: 9", "full count: 1", "full count", "not above 1", "more than 1"),
    ("tune", "within: 0.5", "within: 0", "within", "not above 0", "more than 0"),
    ("tune", "at most: 12", "at most: 2", "at most", "below 3", "3 or more"),
    ("tune", ROUND, "steps: []", "steps", "the list is empty", "at least one item"),
    ("cycle", "{down: down, up: up}", "up", "cycle", "not a group", "'down: ...'"),
    ("cycle", "down: down", "down: left", "cycle.down", "not a pulse", "declare it"),
    ("cycle", "{down: down, up: up}", "{down: down, up: u}", "cycle.up", "not a pulse", "'up'"),
    ("cycle", "pairs: 100", "pairs: 1e13", "pairs", "above 1e+12", "1e+12 or less"),
    ("cycle", "pause at: [10]", "pause at: 10", "pause at", "a list of numbers", "pauses per"),
    ("cycle", "pause at: [10]", "pause at: [0]", "pause at", "not a number of pairs", "from 1"),
    ("cycle", "decade: 1", "decade: 21", "pauses per decade", "above 20", "20 or less"),
    ("cycle", "charge below: 50 %", "charge below: 2", "stop when.switched charge below",
     "no unit", "the unit"),
    ("cycle", "off by: 30 %", "off by: 0 %", "stop when.full count off by", "above 0 %",
     "more than 0 %"),
    ("cycle", "is lost: yes", "is lost: 3", "stop when.contact is lost", "neither yes", "'yes'"),
    ("cycle", "contact is lost", "contact lost", "stop when.contact lost", "no setting",
     "'contact is lost'"),
    ("cycle", ROUND, "steps: 5", "steps", "not a list", "write '- '"),
]  # fmt: skip


def mistakes_of(step: str) -> list[Mistake]:
    with pytest.raises(RecipeError) as caught:
        parse_recipe(HEAD + f"  - {step}\n", file="r.yaml")
    mistakes: list[Mistake] = caught.value.mistakes
    return mistakes


@pytest.mark.parametrize("verb", STEP_MODELS)
def test_each_step_as_it_stands_here_is_right_but_for_one_unknown_setting(verb: str) -> None:
    parse_recipe(HEAD + f"  - {STEPS[verb]}\n", file="r.yaml")
    (unknown,) = mistakes_of(STEPS[verb].removesuffix("}") + ", colour: red}")
    assert (unknown.line, unknown.path) == (FIRST_LINE, "steps[0].colour")
    assert unknown.problem == "there is no setting 'colour' here"
    assert unknown.remedy.startswith("write ")


@pytest.mark.parametrize(("verb", "good", "bad", "place", "problem", "remedy"), MISTAKES)
def test_each_setting_wrong_once_has_its_place_and_remedy(
    verb: str, good: str, bad: str, place: str, problem: str, remedy: str
) -> None:
    assert good in STEPS[verb]
    step = STEPS[verb].replace(good, bad, 1)
    (mistake,) = mistakes_of(step)
    assert mistake.path.removeprefix("steps[0]").removeprefix(".") == place
    assert mistake.line == FIRST_LINE
    # It stands in the part that was changed, or where the step begins.
    column = len("  - ") + step.find(bad) + 1 if bad else len("  - ") + 1
    assert mistake.column == len("  - ") + 1 or column <= mistake.column <= column + len(bad)
    assert problem in mistake.problem
    assert remedy in mistake.remedy


def test_every_setting_of_every_step_is_wrong_once() -> None:
    told = {(verb, place.partition("[")[0]) for verb, _, _, place, _, _ in MISTAKES}
    for verb, model in STEP_MODELS.items():
        assert {(verb, name) for name in field_names(model)} - told <= {("cycle", "stop when")}
    for name in field_names(StopWhen):
        assert ("cycle", f"stop when.{name}") in told
    for name in field_names(CyclePair):
        assert ("cycle", f"cycle.{name}") in told


PULSE_MISTAKES = [
    ("level: 4 V", "level: 4", "level", "4 has no unit", "'4 V'"),
    ("width: 1 ms", "width: 0 s", "width", "not above 0", "more than 0"),
    ("width: 1 ms", "width: 1 ms, base: low", "base", "neither a voltage nor", "'2.5 V'"),
    ("width: 1 ms", "width: 1 ms, edge: 200 s", "edge", "above 100 s", "100 s or less"),
    ("width: 1 ms", "width: 1 ms, rest: -1 s", "rest", "below 0 s", "0 s or more"),
    ("width: 1 ms", "width: 1 ms, at: cel", "at", "not known here", "write 'cell'"),
]


@pytest.mark.parametrize(("good", "bad", "place", "problem", "remedy"), PULSE_MISTAKES)
def test_each_setting_of_a_pulse_wrong_once(
    good: str, bad: str, place: str, problem: str, remedy: str
) -> None:
    text = HEAD + "  - preset: down\n"
    with pytest.raises(RecipeError) as caught:
        parse_recipe(text.replace(good, bad, 1), file="r.yaml")
    (mistake,) = caught.value.mistakes
    assert (mistake.line, mistake.path) == (5, f"pulses.up.{place}")
    assert problem in mistake.problem
    assert remedy in mistake.remedy


def test_every_setting_of_a_pulse_is_wrong_once() -> None:
    assert {place for _, _, place, _, _ in PULSE_MISTAKES} == set(field_names(PulseModel))
