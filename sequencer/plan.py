"""Recipe and bench -> rounds, and what they will ask of cell, instruments, disk and night.

Everything here happens before power: a plan that stands keeps every limit.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

from pulsetally.drivers.function_generator import keeps_limit
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.forecast import EMPTY_BYTES, disk_bytes_of, seconds_of
from pulsetally.sequencer.outline import Branch, outline_of
from pulsetally.sequencer.quantities import show_quantity
from pulsetally.sequencer.recipe import Recipe
from pulsetally.sequencer.records import RecordTooLong, train_points
from pulsetally.sequencer.resolution import (
    PulseRecord,
    generator_problems,
    record_problems,
    record_warnings,
    records_of,
    settling_warnings,
)
from pulsetally.sequencer.rounds import (
    Action,
    Ask,
    Contact,
    Cycle,
    Loop,
    Preset,
    Pulse,
    Pund,
    Read,
    Round,
    Step,
    Wait,
    pulses_of,
)
from pulsetally.sequencer.unfold import Unfolding


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseVolts:
    """What one end of a pulse means along the way to the cell, in volts.

    end: 'level' or 'base'; a base of 0 V at the panel is left out.
    """

    name: str
    end: str
    panel: float
    terminal: float
    cell: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """All rounds of a run, and what they ask for.

    swept: names of what the recipe changes. most_pulses: if every read goes to its end. pairs:
    of all cyclings together. seconds, disk_bytes: estimates for that case; asking_seconds: how
    long a person may let it wait, beyond seconds. volts: by pulse, largest of each. records: how
    each pulse is recorded, the coarsest of each kind. outline: what the recipe does, as a tree.
    """

    recipe: Recipe
    rounds: tuple[Round, ...]
    swept: tuple[str, ...]
    most_pulses: int
    pairs: int
    seconds: float
    asking_seconds: float
    disk_bytes: int
    volts: tuple[PulseVolts, ...]
    records: tuple[PulseRecord, ...]
    outline: tuple[Branch, ...]
    warnings: tuple[str, ...] = field(default=())


def make_plan(recipe: Recipe, bench: Bench) -> Plan:
    """Turn a recipe into rounds for a bench. Raises PlanError with every reason against it."""
    unfolding = Unfolding(recipe, bench)
    rounds = unfolding.rounds()
    problems = list(dict.fromkeys(unfolding.problems))
    actions = list(_all_actions(rounds))
    pulses = list(dict.fromkeys(pulse for action in actions for pulse in pulses_of(action)))
    volts = _volts(pulses, bench)
    problems += _limit_problems(volts, bench)
    problems += _panel_problems(pulses, bench)
    problems += dict.fromkeys(_train_problems(actions))
    # What is no pulse at all needs no record either.
    records = [] if problems else records_of(actions, bench)
    problems += record_problems(records, bench)
    problems += dict.fromkeys(generator_problems(actions, bench))
    if problems:
        raise PlanError(problems)
    most_points = bench.oscilloscope_dialect.most_points
    planned = [action for each in rounds for action in each.actions]
    return Plan(
        recipe=recipe,
        rounds=rounds,
        swept=tuple(unfolding.swept),
        most_pulses=sum(each.most_pulses for each in rounds),
        pairs=sum(each.pairs for each in planned if isinstance(each, Cycle)),
        seconds=sum(map(seconds_of, planned)),
        asking_seconds=sum(each.seconds for each in planned if isinstance(each, Ask)),
        disk_bytes=EMPTY_BYTES + sum(disk_bytes_of(each, most_points) for each in planned),
        volts=tuple(volts),
        records=tuple(records),
        outline=outline_of(recipe),
        warnings=(
            *_warnings(rounds, volts, bench),
            *_contact_warnings(rounds, bench),
            *_charge_warnings(rounds, bench),
            *dict.fromkeys(_direction_warnings(rounds)),
            *record_warnings(records),
            *settling_warnings(actions, bench),
        ),
    )


def _all_actions(rounds: tuple[Round, ...]) -> Iterator[Action]:
    tuned = None
    for each in rounds:
        yield from each.actions
        if each.tune is not None and each.tune is not tuned:
            tuned = each.tune
            yield from each.tune.actions(each.tune.high)[0]


def _train_problems(actions: list[Action]) -> Iterator[str]:
    for action in actions:
        if isinstance(action, Step | Read) and action.train > 1:
            try:
                train_points(action.pulse, action.train)
            except RecordTooLong as error:
                yield f"pulse {action.pulse.name!r}: {error}."


def _volts(pulses: list[Pulse], bench: Bench) -> list[PulseVolts]:
    """Return what both ends of each pulse come to, the largest of all that have its name."""
    largest: dict[tuple[str, str], PulseVolts] = {}
    for pulse in pulses:
        for end, panel in (("level", pulse.level), ("base", pulse.base)):
            if end == "base" and panel == 0:
                continue
            before = largest.get((pulse.name, end))
            if before is None or abs(panel) > abs(before.panel):
                largest[pulse.name, end] = PulseVolts(
                    name=pulse.name,
                    end=end,
                    panel=panel,
                    terminal=bench.terminal_volts(panel),
                    cell=bench.cell_volts(panel),
                )
    return list(largest.values())


def _limit_problems(volts: list[PulseVolts], bench: Bench) -> list[str]:
    limits = bench.model.limits
    problems = []
    for each in volts:
        for place, value, limit, name in (
            ("at the terminal", each.terminal, limits.source, "source"),
            ("across the cell", each.cell, limits.node, "node"),
        ):
            if not keeps_limit(value, limit):
                what = "" if each.end == "level" else "the base of "
                problems.append(
                    f"{what}pulse {each.name!r} of {show_quantity(each.panel, 'V')} at the panel"
                    f" means {show_quantity(value, 'V')} {place}, beyond the {name} limit of"
                    f" {show_quantity(limit, 'V')} in {bench.file}. To fix it, lower the pulse,"
                    " or raise the limit if the cell bears it."
                )
    return problems


def _panel_problems(pulses: list[Pulse], bench: Bench) -> list[str]:
    """Check base and level of every pulse as the driver will, so that it never has to refuse."""
    limit, told = bench.panel_limit(), []
    for pulse in pulses:
        for name, volts in (("base", pulse.base), ("level", pulse.level)):
            if not keeps_limit(volts, limit):
                told.append(
                    f"the {name} of pulse {pulse.name!r} is {show_quantity(volts, 'V')}, beyond"
                    f" {show_quantity(limit, 'V')} at the panel, which is what keeps both limits"
                    f" of {bench.file} whatever a diode or a clamp does. To fix it, lower the"
                    " pulse, or raise the limits if the cell bears it."
                )
    return list(dict.fromkeys(told))


# Half of the smallest coercive field of common films, 40 kV/cm (a handbook value for PZT films,
# from memory): a contact pulse shall switch nothing.
_HARMLESS_VOLTS_PER_METRE = 2e6


def _contact_warnings(rounds: tuple[Round, ...], bench: Bench) -> Iterator[str]:
    pulses = {
        each.pulse: None for one in rounds for each in one.actions if isinstance(each, Contact)
    }
    for pulse in pulses:
        volts = abs(bench.cell_volts(pulse.level))
        if volts / bench.model.cell.thickness > _HARMLESS_VOLTS_PER_METRE:
            yield (
                f"contact pulse {pulse.name!r} puts {show_quantity(volts, 'V')} across"
                f" {show_quantity(bench.model.cell.thickness, 'm')}, which may switch something"
            )
    if pulses and bench.model.wiring.series_diode is not None:
        yield "behind a series diode a small pulse hardly conducts, so contact can't be judged well"


def _charge_warnings(rounds: tuple[Round, ...], bench: Bench) -> Iterator[str]:
    kinds = {type(action) for each in rounds for action in each.actions}
    if bench.model.wiring.series_diode is not None:
        for kind, name in ((Pund, "the switched charge"), (Loop, "the loop")):
            if kind in kinds:
                yield (
                    "behind a series diode source and node don't tell the series resistor's"
                    f" voltage, so {name} can't be measured well"
                )


def _direction_warnings(rounds: tuple[Round, ...]) -> Iterator[str]:
    """Tell of reads that go the way of their preset, and so find the cell full."""
    for each in rounds:
        preset: Pulse | None = None
        for action in each.actions:
            if isinstance(action, Preset):
                preset = action.pulse
                continue
            if preset is None or isinstance(action, Wait | Contact):
                continue
            onward = isinstance(action, Step | Read) and action.pulse.rising == preset.rising
            if onward and isinstance(action, Read):
                yield (
                    f"the preset {preset.name!r} goes {'up' if preset.rising else 'down'}, and so"
                    f" does the read {action.pulse.name!r} after it, which finds a cell that is"
                    " full already"
                )
            if isinstance(action, Read) or not onward:
                # The cell is now elsewhere than its preset had it.
                preset = None


def _warnings(rounds: tuple[Round, ...], volts: list[PulseVolts], bench: Bench) -> Iterator[str]:
    for each in volts:
        if abs(each.cell) < 0.05 * abs(each.terminal):
            what = "" if each.end == "level" else "the base of "
            sent, left = show_quantity(each.terminal, "V"), show_quantity(each.cell, "V")
            yield (
                f"{what}pulse {each.name!r} hardly reaches the cell: of {sent} at the terminal"
                f" {left} are left; a series diode blocks one polarity"
            )
    planned = (action for each in rounds for action in each.actions)
    first = next((each for each in planned if not isinstance(each, Contact | Wait | Ask)), None)
    if first is not None and not isinstance(first, Preset | Pund | Loop):
        yield "the recipe begins without a preset: the first round starts from an unknown state"
    yield from bench.notes()
