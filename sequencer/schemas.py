"""JSON schemas of recipes and bench files, so that an editor completes and checks them.

They are generated from the models, which are the language's definition. A schema accepts all
that the program accepts, and says what it can of the rest: which names are declared, how large
a quantity is and what a bench's limits bear is checked by the program alone.

The files that ship are written anew with: python -m pulsetally.sequencer.schemas
"""

import json
from importlib.resources import files
from pathlib import Path
from typing import Any

from pydantic import BaseModel
from pydantic.json_schema import GenerateJsonSchema
from pydantic_core import core_schema

from pulsetally.sequencer.bench import BenchModel
from pulsetally.sequencer.steps import STEP_MODELS, RecipeModel

_DRAFT = "https://json-schema.org/draft/2020-12/schema"


class _Generator(GenerateJsonSchema):
    """Leave out titles that only repeat a setting's name."""

    def field_title_should_be_set(self, schema: object) -> bool:
        """Say that no field needs a title."""
        return False

    def model_schema(self, schema: core_schema.ModelSchema) -> dict[str, Any]:
        """Return a group's schema without the name of the class."""
        found = super().model_schema(schema)
        found.pop("title", None)
        return found


def recipe_schema() -> dict[str, Any]:
    """Return the JSON schema (draft 2020-12) of a recipe."""
    found = _schema(RecipeModel, "pulsetally recipe")
    for verb, model in STEP_MODELS.items():
        # What an editor lists the steps by.
        found["$defs"][model.__name__]["title"] = verb
    return found


def bench_schema() -> dict[str, Any]:
    """Return the JSON schema (draft 2020-12) of a bench file."""
    return _schema(BenchModel, "pulsetally bench file")


def _schema(model: type[BaseModel], title: str) -> dict[str, Any]:
    found = model.model_json_schema(by_alias=True, mode="validation", schema_generator=_Generator)
    return {"$schema": _DRAFT, "title": title} | found


SCHEMAS = {"recipe": recipe_schema, "bench": bench_schema}


def schema_text(name: str) -> str:
    """Return the text of a schema by its name in SCHEMAS."""
    return json.dumps(SCHEMAS[name](), indent=1, ensure_ascii=True, allow_nan=False) + "\n"


def schema_file(name: str) -> str:
    """Return the name of the file in recipes/ that holds a schema."""
    return f"{name}.schema.json"


def write_schemas(folder: Path) -> None:
    """Write every schema into a folder."""
    for name in SCHEMAS:
        (folder / schema_file(name)).write_text(schema_text(name), encoding="utf-8")


if __name__ == "__main__":
    write_schemas(Path(str(files("pulsetally.recipes"))))
