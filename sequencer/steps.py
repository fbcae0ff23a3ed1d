"""What a recipe may say: its pulses and its steps, as models.

These models are the language's definition. Where they are read, and where their mistakes get
places, is the business of recipe.py.
"""

from typing import Annotated, Any

from pydantic import (
    BeforeValidator,
    Discriminator,
    Field,
    Tag,
    ValidationInfo,
    WithJsonSchema,
)

from pulsetally.sequencer.models import (
    WORD,
    Declared,
    Model,
    Name,
    OneOf,
    YesNo,
    fault,
    quantity,
    schema_of_quantities,
)
from pulsetally.sequencer.quantities import (
    KINDS,
    NUMBER,
    SHARE,
    TIME,
    VOLTAGE,
    Kind,
    QuantityError,
    parse_quantity,
)
from pulsetally.sequencer.yaml_places import nearest

# An instrument that counts on for years has lost its end.
MOST_PAIRS = 1_000_000_000_000
MOST_TUNING_ROUNDS = 200
# Ten years: nobody waits longer.
LONGEST_WAIT = 3.2e8

Value = float | Name


def _pulse_name(written: object, info: ValidationInfo) -> str:
    declared: Declared = info.context or Declared()
    if not isinstance(written, str) or written not in declared.pulses:
        raise fault(
            f"{str(written)[:60]!r} is not a pulse of this recipe",
            nearest(str(written), [*declared.pulses]) + ", or declare it under pulses",
        )
    return written


_NAME_SCHEMA = {"type": "string", "pattern": f"^{WORD}$"}
PulseName = Annotated[str, BeforeValidator(_pulse_name), WithJsonSchema(_NAME_SCHEMA)]
Volts = Annotated[Value, quantity(VOLTAGE, names=True)]
Count = Annotated[Value, quantity(NUMBER, least=1, most=1_000_000, whole=True, names=True)]
# 0 is a count too: step 0 pulses, then read, is how a full count is taken in a sweep.
StepCount = Annotated[Value, quantity(NUMBER, least=0, most=1_000_000, whole=True, names=True)]
Share = Annotated[Value, quantity(SHARE, above=0, names=True)]
Where = Annotated[str, OneOf(("panel", "cell"))]
Capture = Annotated[str, OneOf(("each", "train"))]


class PulseModel(Model):
    """A trapezoid from base to level and back.

    level, base: volts, at the generator's panel or across the cell, as 'at' says. width:
    seconds between the 50 % points. edge: seconds from 10 % to 90 %, of both edges. rest: least
    time at base after it, in seconds. at: where level and base are meant; the panel's setting
    is computed through the wiring.
    """

    level: Volts
    width: Annotated[Value, quantity(TIME, above=0, most=1000, names=True)]
    base: Volts = 0.0
    edge: Annotated[Value, quantity(TIME, above=0, most=100, names=True)] = 100e-9
    rest: Annotated[Value, quantity(TIME, least=0, most=LONGEST_WAIT, names=True)] = 1e-3
    at: Where = "panel"


# What a sweep, a tune or --set may change of a pulse.
PULSE_KINDS: dict[str, Kind] = {
    "level": VOLTAGE,
    "width": TIME,
    "base": VOLTAGE,
    "edge": TIME,
    "rest": TIME,
}


class PresetStep(Model):
    """Drive the cell fully down with one pulse; a new round begins here.

    preset: the name of the pulse.
    """

    preset: PulseName


class StepStep(Model):
    """Deliver a stated number of pulses.

    step: the name of the pulse. count: how many. capture: each pulse by itself, or a train of
    them with one trigger and one long record. train_of: pulses in a train.
    """

    step: PulseName
    count: StepCount = 1.0
    capture: Capture = "each"
    train_of: Annotated[Count, Field(alias="train of")] = 10.0


