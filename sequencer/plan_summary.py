"""Write a plan for people and for programs: what a run will do, ask for and leave behind."""

from collections.abc import Iterable
from datetime import datetime

from rich.console import Console
from rich.table import Table
from rich.text import Text
from rich.tree import Tree

from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.forecast import end_of
from pulsetally.sequencer.outline import Branch
from pulsetally.sequencer.plan import Plan, PulseVolts
from pulsetally.sequencer.progress import printable
from pulsetally.sequencer.quantities import show_duration, show_quantity
from pulsetally.sequencer.summary import say, show_bytes

# A recipe may declare as many pulses as it likes; a person looks at so many.
_MOST_ROWS = 40


def show_plan(
    console: Console, plan: Plan, bench: Bench, *, now: datetime, free_bytes: int | None
) -> None:
    """Print what a plan will ask for. free_bytes: on the logbook's disk; None if nobody knows."""
    say(console, plan.recipe.title, style="bold")
    if plan.recipe.model.purpose:
        say(console, plan.recipe.model.purpose)
    say(console, _amount(plan))
    say(console, _duration(plan, now))
    if plan.asking_seconds:
        say(console, f"Waiting for a person may add {show_duration(plan.asking_seconds)} to that.")
    free = "" if free_bytes is None else f"; {show_bytes(free_bytes)} are free"
    say(console, f"At most about {show_bytes(plan.disk_bytes)} of logbook{free}.")
    tree = Tree("steps", guide_style="dim")
    _grow(tree, plan.outline)
    console.print(tree)
    console.print(_voltage_table(plan, bench))
    if plan.records:
        console.print(_record_table(plan))
    for warning in warnings_of(plan, free_bytes):
        say(console, f"Note: {warning}.")


def plan_object(
    plan: Plan, bench: Bench, *, now: datetime, free_bytes: int | None
) -> dict[str, object]:
    """Return a plan as an object for JSON, in SI units."""
    ends = end_of(plan.seconds, now)
    latest = end_of(plan.seconds + plan.asking_seconds, now)
    limits = bench.model.limits
    panel, terminal, cell = _largest(plan.volts)
    return {
        "recipe": plan.recipe.title,
        "rounds": len(plan.rounds),
        "most_pulses": plan.most_pulses,
        "pairs": plan.pairs,
        "seconds": plan.seconds,
        "asking_seconds": plan.asking_seconds,
        "would_end": ends and ends.isoformat(timespec="seconds"),
        "would_end_at_the_latest": latest and latest.isoformat(timespec="seconds"),
        "disk_bytes": plan.disk_bytes,
        "free_bytes": free_bytes,
        "swept": list(plan.swept),
        "outline": [each.as_object() for each in plan.outline],
        "pulses": [
            {
                "pulse": each.name,
                "end": each.end,
                "panel": each.panel,
                "terminal": each.terminal,
                "cell": each.cell,
            }
            for each in plan.volts
        ],
        "largest": {"panel": panel, "terminal": terminal, "cell": cell},
        "limits": {"panel": bench.panel_limit(), "source": limits.source, "node": limits.node},
        "records": [
            {
                "pulse": each.name,
                "what": each.what,
                "points": each.points,
                "needed_interval": each.needed,
                "given_interval": each.given,
                "samples": each.samples,
                "coarse": each.coarse,
            }
            for each in plan.records
        ],
        "warnings": warnings_of(plan, free_bytes),
    }


def warnings_of(plan: Plan, free_bytes: int | None) -> list[str]:
    """Return what a person should know before the run, the logbook's disk included."""
    found = list(plan.warnings)
    if free_bytes is not None and plan.disk_bytes > free_bytes:
        found.append(
            f"the logbook may grow by {show_bytes(plan.disk_bytes)} and its disk has"
            f" {show_bytes(free_bytes)} free; make room, or write it elsewhere with --logbook"
        )
    return found


def _amount(plan: Plan) -> str:
    rounds = "1 round" if len(plan.rounds) == 1 else f"{len(plan.rounds)} rounds"
    if any(each.tune or each.cycling for each in plan.rounds):
        # A tune ends when its value is found, a cycling when the cell is worn out.
        rounds = f"At most {rounds}"
    pulses = f"at most {plan.most_pulses} recorded pulses"
    pairs = f", {plan.pairs} pairs of cycling" if plan.pairs else ""
    return f"{rounds}, {pulses}{pairs}."


def _duration(plan: Plan, now: datetime) -> str:
    words = f"At most about {show_duration(plan.seconds)}"
    if (ends := end_of(plan.seconds, now)) is not None:
        words += f"; started now, it would end on {_moment(ends)}"
    return f"{words}."


def _moment(moment: datetime) -> str:
    return f"{moment:%a} {moment.day} {moment:%b %Y} at {moment:%H:%M}"


def _grow(tree: Tree, branches: Iterable[Branch]) -> None:
    for each in branches:
        line = Text(f"{each.verb} ", style="bold")
        line.append(printable(each.words), style="not bold")
        _grow(tree.add(line), each.steps)


def _largest(volts: tuple[PulseVolts, ...]) -> tuple[float, float, float]:
    """Return the largest voltage of either sign at panel, terminal and cell."""
    columns = [(each.panel, each.terminal, each.cell) for each in volts] or [(0.0, 0.0, 0.0)]
    panel, terminal, cell = (max(column, key=abs) for column in zip(*columns, strict=True))
    return panel, terminal, cell


def _voltage_table(plan: Plan, bench: Bench) -> Table:
    table = Table("pulse", title="Voltages")
    for place in ("at the panel", "at the terminal", "across the cell"):
        table.add_column(place, justify="right")
    for each in plan.volts[:_MOST_ROWS]:
        base = " (base)" if each.end == "base" else ""
        _add_volts(table, each.name + base, each.panel, each.terminal, each.cell)
    table.add_section()
    _add_volts(table, "largest", *_largest(plan.volts))
    limits = bench.model.limits
    _add_volts(table, "limit", bench.panel_limit(), limits.source, limits.node)
    return table


def _add_volts(table: Table, name: str, *volts: float) -> None:
    table.add_row(Text(printable(name)), *(show_quantity(each, "V") for each in volts))


def _record_table(plan: Plan) -> Table:
    table = Table("pulse", "recorded", title="Records")
    for name in ("samples", "one needed every", "taken every", "on the top"):
        table.add_column(name, justify="right")
    for each in plan.records[:_MOST_ROWS]:
        table.add_row(
            Text(printable(each.name)),
            each.what,
            str(each.points),
            show_quantity(each.needed, "s", 3),
            show_quantity(each.given, "s", 3),
            f"{each.samples}" if each.what != "loop" else f"{each.samples} in all",
        )
    return table
