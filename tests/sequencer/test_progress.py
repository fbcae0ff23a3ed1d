"""What a view knows of a run, and that nothing foreign reaches a screen raw."""

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rich.console import Console

from pulsetally.sequencer.analysis.pulses import EndVoltage
from pulsetally.sequencer.events import (
    CyclingBegan,
    Event,
    FindingKind,
    Found,
    PairsSent,
    PersonAnswered,
    PersonAsked,
    PulseArmed,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RoundsSkipped,
    RunBegan,
    RunEnded,
    RunState,
    ShotTaken,
    StopAsked,
    WaitBegan,
)
from pulsetally.sequencer.live import draw, follow
from pulsetally.sequencer.progress import Progress, printable
from pulsetally.sequencer.rounds import Preset, Pulse, Round
from tests.sequencer.test_logbook import invented_shot


def read_pulse(order: int, volts: float) -> list[Event]:
    end = EndVoltage(volts=volts, uncertainty=1e-3, samples=9, seconds=1e-4)
    return [
        PulseArmed(round=1, order=order, role=Role.READ, pulse="up", threshold=2.5),
        ShotTaken(
            round=1,
            order=order,
            role=Role.READ,
            pulse="up",
            shot=invented_shot(),
            ends=(end,),
            threshold=2.5,
            at_most=60,
        ),
    ]


def finished(number: int, crossing: float) -> ReadFinished:
    return ReadFinished(
        round=number,
        pulse="up",
        threshold=2.5,
        count=int(crossing) + 1,
        crossing=crossing,
        reached=True,
        stepped=0,
        settings={"up.width": 1e-4},
    )


def one_round(number: int = 1) -> Round:
    down = Pulse(name="down", level=-5.0, width=2e-3, base=0.0, edge=1e-7, rest=1e-3)
    return Round(number=number, settings={"up.width": 1e-4}, actions=(Preset(pulse=down),))


def found(kind: FindingKind, values: dict[str, float | str | None]) -> Found:
    return Found(round=3, kind=kind, pulse="up", settings={}, values=values)


def drawn(progress: Progress) -> str:
    screen = io.StringIO()
    Console(file=screen, width=100, height=30).print(draw(progress, 30))
    return screen.getvalue()


def test_progress_counts_and_estimates() -> None:
    seconds = iter(range(0, 1000, 10))
    progress = Progress(rounds=4, seconds=100.0, swept=("up.width",), clock=lambda: next(seconds))
    progress.take(RoundBegan(round=one_round(), attempt=1))
    assert progress.setting == "up.width = 100 us"
    # Before a round is done the plan's estimate counts: 100 s less the 10 s that went by.
    assert progress.seconds_left == 90.0
    for event in [*read_pulse(1, 2.0), *read_pulse(2, 2.6)]:
        progress.take(event)
    assert progress.ends == [2.0, 2.6]
    (line,) = progress.take(finished(1, 1.83))
    assert line == "round 1 of 4 (up.width = 100 us): full after 2 pulses, crossing 1.83"
    progress.take(RoundFinished(round=1))
    # One round took 20 s; three are left.
    assert progress.seconds_left == 60.0
    assert progress.statistics is not None
    assert progress.statistics.rounds == 1


def test_a_spoiled_round_does_not_count() -> None:
    progress = Progress(rounds=2, seconds=None)
    for event in (
        RoundBegan(round=one_round(), attempt=1),
        finished(1, 5.0),
        RoundSpoiled(round=1, reason="a pulse was lost"),
        RoundBegan(round=one_round(), attempt=2),
        finished(1, 8.0),
        RoundFinished(round=1),
    ):
        progress.take(event)
    assert progress.crossings == [8.0]


@pytest.mark.parametrize("height", [10, 24, 60])
@pytest.mark.parametrize("width", [40, 80, 200])
def test_the_drawing_fits_the_terminal(width: int, height: int) -> None:
    progress = Progress(rounds=20, seconds=100.0)
    events: list[Event] = [RoundBegan(round=one_round(), attempt=2)]
    for order in range(1, 40):
        events += read_pulse(order, order / 14)
    for number in range(1, 9):
        events += [finished(number, 8.0 + number / 10), RoundFinished(round=number)]
    events += read_pulse(1, 1.0)
    for event in events:
        progress.take(event)
    screen = io.StringIO()
    console = Console(file=screen, width=width, height=height, force_terminal=True)
    console.print(draw(progress, height))
    lines = screen.getvalue().splitlines()
    assert len(lines) <= height
    assert "full count" in screen.getvalue()
    # In a low window the answer matters more than pictures.
    assert ("threshold" in screen.getvalue()) == (height >= 24)


def shown_lines(events: list[Event]) -> list[str]:
    progress = Progress(rounds=9, seconds=None)
    return [line for event in events for line in progress.take(event)]


