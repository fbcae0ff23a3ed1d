"""Recipe and bench -> rounds, and what they will ask of cell, instruments, disk and night.

Everything here happens before power: a plan that stands keeps every limit.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.quantities import show_quantity
from pulsetally.sequencer.recipe import Recipe
from pulsetally.sequencer.records import POINTS, RecordTooLong, train_points
from pulsetally.sequencer.rounds import (
    Action,
    Ask,
    Contact,
    Cycle,
    Pulse,
    Read,
    Round,
    Step,
    Wait,
    most_pulses,
    pulses_of,
)
from pulsetally.sequencer.unfold import Unfolding

# Two channels of two bytes a sample, and what else a pulse leaves in the logbook.
_BYTES_PER_POINT, _BYTES_PER_SHOT = 4, 600
# Common practice: a handful of exchanges a pulse, a few milliseconds each on a real line.
_SECONDS_PER_SHOT, _SECONDS_PER_SETUP = 0.04, 0.15


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseVolts:
    """What one pulse means along the way to the cell, in volts."""

    name: str
    panel: float
    terminal: float
    cell: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """All rounds of a run, and what they ask for.

    swept: names of what the recipe changes. most_pulses: if every read goes to its end. pairs:
    of all cyclings together. seconds, disk_bytes: estimates for that case; asking_seconds: how
    long a person may let it wait, beyond seconds. volts: by pulse, largest of each.
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
    if problems:
        raise PlanError(problems)
    planned = [action for each in rounds for action in each.actions]
    return Plan(
        recipe=recipe,
        rounds=rounds,
        swept=tuple(unfolding.swept),
        most_pulses=sum(each.most_pulses for each in rounds),
        pairs=sum(each.pairs for each in planned if isinstance(each, Cycle)),
        seconds=sum(map(_seconds, planned)),
        asking_seconds=sum(each.seconds for each in planned if isinstance(each, Ask)),
        disk_bytes=sum(map(_disk_bytes, planned)) + 100_000,
        volts=tuple(volts),
        warnings=(*_warnings(rounds, volts, bench), *_contact_warnings(rounds, bench)),
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


def _seconds(action: Action) -> float:
    match action:
        case Wait():
            return action.seconds
        case Ask():
            return 0.0
        case Cycle():
            return _SECONDS_PER_SETUP + action.pairs * action.period
        case Step(train=train) | Read(train=train) if train > 1:
            trains = -(-most_pulses(action) // train)
            each = (action.pulse.duration + action.pulse.rest) * train * 2 + _SECONDS_PER_SHOT
            return _SECONDS_PER_SETUP + trains * each
        case _:
            # A record takes up to five times its pulse, since time bases go in steps of 1, 2, 5.
            each = 4 * action.pulse.duration + action.pulse.rest + _SECONDS_PER_SHOT
            return _SECONDS_PER_SETUP + each * most_pulses(action)


def _disk_bytes(action: Action) -> int:
    if isinstance(action, Step | Read) and action.train > 1:
        trains = -(-most_pulses(action) // action.train)
        points = train_points(action.pulse, action.train)
        return trains * (points * _BYTES_PER_POINT + _BYTES_PER_SHOT)
    return most_pulses(action) * (POINTS * _BYTES_PER_POINT + _BYTES_PER_SHOT)


def _volts(pulses: list[Pulse], bench: Bench) -> list[PulseVolts]:
    largest: dict[str, PulseVolts] = {}
    for pulse in pulses:
        panel = max((pulse.level, pulse.base), key=abs)
        found = PulseVolts(
            name=pulse.name,
            panel=panel,
            terminal=bench.terminal_volts(panel),
            cell=bench.cell_volts(panel),
        )
        if pulse.name not in largest or abs(found.panel) > abs(largest[pulse.name].panel):
            largest[pulse.name] = found
    return list(largest.values())


def _limit_problems(volts: list[PulseVolts], bench: Bench) -> list[str]:
    limits = bench.model.limits
    problems = []
    for each in volts:
        for place, value, limit, name in (
            ("at the terminal", each.terminal, limits.source, "source"),
            ("across the cell", each.cell, limits.node, "node"),
        ):
            if not abs(value) <= limit:
                problems.append(
                    f"pulse {each.name!r} of {show_quantity(each.panel, 'V')} at the panel means"
                    f" {show_quantity(value, 'V')} {place}, beyond the {name} limit of"
                    f" {show_quantity(limit, 'V')} in {bench.file}. To fix it, lower the pulse,"
                    " or raise the limit if the cell bears it."
                )
    return problems


def _panel_problems(pulses: list[Pulse], bench: Bench) -> list[str]:
    """Check base and level of every pulse as the driver will, so that it never has to refuse."""
    limit, told = bench.panel_limit(), []
    for pulse in pulses:
        for name, volts in (("base", pulse.base), ("level", pulse.level)):
            if not abs(volts) <= limit:
                told.append(
                    f"the {name} of pulse {pulse.name!r} is {show_quantity(volts, 'V')}, beyond"
                    f" {show_quantity(limit, 'V')} at the panel, which is what keeps both limits of"
                    f" {bench.file} whatever a diode does. To fix it, lower the pulse, or raise the"
                    " limits if the cell bears it."
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


def _warnings(rounds: tuple[Round, ...], volts: list[PulseVolts], bench: Bench) -> Iterator[str]:
    for each in volts:
        if abs(each.cell) < 0.05 * abs(each.terminal):
            sent, left = show_quantity(each.terminal, "V"), show_quantity(each.cell, "V")
            yield (
                f"pulse {each.name!r} hardly reaches the cell: of {sent} at the terminal {left}"
                " are left; a series diode blocks one polarity"
            )
    if rounds and not rounds[0].repeatable:
        yield "the recipe begins without a preset: the first round starts from an unknown state"
    yield from bench.notes()
