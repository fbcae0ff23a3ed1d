"""Write a recipe's models as YAML that is read back as the same models.

A person should like to read what comes out: pulses and swept values stand on one line each,
quantities have their units, and what was never set is left out.
"""

from io import StringIO

from ruamel.yaml import YAML
from ruamel.yaml.comments import CommentedMap, CommentedSeq

from pulsetally.sequencer.models import Model, quantified, written_value
from pulsetally.sequencer.steps import RecipeModel

# Lines are not folded: a folded text is hard to search, and gains nothing here.
_WIDTH = 1_000_000
# What begins a line of its own; all other groups and lists are written on one line.
_OPEN = ("pulses", "steps")


def recipe_text(model: RecipeModel) -> str:
    """Return a recipe as YAML; parse_recipe makes the same model of it.

    Quantities are written in the unit of their kind, names of parameters as words. Parameters
    and swept values stay as they were written.
    """
    yaml = YAML(typ="rt", pure=True)
    yaml.width = _WIDTH
    yaml.indent(mapping=2, sequence=4, offset=2)
    text = StringIO()
    yaml.dump(_group(model), text)
    return text.getvalue()


def _group(model: Model) -> CommentedMap:
    """Return a model's settings under the names they have in a file."""
    group = CommentedMap()
    for name, field in type(model).model_fields.items():
        value = getattr(model, name)
        if value is None or (name not in model.model_fields_set and value == field.get_default()):
            continue
        key = field.alias or name
        if isinstance(value, (Model, list, dict)):
            group[key] = _held(value, key)
        else:
            group[key] = written_value(value, quantified(field))
    return group


def _held(value: object, key: str) -> object:
    """Return what a setting holds, with groups and lists laid out."""
    if isinstance(value, Model):
        return _laid_out(_group(value), key)
    if isinstance(value, dict):
        pairs = CommentedMap((name, _held(each, name)) for name, each in value.items())
        return _laid_out(pairs, key)
    if isinstance(value, list):
        items = CommentedSeq(
            _group(each) if isinstance(each, Model) else written_value(each, None) for each in value
        )
        return _laid_out(items, key)
    return value


def _laid_out(node: CommentedMap | CommentedSeq, key: str) -> CommentedMap | CommentedSeq:
    if key not in _OPEN:
        node.fa.set_flow_style()
    return node
