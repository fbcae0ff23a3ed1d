"""Write plans and results for people: tables and sentences, for a terminal or a pipe."""

from rich.console import Console
from rich.table import Table
from rich.text import Text

from pulsetally.sequencer.analysis.counting import CountStatistics
from pulsetally.sequencer.discovery import Found
from pulsetally.sequencer.finding_tables import (
    finding_sentences,
    finding_tables,
    remaining_table,
    swept_cells,
    swept_names,
)
from pulsetally.sequencer.probe import Check
from pulsetally.sequencer.progress import printable
from pulsetally.sequencer.results import RoundResult, RunResult, RunSummary

_MOST_ROWS = 60


def say(console: Console, words: str, style: str = "") -> None:
    """Print one sentence that may hold text from a file or an instrument."""
    console.print(Text(printable(words, 5000), style=style), soft_wrap=True)


def show_runs(console: Console, found: list[RunSummary]) -> None:
    """Print one line for each run."""
    table = Table("run")
    for name in ("began (UTC)", "recipe", "kind", "state", "rounds", "shots"):
        table.add_column(name, no_wrap=name != "recipe")
    for each in found:
        table.add_row(
            str(each.run),
            Text(printable(each.began_at[5:16].replace("T", " "))),
            Text(printable(each.title)),
            Text(printable(each.mode)),
            Text(printable(each.state)),
            f"{each.rounds} of {each.planned_rounds - each.skipped}",
            str(each.shots),
        )
    console.print(table)
    for each in found:
        if each.reason and each.state != "finished":
            say(console, f"run {each.run}: {each.reason}")


def show_result(console: Console, result: RunResult, *, rounds: bool = True) -> None:
    """Print what a run found."""
    summary = result.summary
    say(console, f"Run {summary.run}: {summary.title} ({summary.mode}, {summary.state})", "bold")
    if rounds and summary.reason and summary.state != "finished":
        say(console, summary.reason)
    if rounds:
        if summary.bench:
            say(console, f"bench: {summary.bench} ({summary.bench_file})")
        for role, identity in result.identities.items():
            say(console, f"{role}: {identity}")
    needed = summary.planned_rounds - summary.skipped
    kept = f"{summary.rounds} of {needed} rounds, {summary.shots} shots kept"
    if summary.skipped:
        kept += f"; {summary.skipped} more were planned and not needed"
    say(console, kept)
    # What a round found beside counts has tables of its own.
    told = [each for each in result.rounds if each.reads or each.stepped or _note(each)]
    if rounds and told:
        console.print(_round_table(result, told[-_MOST_ROWS:]))
        if len(told) > _MOST_ROWS:
            say(console, f"The last {_MOST_ROWS} of {len(told)} rounds are shown.")
    show_answer(console, result)


def show_answer(console: Console, result: RunResult) -> None:
    """Print what was measured, for each combination of what was swept, and what it leaves out."""
    for table in finding_tables(result, most_rows=_MOST_ROWS):
        console.print(table)
    for sentence in finding_sentences(result):
        say(console, sentence)
    _show_counts(console, result)
    if (remaining := remaining_table(result)) is not None:
        console.print(remaining)
    left = result.left_out
    reasons = [
        f"{count} {words}"
        for count, words in (
            (left.not_reached, "did not reach the threshold"),
            (left.first_pulse, "passed it with the first pulse"),
        )
        if count
    ]
    if result.full_count is not None and reasons:
        say(
            console,
            f"Left out of it: rounds of which {' and '.join(reasons)}. Mean and scatter are"
            " those of the others only, and the true scatter is larger.",
        )


def _show_counts(console: Console, result: RunResult) -> None:
    if result.full_count is None:
        if words := _why_no_answer(result):
            say(console, words)
        return
    # One row says at which setting, also where a sweep was cut short.
    if result.by_setting:
        table = Table(
            *swept_names(result), "full count", "scatter", "rounds", title="Full count, pulses"
        )
        rows: list[tuple[dict[str, float], tuple[str, str, int]]] = [
            (each.settings, (f"{each.count.mean:.2f}", _scatter(each.count), each.count.rounds))
            for each in result.by_setting
        ]
        # A setting at which nothing could be counted says something too.
        for left in result.left_out_by_setting:
            words = "at most 1" if left.at_most is None else f"> {left.at_most}"
            rows.append((left.settings, (words, "", left.rounds)))
        # A shuffled sweep is read in order all the same.
        rows.sort(key=lambda row: [row[0].get(name, 0) for name in result.swept])
        for settings, (count, scatter, rounds) in rows:
            table.add_row(*swept_cells(result, settings), count, scatter, str(rounds))
        console.print(table)
        return
    say(console, f"Full count: {spell_count(result.full_count)}", style="bold")