class ReadStep(Model):
    """Deliver pulses until the end voltage passes the threshold, counting them.

    read: the name of the pulse. until: the threshold across the cell, in volts. at_most: pulses.
    capture: each pulse by itself, or a train of them with one trigger and one long record; then
    it stops after the first train that passes. train_of: pulses in a train.
    """

    read: PulseName
    until: Volts
    at_most: Annotated[Count, Field(alias="at most")]
    capture: Capture = "each"
    train_of: Annotated[Count, Field(alias="train of")] = 10.0


class WaitStep(Model):
    """Leave the cell alone, with the output on at its base.

    wait: seconds.
    """

    wait: Annotated[Value, quantity(TIME, least=0, most=LONGEST_WAIT, names=True)]


class ContactStep(Model):
    """Look with a small pulse whether a cell is there; the run ends if it is open or short.

    contact: the name of a pulse far below coercive.
    """

    contact: PulseName


class PundStep(Model):
    """Measure the switched charge: preset, two pulses up and two down of one size.

    pund: the name of the pulse up; its mirror image goes down.
    """

    pund: PulseName


class LoopStep(Model):
    """Measure a hysteresis loop: two triangles from minus to plus the amplitude and back.

    loop: the amplitude, in volts. period: seconds a triangle. at: where the amplitude is meant;
    the panel's setting is computed through the wiring.
    """

    loop: Annotated[Value, quantity(VOLTAGE, above=0, names=True)]
    period: Annotated[Value, quantity(TIME, above=0, most=1000, names=True)]
    at: Where = "panel"


class AskStep(Model):
    """Switch the output off and wait for a person, for so long at most.

    ask: what the person is told. within: seconds. otherwise: what happens when nobody answers.
    """

    ask: Annotated[str, Field(min_length=1, max_length=2000)]
    within: Annotated[Value, quantity(TIME, above=0, most=LONGEST_WAIT, names=True)] = 3600.0
    otherwise: Annotated[str, OneOf(("stop", "go on"))] = "stop"


class RepeatStep(Model):
    """Do the steps a stated number of times.

    repeat: how often. steps: what is repeated.
    """

    repeat: Count
    steps: Annotated[list["Step"], Field(min_length=1)]


def _sweep_axes(written: object) -> object:
    if not isinstance(written, dict) or not written:
        raise fault(
            "a sweep names what it changes", "write 'sweep: {up.width: [80 us, 100 us, 125 us]}'"
        )
    return written


def _axis_schema(*kinds: Kind) -> dict[str, Any]:
    one, count = schema_of_quantities(*kinds), quantity(NUMBER, least=1, whole=True).schema()
    ends = {"from": one, "to": one, "per decade": count, "points": count}
    return {
        "anyOf": [
            {"type": "array", "items": one, "minItems": 1},
            {
                "type": "object",
                "properties": ends,
                "required": ["from", "to"],
                "oneOf": [{"required": ["per decade"]}, {"required": ["points"]}],
                "additionalProperties": False,
            },
        ]
    }


_SETTABLE = f"^{WORD}([.]({'|'.join(PULSE_KINDS)}))?$"
_SWEEP_SCHEMA = {
    "type": "object",
    "patternProperties": {
        f"^{WORD}$": _axis_schema(*KINDS),
        **{f"[.]{name}$": _axis_schema(kind) for name, kind in PULSE_KINDS.items()},
    },
    "propertyNames": {"pattern": _SETTABLE},
    "minProperties": 1,
}


class SweepStep(Model):
    """Do the steps for each combination of the stated values of the stated settings.

    sweep: for each parameter or pulse setting a list of values, or a range. together: the
    settings move in step instead of forming a grid. order: shuffled takes the combinations in
    an order drawn with the seed, since drift hides in an ordered sweep. seed: of that order.
    steps: what is done for each combination.
    """

    sweep: Annotated[dict[str, Any], BeforeValidator(_sweep_axes), WithJsonSchema(_SWEEP_SCHEMA)]
    together: YesNo = False
    order: Annotated[str, OneOf(("as written", "shuffled"))] = "as written"
    seed: Annotated[float, quantity(NUMBER, least=0, most=2**32, whole=True)] = 1.0
    steps: Annotated[list["Step"], Field(min_length=1)]


