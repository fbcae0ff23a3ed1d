"""Show a run while it goes on: a view that redraws itself in a terminal, plain lines elsewhere."""

import math
from collections.abc import Iterable, Iterator
from contextlib import contextmanager

from rich.bar import Bar
from rich.console import Console, Group, RenderableType
from rich.live import Live
from rich.panel import Panel
from rich.progress_bar import ProgressBar
from rich.table import Table
from rich.text import Text

from pulsetally.sequencer.events import Event
from pulsetally.sequencer.progress import Progress, printable
from pulsetally.sequencer.quantities import show_duration, show_quantity

# Redrawing costs the run time; a person sees no more than this.
_FRAMES_A_SECOND = 8


def follow(events: Iterable[Event], progress: Progress, console: Console) -> None:
    """Take a run's events to its end and show them on a console."""
    if console.is_terminal and not console.is_dumb_terminal:
        _follow_live(events, progress, console)
    else:
        _follow_plain(events, progress, console)


def _follow_plain(events: Iterable[Event], progress: Progress, console: Console) -> None:
    for event in events:
        for line in progress.take(event):
            console.print(Text(printable(line)), soft_wrap=True)


def _follow_live(events: Iterable[Event], progress: Progress, console: Console) -> None:
    with _closing_live(progress, console) as live:
        for event in events:
            said = progress.take(event)
            for line in said:
                live.console.print(Text(printable(line)), soft_wrap=True)


@contextmanager
def _closing_live(progress: Progress, console: Console) -> Iterator[Live]:
    with Live(
        console=console,
        refresh_per_second=_FRAMES_A_SECOND,
        get_renderable=lambda: draw(progress, console.size.height),
    ) as live:
        yield live


def draw(progress: Progress, height: int = 24) -> RenderableType:
    """Draw how a run stands; height: lines of the terminal."""
    parts: list[RenderableType] = [_head(progress)]
    if progress.asking:
        words = f"The output is off. {printable(progress.asking)} Then press Enter."
        parts.append(Panel(Text(words, style="bold"), title="a person is needed"))
    if progress.stopping and not progress.ended:
        parts.append(Text("Stopping after this round. Ctrl-C again stops at once.", style="bold"))
    parts.append(_answer(progress))
    # Beside pulses and histogram, the frame, the head, the answer and the last lines said take
    # about ten lines. In a low window the answer matters more than pictures.
    room = height - 10
    if room >= 4:
        bars = min(5, len(progress.counts), room // 3)
        parts.append(_histogram(progress, bars))
        parts.append(_pulses(progress, min(14, room - bars)))
    return Panel(Group(*parts), title="pulsetally", title_align="left")


def _head(progress: Progress) -> RenderableType:
    table = Table.grid(padding=(0, 2), expand=True)
    table.add_column(no_wrap=True)
    table.add_column(ratio=1)
    table.add_column(justify="right", no_wrap=True)
    number = min(max(progress.round, 1), progress.rounds)
    words = f"round {number} of {progress.rounds}"
    if progress.attempt > 1:
        words += f", attempt {progress.attempt}"
    table.add_row(
        Text(words, style="bold"),
        ProgressBar(total=max(1, progress.rounds), completed=progress.done),
        Text(_left(progress)),
    )
    doing = progress.doing + (f", {progress.setting}" if progress.setting else "")
    return Group(table, Text(f"{printable(doing)}; {progress.pulses} pulses so far"))


def _left(progress: Progress) -> str:
    left = progress.seconds_left
    return "" if left is None else f"{show_duration(left)} left"


def _pulses(progress: Progress, rows: int) -> RenderableType:
    table = Table.grid(padding=(0, 1), expand=True)
    table.add_column(justify="right", no_wrap=True, width=8)
    table.add_column(justify="right", no_wrap=True, width=9)
    table.add_column(ratio=1)
    threshold = progress.threshold
    if threshold is None:
        table.add_row("", "", Text("end voltages appear here while the cell is read", style="dim"))
        for _ in range(rows):
            table.add_row("", "", "")
        return table
    table.add_row("pulse", "end", Text(f"threshold {show_quantity(threshold, 'V')} at the mark"))
    shown = list(enumerate(progress.ends, start=1))[-rows:]
    for number, volts in shown:
        table.add_row(str(number), f"{volts:.3f} V", _MarkedBar(volts, threshold))
    for _ in range(rows - len(shown)):
        table.add_row("", "", "")
    return table


class _MarkedBar:
    """A bar as long as an end voltage, with a mark where the threshold lies."""

    def __init__(self, volts: float, threshold: float) -> None:
        self._share = volts / threshold if threshold else 0.0

    def __rich__(self) -> RenderableType:
        # The mark stands at four fifths, so that there is room to pass it.
        table = Table.grid(expand=True)
        table.add_column(ratio=4)
        table.add_column(width=1)
        table.add_column(ratio=1)
        share = self._share if math.isfinite(self._share) else 0.0
        passed = share > 1
        style = "green" if passed else "cyan"
        table.add_row(
            Bar(1.0, 0.0, min(1.0, max(0.0, share)), color=style),
            Text("┃" if passed else "│", style="bold"),
            Bar(0.25, 0.0, min(0.25, max(0.0, share - 1)), color=style),
        )
        return table


def _answer(progress: Progress) -> RenderableType:
    statistics = progress.statistics
    if statistics is None:
        return Text("no full count yet", style="dim")
    scatter = "" if statistics.sd is None else f", scatter {statistics.sd:.2f}"
    rounds = "1 round" if statistics.rounds == 1 else f"{statistics.rounds} rounds"
    where = f" at {progress.setting}" if progress.setting else ""
    words = f"full count {statistics.mean:.2f}{scatter} pulses ({rounds}){where}"
    return Text(printable(words), style="bold")


def _histogram(progress: Progress, bars: int) -> RenderableType:
    """Draw how many rounds were full after how many pulses."""
    table = Table.grid(padding=(0, 1))
    most = max(progress.counts.values(), default=1)
    for count in sorted(progress.counts)[-bars:] if bars else ():
        seen = progress.counts[count]
        length = math.ceil(30 * seen / most) if most > 30 else seen
        table.add_row(Text(f"{count:>4}"), Text("■" * length), Text(str(seen)))
    return table