PUND: dict[str, float | str | None] = {"switched_coulombs": 5e-9, "switched_polarization": 0.5}
LOOP: dict[str, float | str | None] = {
    "remanent_polarization": 0.25,
    "coercive_up_volts": 2.04,
    "coercive_down_volts": -2.05,
}
TUNED: dict[str, float | str | None] = {
    "setting": "up.width",
    "value": 1e-4,
    "status": "found",
    "count": 10.02,
}


# What each event is worth, in words; a row for each kind of finding.
@pytest.mark.parametrize(
    ("event", "line"),
    [
        (found(FindingKind.PUND, PUND), "round 3: switched charge 5 nC, 50 uC/cm2"),
        (
            found(FindingKind.LOOP, LOOP),
            "round 3: remanent polarization 25 uC/cm2, coercive 2.04 V and -2.05 V",
        ),
        (
            found(FindingKind.LOOP, {"problem": "the loop has no opening"}),
            "round 3: loop can't be told: the loop has no opening",
        ),
        (
            found(FindingKind.CYCLING, {"pairs": 1e6, "ended": "all pairs were sent"}),
            "round 3: 1,000,000 pairs: all pairs were sent",
        ),
        (found(FindingKind.TUNE, TUNED), "round 3: up.width = 100 us (found), full count 10.02"),
        (
            found(FindingKind.TUNE, TUNED | {"value": None, "status": "not bracketed"}),
            "round 3: up.width was not found: not bracketed",
        ),
        (
            CyclingBegan(round=3, pairs=90_000, done=10_000, seconds=360.0),
            "round 3: cycling 90,000 pairs after 10,000, which takes 6 min 00 s",
        ),
        (RoundsSkipped(count=4, reason="it was found before"), "4 rounds are not needed"),
        (
            PersonAsked(round=3, message="Change the cell.", seconds=3600.0),
            "round 3: the output is off. Change the cell. Then press Enter; there are 1 h 00 min.",
        ),
        (PersonAnswered(round=3, answered=False), "round 3: no answer"),
    ],
)
def test_each_event_is_worth_a_line_that_makes_sense(event: Event, line: str) -> None:
    (shown,) = shown_lines([event])
    assert shown.startswith(line)


def test_rounds_that_are_not_needed_are_not_waited_for() -> None:
    progress = Progress(rounds=9, seconds=None)
    progress.take(RoundsSkipped(count=4, reason="the value was found before"))
    assert progress.rounds == 5
    progress.take(PairsSent(round=1, done=1000, planned=100_000))
    assert progress.doing == "cycling: 1,000 of 100,000 pairs sent"


@pytest.mark.parametrize(
    "after",
    [
        PersonAnswered(round=1, answered=True),
        RoundSpoiled(round=1, reason="Ctrl-C"),
        RunEnded(state=RunState.STOPPED, reason="Ctrl-C", outputs_off=True),
    ],
)
def test_the_view_asks_a_person_only_while_somebody_waits(after: Event) -> None:
    progress = Progress(rounds=2, seconds=None)
    hostile = "Change\x1b[2J the cell."
    for event in (
        RoundBegan(round=one_round(), attempt=1),
        PersonAsked(round=1, message=hostile, seconds=60.0),
    ):
        progress.take(event)
    assert "a person is needed" in drawn(progress)
    assert "The output is off. Change\ufffd[2J the cell. Then press Enter." in drawn(progress)
    progress.take(after)
    assert "a person is needed" not in drawn(progress)


HOSTILE = "A\x1b[2Jb\x07[red]c[/red]\u202ed\r\n<script>"


def test_what_comes_from_outside_is_never_printed_raw() -> None:
    events: list[Event] = [
        RunBegan(rounds=1, most_pulses=1, seconds=1.0, identities={"oscilloscope": HOSTILE}),
        RoundBegan(round=one_round(), attempt=1),
        WaitBegan(round=1, seconds=3600.0),
        RoundSpoiled(round=1, reason=HOSTILE),
        StopAsked(at_once=False),
        RunEnded(state=RunState.FAILED, reason=HOSTILE, outputs_off=True),
    ]
    screen = io.StringIO()
    progress = Progress(rounds=1, seconds=1.0)
    follow(iter(events), progress, Console(file=screen, width=200, force_terminal=False))
    shown = screen.getvalue()
    assert "\x1b" not in shown
    assert "\x07" not in shown
    assert "\u202e" not in shown
    # Markup is text and not markup.
    assert "[red]c[/red]" in shown
    assert "waiting for 1 h 00 min" in shown
    assert "press Ctrl-C again" in shown


@given(st.text(max_size=600))
def test_printable_text_has_no_control_characters(text: str) -> None:
    shown = printable(text)
    assert all(each.isprintable() for each in shown)
    assert len(shown) <= 500
