"""Which steps may stand in a tune and in a cycle, and what a sweep holds somewhere within.

Rules that need no bench. Faults are pairs of a problem and its remedy.
"""

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

from pulsetally.sequencer.models import Model, Name, quantified
from pulsetally.sequencer.rounds import Action, Read, pulses_of
from pulsetally.sequencer.steps import (
    ContactStep,
    CycleStep,
    PresetStep,
    PundStep,
    ReadStep,
    StepStep,
    SweepStep,
    TuneStep,
    WaitStep,
)

Fault = tuple[str, str]

_PLAIN = (PresetStep, StepStep, ReadStep, WaitStep, ContactStep)


def tune_fault(step: TuneStep) -> Fault | None:
    """Say what forbids a tune's steps: they must be one round whose count tells something."""
    if not all(isinstance(each, _PLAIN) for each in step.steps):
        return (
            "the steps of a tune hold something else than preset, step, read, wait and contact",
            "leave the rest out of it",
        )
    kept = [each for each in step.steps if not isinstance(each, WaitStep | ContactStep)]
    presets = sum(isinstance(each, PresetStep) for each in kept)
    if len(kept) < 2 or not isinstance(kept[0], PresetStep) or presets > 1:
        return "the steps of a tune are not one round", "write one preset, then one read"
    if not isinstance(kept[1], ReadStep):
        return "a tune has no read right after its preset", "read before anything is stepped"
    whole = next((setting for each in step.steps for setting in _whole_uses(each, step.tune)), None)
    if whole is not None:
        return (
            f"a tune tries fractions of {step.tune!r}, and {whole!r} in its steps is a whole"
            " number",
            "sweep it over whole numbers, or tune a voltage or a time",
        )
    return None


def _whole_uses(step: Model, name: str) -> Iterator[str]:
    """Yield the settings of a step that a parameter gives, and that must be whole numbers."""
    for setting, field in type(step).model_fields.items():
        read = quantified(field)
        if getattr(step, setting) == Name(name) and read is not None and read.whole:
            yield field.alias or setting


def tuned_faults(
    step: TuneStep, lowest: Sequence[Action], highest: Sequence[Action]
) -> Iterator[Fault]:
    """Say what forbids a tune when its actions at both ends of the range are known."""
    ways = [
        [each.rising for action in some for each in pulses_of(action)] for some in (lowest, highest)
    ]
    if ways[0] != ways[1]:
        low, high = step.between
        yield (
            f"tuning {step.tune!r} from {low} to {high} turns a pulse round on the way",
            "keep level on one side of base",
        )
    if _counted(lowest) == _counted(highest):
        yield (
            f"nothing up to the first read of a tune depends on {step.tune!r}",
            "tune what its preset or its read uses",
        )


def _counted(actions: Sequence[Action]) -> list[Action]:
    """Return what a tune's count can depend on, without the settings that are only noted."""
    first = next((place for place, each in enumerate(actions) if isinstance(each, Read)), 0)
    return [
        replace(each, settings={}) if isinstance(each, Read) else each
        for each in actions[: first + 1]
    ]


def stop_faults(step: CycleStep) -> Iterator[Fault]:
    """Name what a cycle stops on and nothing in its steps measures."""
    held = set(_verbs(step.steps))
    for name, needed, value in (
        ("switched charge below", PundStep, step.stop_when.switched_charge_below),
        ("full count off by", ReadStep, step.stop_when.full_count_off_by),
        ("contact is lost", ContactStep, step.stop_when.contact_is_lost or None),
    ):
        if value is not None and needed not in held:
            verb = needed.__name__.removesuffix("Step").lower()
            yield (
                f"a cycle stops on {name!r}, and nothing in its steps measures that",
                f"add a '{verb}' to its steps",
            )


def swept_names(steps: list[Any]) -> Iterator[str]:
    """Yield what is swept or tuned anywhere in these steps."""
    for step in steps:
        if isinstance(step, SweepStep):
            yield from step.sweep
        if isinstance(step, TuneStep):
            yield step.tune
        yield from swept_names(getattr(step, "steps", []))


def _verbs(steps: list[Any]) -> Iterator[type[Model]]:
    for step in steps:
        yield type(step)
        yield from _verbs(getattr(step, "steps", []))