class TuneStep(Model):
    """Find the value of one setting, between two others, that gives a wanted full count.

    tune: the parameter or pulse setting. between: the smallest and the largest value.
    full_count: what is wanted, in pulses. within: pulses. at_most: rounds. steps: one round,
    which begins with a preset and a read.
    """

    tune: Annotated[str, WithJsonSchema({"type": "string", "pattern": _SETTABLE})]
    between: Annotated[
        list[Any],
        Field(min_length=2, max_length=2),
        WithJsonSchema(
            {
                "type": "array",
                "items": schema_of_quantities(*KINDS),
                "minItems": 2,
                "maxItems": 2,
            }
        ),
    ]
    full_count: Annotated[
        Value,
        Field(alias="full count"),
        quantity(NUMBER, above=1, most=1_000_000, names=True),
    ]
    within: Annotated[Value, quantity(NUMBER, above=0, most=1e6, names=True)] = 0.5
    at_most: Annotated[
        Value,
        Field(alias="at most"),
        quantity(NUMBER, least=3, most=MOST_TUNING_ROUNDS, whole=True, names=True),
    ] = 12.0
    steps: Annotated[list["Step"], Field(min_length=1)]


class CyclePair(Model):
    """The two levels between which a cell is cycled, by the names of pulses.

    down, up: the name of the pulse; its level is held as long as it is wide.
    """

    down: PulseName
    up: PulseName


class StopWhen(Model):
    """What ends a cycling before its last pair. Shares are of the first value measured.

    switched_charge_below: a share, which needs a pund among the steps. full_count_off_by: a
    share, which needs a read. contact_is_lost: needs a contact.
    """

    switched_charge_below: Annotated[
        Value | None,
        Field(alias="switched charge below"),
        quantity(SHARE, above=0, most=1, names=True),
    ] = None
    full_count_off_by: Annotated[
        Value | None, Field(alias="full count off by"), quantity(SHARE, above=0, names=True)
    ] = None
    contact_is_lost: Annotated[YesNo, Field(alias="contact is lost")] = False


_PAIRS_SCHEMA = quantity(NUMBER, least=1, most=MOST_PAIRS, whole=True).schema()


class CycleStep(Model):
    """Send an exact number of pulse pairs, pausing to do the steps.

    cycle: the levels, as two pulses. pairs: how many, to 1e12. pause_at: numbers of pairs after
    which the steps are done. per_decade: so many pauses a decade of pairs. stop_when: what ends
    it early. steps: what is done before the first pair, at each pause, and after the last.
    """

    cycle: CyclePair
    pairs: Annotated[Value, quantity(NUMBER, least=1, most=MOST_PAIRS, whole=True, names=True)]
    pause_at: Annotated[
        list[float],
        Field(alias="pause at", default_factory=list),
        BeforeValidator(lambda written: _pauses(written)),
        WithJsonSchema({"type": "array", "items": _PAIRS_SCHEMA}),
    ]
    per_decade: Annotated[
        float, Field(alias="pauses per decade"), quantity(NUMBER, least=0, most=20, whole=True)
    ] = 0.0
    stop_when: Annotated[StopWhen, Field(alias="stop when", default_factory=StopWhen)]
    steps: Annotated[list["Step"], Field(default_factory=list)]


def _pauses(written: object) -> list[float]:
    if not isinstance(written, list):
        raise fault(
            "pauses are a list of numbers of pairs",
            "write 'pause at: [10, 1000, 1e5]', or 'pauses per decade: 1'",
        )
    return [_pause(each) for each in written]


