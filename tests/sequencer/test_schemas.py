"""The JSON schemas, judged by an independent validator: what an editor would say."""

import re
import subprocess
import sys
from importlib.resources import files
from pathlib import Path
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from pydantic import BaseModel

from pulsetally.sequencer.bench import BenchModel
from pulsetally.sequencer.models import field_descriptions, summary
from pulsetally.sequencer.recipe import parse_recipe, shipped_recipes
from pulsetally.sequencer.schemas import (
    SCHEMAS,
    bench_schema,
    recipe_schema,
    schema_file,
    schema_text,
    write_schemas,
)
from pulsetally.sequencer.steps import STEP_MODELS, CyclePair, PulseModel, RecipeModel, StopWhen
from pulsetally.sequencer.yaml_places import load_yaml

ROOT = Path(__file__).resolve().parent.parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
RECIPE = Draft202012Validator(recipe_schema())
BENCH = Draft202012Validator(bench_schema())
EXAMPLES = re.findall(r"```yaml\n(.*?)```", README, re.DOTALL)


def shipped(name: str) -> str:
    return (files("pulsetally.recipes") / name).read_text(encoding="utf-8")


def fits(validator: Any, text: str) -> bool:
    placed = load_yaml(text, "x.yaml")
    assert not placed.mistakes
    return bool(validator.is_valid(placed.data))


@pytest.mark.parametrize("name", SCHEMAS)
def test_a_schema_is_one_of_its_draft(name: str) -> None:
    schema = SCHEMAS[name]()
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    Draft202012Validator.check_schema(schema)


@pytest.mark.parametrize("name", SCHEMAS)
def test_the_schemas_that_ship_are_those_of_the_models(name: str, tmp_path: Path) -> None:
    assert shipped(schema_file(name)) == schema_text(name), (
        "the language has changed: run 'python -m pulsetally.sequencer.schemas'"
    )
    write_schemas(tmp_path)
    assert (tmp_path / schema_file(name)).read_text(encoding="utf-8") == schema_text(name)