def _why_no_answer(result: RunResult) -> str:
    reads = [read for each in result.rounds for read in each.reads]
    measured = any(each.findings or each.contacts for each in result.rounds)
    if not reads:
        # A recipe that measures something else owes no full count.
        return "" if measured else "No read was finished, so there is no full count."
    if not any(each.preset and read.stepped == 0 for each in result.rounds for read in each.reads):
        # Readbacks, and reads of what was stepped, have words of their own.
        return ""
    if any(not read.reached for read in reads):
        return "No full count: the threshold was not reached; see 'at most' and the threshold."
    return (
        "No full count with a fraction: the first pulse already passed the threshold, or pulses"
        " were stepped before each read."
    )


def spell_count(count: CountStatistics) -> str:
    """Write a full count with what it stands on."""
    if count.sd is None:
        return f"{count.mean:.2f} pulses (1 round; its scatter needs more)"
    return (
        f"{count.mean:.2f} pulses, scatter {count.sd:.2f} pulses"
        f" (standard deviation of {count.rounds} rounds; mean known to"
        f" {count.mean_uncertainty:.2g})"
    )


def show_found(console: Console, found: list[Found]) -> None:
    """Print what was found at each address."""
    if not found:
        say(console, "No address was found. Name bench files to ask the addresses in them.")
        return
    table = Table("address", "who answers")
    for each in found:
        words = each.identity or f"nobody: {each.note}"
        table.add_row(Text(printable(each.address)), Text(printable(words)))
    console.print(table)


def show_checks(console: Console, checks: list[Check]) -> None:
    """Print what holds and what doesn't, with the exchange of each failure."""
    table = Table("instrument", "check", "holds", "found")
    for each in checks:
        word = {True: "yes", False: "NO", None: "not tried"}[each.holds]
        table.add_row(each.instrument, each.name, word, Text(printable(each.detail)))
    console.print(table)
    for each in checks:
        if each.holds is False:
            say(console, f"{each.instrument}, {each.name}: what went over the line:", "bold")
            for line in each.exchange:
                say(console, f"    {line}")
    failed = sum(each.holds is False for each in checks)
    say(console, f"{failed} of {len(checks)} checks failed." if failed else "Everything holds.")


def show_bytes(count: float) -> str:
    """Write a size for reading."""
    for unit in ("bytes", "kB", "MB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} GB"


def _scatter(count: CountStatistics) -> str:
    return "" if count.sd is None else f"{count.sd:.2f}"


def _round_table(result: RunResult, told: list[RoundResult]) -> Table:
    table = Table("round", *swept_names(result), "stepped", "remaining", "crossing", "sum", "note")
    for each in told:
        if not each.reads:
            swept = swept_cells(result, each.settings)
            table.add_row(str(each.round), *swept, str(each.stepped), "", "", "", _note(each))
        for read in each.reads:
            swept = swept_cells(result, read.settings)
            remaining = str(read.count) if read.reached else f"> {read.count}"
            crossing = "" if read.crossing is None else f"{read.crossing:.2f}"
            total = "" if read.crossing is None else f"{read.stepped + read.crossing:.2f}"
            if read.reached and read.crossing is None:
                # The first pulse passed: the crossing lies somewhere within it.
                total = f"{read.stepped} to {read.stepped + 1}"
            note = _note(each) or ("" if read.reached else "threshold not reached")
            table.add_row(
                str(each.round), *swept, str(read.stepped), remaining, crossing, total, note
            )
    return table


def _note(each: RoundResult) -> str:
    if each.spoiled:
        return printable(f"spoiled: {each.reason}")
    return "" if each.complete else printable(each.reason)