def _pause(written: object) -> float:
    try:
        number = parse_quantity(written, NUMBER)
    except QuantityError:
        number = 0.0
    if not 1 <= number <= MOST_PAIRS or number != int(number):
        raise fault(
            f"{str(written)[:60]!r} is not a number of pairs",
            f"write whole numbers from 1 to {MOST_PAIRS:g}",
        )
    return number


STEP_MODELS: dict[str, type[Model]] = {
    "preset": PresetStep,
    "step": StepStep,
    "read": ReadStep,
    "wait": WaitStep,
    "contact": ContactStep,
    "pund": PundStep,
    "loop": LoopStep,
    "ask": AskStep,
    "repeat": RepeatStep,
    "sweep": SweepStep,
    "tune": TuneStep,
    "cycle": CycleStep,
}


def _verb(written: object) -> str | None:
    if isinstance(written, Model):
        return next(f"<{verb}>" for verb, model in STEP_MODELS.items() if type(written) is model)
    if isinstance(written, dict):
        # Some verbs are settings of none, so at most one of them is here.
        return next((f"<{verb}>" for verb in STEP_MODELS if verb in written), None)
    return None


def _known_step(written: object) -> object:
    if isinstance(written, Model) or _verb(written):
        return written
    verbs = [*STEP_MODELS]
    if isinstance(written, dict) and written:
        word = str(next(iter(written)))
        raise fault(f"there is no step {word[:60]!r}", nearest(word, verbs))
    if isinstance(written, str):
        raise fault(f"{written[:60]!r} is not a step", f"write it as '{verbs[0]}: down'")
    raise fault("this is not a step", f"begin it with one of {', '.join(verbs)}")


Step = Annotated[
    Annotated[PresetStep, Tag("<preset>")]
    | Annotated[StepStep, Tag("<step>")]
    | Annotated[ReadStep, Tag("<read>")]
    | Annotated[WaitStep, Tag("<wait>")]
    | Annotated[ContactStep, Tag("<contact>")]
    | Annotated[PundStep, Tag("<pund>")]
    | Annotated[LoopStep, Tag("<loop>")]
    | Annotated[AskStep, Tag("<ask>")]
    | Annotated[RepeatStep, Tag("<repeat>")]
    | Annotated[SweepStep, Tag("<sweep>")]
    | Annotated[TuneStep, Tag("<tune>")]
    | Annotated[CycleStep, Tag("<cycle>")],
    Discriminator(_verb),
    BeforeValidator(_known_step),
]


def _title(written: object) -> object:
    if not isinstance(written, str) or not written.strip():
        raise fault("a recipe has a title", "write 'recipe: what it finds out'")
    return written


_TITLE_SCHEMA = {"type": "string", "pattern": r"\S"}
# The word cycles is the program's own.
_NAMES_SCHEMA = {"pattern": f"^(?!cycles$){WORD}$"}
_PARAMETERS_SCHEMA = {
    "type": "object",
    "additionalProperties": schema_of_quantities(*KINDS),
    "propertyNames": _NAMES_SCHEMA,
}


class RecipeModel(Model):
    """A whole recipe: its title, what it declares, and its steps.

    recipe: its title. purpose: what it finds out, in a sentence. parameters: names for values
    that steps and pulses use, and that --set changes. pulses: trapezoids by name. steps: what is
    done, in order.
    """

    recipe: Annotated[str, BeforeValidator(_title), WithJsonSchema(_TITLE_SCHEMA)]
    purpose: str = ""
    parameters: Annotated[
        dict[str, Any], Field(default_factory=dict), WithJsonSchema(_PARAMETERS_SCHEMA)
    ]
    pulses: Annotated[
        dict[str, PulseModel],
        Field(default_factory=dict, json_schema_extra={"propertyNames": _NAMES_SCHEMA}),
    ]
    steps: Annotated[list[Step], Field(min_length=1)]


for _model in (RepeatStep, SweepStep, TuneStep, CycleStep, RecipeModel):
    _model.model_rebuild()