@pytest.mark.parametrize("name", SCHEMAS)
def test_check_prints_a_schema_and_needs_no_file(name: str, tmp_path: Path) -> None:
    program = Path(sys.executable).with_name("pulsetally")
    done = subprocess.run(
        [program, "check", "--schema", name],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert done.stdout == schema_text(name)
    assert not done.stderr


def test_check_without_file_or_schema_says_what_to_name(tmp_path: Path) -> None:
    program = Path(sys.executable).with_name("pulsetally")
    done = subprocess.run(
        [program, "check"], cwd=tmp_path, capture_output=True, text=True, check=False, timeout=60
    )
    assert (done.returncode, done.stdout) == (2, "")
    assert "name a recipe or a bench file, or give --schema" in done.stderr


@pytest.mark.parametrize("name", shipped_recipes())
def test_the_recipes_that_ship_fit(name: str) -> None:
    RECIPE.validate(load_yaml(shipped(f"{name}.yaml"), name).data)


def test_the_bench_that_ships_fits() -> None:
    assert fits(BENCH, shipped("simulated_bench.yaml"))


def test_the_examples_of_the_readme_fit() -> None:
    kinds = {"recipe": RECIPE, "bench": BENCH}
    found = [text for text in EXAMPLES if text.partition(":")[0] in kinds]
    assert {text.partition(":")[0] for text in found} == set(kinds)
    for text in found:
        assert fits(kinds[text.partition(":")[0]], text)


# Every step and every setting of the language once.
EVERYTHING = """\
recipe: All of the language
purpose: Say everything once.
parameters: {stored: 5, hold: 10 s, threshold: 2.5 V, often: 20, share: 50 %}
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 100 us, base: 0, edge: 200 ns, rest: 1 ms, at: cell}
  touch: {level: 100 mV, width: 1 ms}
steps:
  - contact: touch
  - pund: up
  - loop: 4 V
    period: 1 ms
    at: panel
  - ask: Is the cell in its socket?
    within: 2 h
    otherwise: go on
  - sweep:
      hold: [1 s, 10 s]
      up.width: {from: 80 us, to: 125 us, points: 2}
    together: yes
    order: shuffled
    seed: 3
    steps:
      - repeat: 2
        steps:
          - preset: down
          - step: up
            count: stored
            capture: train
            train of: 4
          - wait: hold
          - read: up
            until: threshold
            at most: 60
            capture: train
            train of: 5
  - sweep: {up.width: {from: 10 us, to: 1 ms, per decade: 5}}
    steps: [{preset: down}]
  - tune: up.width
    between: [80 us, 200 us]
    full count: 9
    within: 0.5
    at most: 12
    steps: [{preset: down}, {read: up, until: 2.5 V, at most: 60}]
  - cycle: {down: down, up: up}
    pairs: 1e6
    pause at: [10, 1000, '1e5']
    pauses per decade: 1
    stop when: {switched charge below: share, full count off by: 30 %, contact is lost: yes}
    steps: [{contact: touch}, {pund: up}, {preset: down}, {read: up, until: 2 V, at most: 60}]
"""


def test_a_recipe_that_says_everything_fits() -> None:
    parse_recipe(EVERYTHING, file="x.yaml")
    RECIPE.validate(load_yaml(EVERYTHING, "x.yaml").data)
    said = set(re.findall(r"([a-z][a-z ]*):", EVERYTHING))
    models: tuple[type[BaseModel], ...] = (
        RecipeModel,
        PulseModel,
        CyclePair,
        StopWhen,
        *STEP_MODELS.values(),
    )
    settings = {
        field.alias or name for model in models for name, field in model.model_fields.items()
    }
    assert settings <= said


# What is changed in the recipe above; each makes one mistake that a schema can see.
BROKEN_RECIPES = [
    ("recipe: All of the language\n", ""),
    ("recipe: All of the language", "recipe: ' '"),
    ("purpose: Say", "author: me\npurpose: Say"),
    ("stored: 5", "stored: five"),
    ("stored: 5", "stored: yes"),
    ("stored: 5", "cycles: 5"),
    ("stored: 5", "2nd: 5"),
    ("level: 4 V", "level: 4"),
    ("level: 4 V", "level: 4 s"),
    ("level: 4 V", "levle: 4 V"),
    ("level: 4 V, ", ""),
    ("width: 100 us", "width: -100 us"),
    ("width: 100 us", "width: 0 us"),
    ("rest: 1 ms", "rest: -1 ms"),
    ("at: cell", "at: the cell"),
    ("contact: touch", "contatc: touch"),
    ("contact: touch", "contact: 5"),
    ("contact: touch", "contact: touch\n    within: 1 h"),
    ("contact: touch", "touch"),
    ("    period: 1 ms\n", ""),
    ("loop: 4 V", "loop: -4 V"),
    ("ask: Is the cell in its socket?", "ask: ''"),
    ("otherwise: go on", "otherwise: go"),
    ("hold: [1 s, 10 s]", "hold: []"),
    ("hold: [1 s, 10 s]", "hold: 1 s"),
    ("up.width: {from: 80 us", "up.widht: {from: 80 us"),
    ("from: 80 us", "from: 80 V"),
    ("points: 2", "points: 2, per decade: 2"),
    (", points: 2", ""),
    ("points: 2", "points: 2.5"),
    ("together: yes", "together: maybe"),
    ("order: shuffled", "order: any"),
    ("seed: 3", "seed: 0.5"),
    ("repeat: 2", "repeat: 0"),
    ("repeat: 2", "repeat: 2.5"),
    ("count: stored", "count: -1"),
    ("capture: train", "capture: trains"),
    ("train of: 4", "train of: 4 V"),
    ("until: threshold", "until: 2.5 s"),
    ("            at most: 60\n", ""),
    ("between: [80 us, 200 us]", "between: [80 us]"),
    ("between: [80 us, 200 us]", "between: 80 us"),
    ("full count: 9", "full count: 1"),
    ("    at most: 12", "    at most: 2"),
    ("pairs: 1e6", "pairs: 1e13"),
    ("pairs: 1e6", "pairs: half of it"),
    ("pause at: [10", "pause at: [0"),
    ("pause at: [10, 1000, '1e5']", "pause at: {per decade: 1}"),
    ("pauses per decade: 1", "pauses per decade: 21"),
    ("switched charge below: share", "switched charge: share"),
    ("full count off by: 30 %", "full count off by: 0.3"),
    ("{down: down, up: up}", "{down: down}"),
    ("    steps: [{preset: down}]\n", "    steps: []\n"),
]


@pytest.mark.parametrize(("good", "bad"), BROKEN_RECIPES)
def test_a_broken_recipe_does_not_fit(good: str, bad: str) -> None:
    assert good in EVERYTHING
    assert not fits(RECIPE, EVERYTHING.replace(good, bad, 1))


BROKEN_BENCHES = [
    ("bench: simulated", "table: simulated"),
    ("  load: high-z", "  load: highz"),
    ("  load: high-z", "  load: 0 ohm"),
    ("channel: 1", "channel: 9"),
    ("address: TCPIP::127.0.0.1::5025::SOCKET", "address: 127.0.0.1"),
    ("series diode: none", "series diode: {emission: 1}"),
    ("series diode: none", "series diode: no"),
    ("clamp: none", "clamp: 15 V"),
    ("resistance: 220 kohm", "resistance: 220 kV"),
    ("probe: {resistance", "probe: {resistence"),
    ("source: 10 V", "source: -10 V"),
    ("limits: {source: 10 V, node: 6 V}", "limits: {source: 10 V}"),
    ("area: 10000 um2", "area: 10000 um"),
    ("relative permittivity: 500", "relative permittivity: 0.5"),
]


@pytest.mark.parametrize(("good", "bad"), BROKEN_BENCHES)
def test_a_broken_bench_does_not_fit(good: str, bad: str) -> None:
    text = shipped("simulated_bench.yaml")
    assert good in text
    assert not fits(BENCH, text.replace(good, bad, 1))


@pytest.mark.parametrize(
    ("good", "other"),
    [
        ("series diode: none", "series diode: {saturation current: 1e-12 A}"),
        ("clamp: none", "clamp: {breakdown: 15 V}"),
        ("  load: high-z", "  load: 50 Ω"),
        ("source resistance: 50 ohm", "source resistance: 0"),
        ("dialect: scpi99", "dialect: folder/mine.yaml"),
        (", relative permittivity: 500", ", name: a"),
    ],
)
def test_other_benches_fit(good: str, other: str) -> None:
    text = shipped("simulated_bench.yaml")
    assert good in text
    assert fits(BENCH, text.replace(good, other, 1))


def models_of(model: type[BaseModel]) -> set[type[BaseModel]]:
    """Return a model and all that its fields hold, by the names in its schema."""
    names = set(model.model_json_schema()["$defs"]) | {model.__name__}
    # Dialects have groups of the same names.
    every = {
        each.__name__: each
        for each in _subclasses(BaseModel)
        if each.__module__ == model.__module__
    }
    return {every[name] for name in names}


def _subclasses(model: type[BaseModel]) -> list[type[BaseModel]]:
    direct = [each for each in model.__subclasses__() if each.__module__.startswith("pulsetally")]
    return [*direct, *(deeper for each in direct for deeper in _subclasses(each))]


@pytest.mark.parametrize("whole", [RecipeModel, BenchModel])
def test_every_setting_is_described(whole: type[BaseModel]) -> None:
    found = models_of(whole)
    assert len(found) > 8
    for model in found:
        assert summary(model).endswith(".")
        assert set(field_descriptions(model)) == set(model.model_fields), model


def test_an_editor_is_told_unit_bounds_and_default() -> None:
    pulse = recipe_schema()["$defs"]["PulseModel"]["properties"]
    assert pulse["edge"]["default"] == "100 ns"
    assert pulse["width"]["description"] == (
        "seconds between the 50 % points; a time above 0 s and to 1 ks, or the name of a parameter"
    )
    generator = bench_schema()["$defs"]["GeneratorSection"]["properties"]
    assert generator["channel"]["default"] == 1
    assert generator["channel"]["description"] == "its output; a whole number from 1 to 8"


def test_an_editor_is_offered_each_step_by_its_verb() -> None:
    schema = recipe_schema()
    offered = [
        each["$ref"].rpartition("/")[2] for each in schema["properties"]["steps"]["items"]["oneOf"]
    ]
    assert [schema["$defs"][name]["title"] for name in offered] == [*STEP_MODELS]
    for verb, name in zip(STEP_MODELS, offered, strict=True):
        assert schema["$defs"][name]["required"][0] == verb
