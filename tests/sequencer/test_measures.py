"""Switched charge, loops and tunes on a simulated bench, and what a person is asked."""

import json
import sqlite3
from collections.abc import Iterator
from pathlib import Path

import pytest
import sqlalchemy as sa

from pulsetally.sequencer import logbook as tables
from pulsetally.sequencer.errors import LogbookError
from pulsetally.sequencer.events import (
    FindingKind,
    Found,
    PersonAnswered,
    PersonAsked,
    PulseArmed,
    ReadFinished,
    Role,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RoundsSkipped,
    RunState,
)
from pulsetally.sequencer.logbook import LOGBOOK_VERSION, Logbook
from pulsetally.sequencer.person import AlwaysReady, Nobody
from pulsetally.sequencer.results import list_runs, run_result
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.simulate import SimulationSettings
from tests.sequencer.running import begin, end_of, of_kind
from tests.simulated import Simulated, simulated


@pytest.fixture(scope="module")
def table() -> Iterator[Simulated]:
    with simulated() as running:
        yield running


@pytest.fixture
def logbook(tmp_path: Path) -> Iterator[Logbook]:
    book = Logbook(tmp_path / "logbook.db")
    yield book
    book.close()


MEASURE = "  - pund: long\n  - {loop: 5 V, period: 20 ms}\n"


def test_charge_and_loop_are_those_of_the_cell(table: Simulated, logbook: Logbook) -> None:
    events = list(begin(table, logbook, MEASURE))
    assert end_of(events).state is RunState.FINISHED
    pund, loop = of_kind(events, Found)
    assert (pund.kind, loop.kind) == (FindingKind.PUND, FindingKind.LOOP)
    cell = CellDescription()
    # Both bring it all the way: from -Pr to +Pr and back (definition).
    switched = pund.values["switched_polarization"]
    remanent = loop.values["remanent_polarization"]
    assert switched == pytest.approx(2 * cell.remanent_polarization, rel=0.01)
    assert remanent == pytest.approx(cell.remanent_polarization, rel=0.01)
    # The cell's law knows no sign, so its loop lies in the middle.
    imprint, sure = loop.values["imprint_volts"], loop.values["volts_uncertainty"]
    assert isinstance(imprint, float)
    assert isinstance(sure, float)
    assert abs(imprint) < 5 * sure
    roles = [(each.order, each.role) for each in of_kind(events, PulseArmed)]
    assert roles == [
        (1, Role.PRESET),
        *((order, Role.PUND) for order in range(2, 6)),
        # A round of its own.
        *((order, Role.LOOP) for order in (1, 2)),
    ]
    rounds = run_result(logbook, 1).rounds
    assert [(one.kind, one.values) for each in rounds for one in each.findings] == [
        ("pund", pund.values),
        ("loop", loop.values),
    ]


@pytest.mark.parametrize(
    "settings",
    [
        SimulationSettings(cell=CellDescription(remanent_polarization=1e-12)),
        SimulationSettings(socket="open"),
        SimulationSettings(socket="shorted"),
    ],
    ids=["linear", "open", "shorted"],
)
def test_a_dead_cell_is_a_finding_and_the_run_goes_on(
    logbook: Logbook, settings: SimulationSettings
) -> None:
    with simulated(settings) as dead:
        events = list(begin(dead, logbook, MEASURE + "  - preset: down\n"))
    assert end_of(events).state is RunState.FINISHED
    assert [each.round for each in of_kind(events, RoundFinished)] == [1, 2, 3]
    pund, loop = of_kind(events, Found)
    assert loop.values.keys() == {"problem"}
    if settings.socket == "shorted":
        assert pund.values.keys() == {"problem"}
    else:
        charge, sure = pund.values["switched_coulombs"], pund.values["uncertainty_coulombs"]
        assert isinstance(charge, float)
        assert isinstance(sure, float)
        assert abs(charge) < 3 * sure
    kept = logbook.select(sa.select(tables.findings.c.found).order_by(tables.findings.c.id))
    assert [json.loads(row[0]) for row in kept] == [pund.values, loop.values]


def test_no_share_is_told_of_a_charge_that_is_only_noise(logbook: Logbook) -> None:
    linear = SimulationSettings(cell=CellDescription(remanent_polarization=1e-12))
    recipe = (
        "  - cycle: {down: down, up: long}\n    pairs: 8\n    pause at: [2, 4, 6]\n"
        "    stop when: {switched charge below: 100 %}\n    steps:\n      - pund: long\n"
    )
    with simulated(linear) as dead:
        events = list(begin(dead, logbook, recipe))
    assert of_kind(events, RoundsSkipped) == []
    assert of_kind(events, Found)[-1].values["pairs"] == 8.0


TUNE = """  - tune: up.width
    between: [80 us, 200 us]
    full count: 6
    within: 1
    at most: 9
    steps:
      - preset: down
      - {read: up, until: 2.5 V, at most: 30}
"""


def test_a_tune_finds_the_width_and_counts_a_spoiled_round_once(
    table: Simulated, logbook: Logbook
) -> None:
    events = []
    spoilt = False
    for event in begin(table, logbook, TUNE):
        events.append(event)
        if isinstance(event, PulseArmed) and (event.round, event.order) == (3, 3) and not spoilt:
            spoilt = True
            with table.client(table.addresses.oscilloscope) as client:
                client.ask(":TRIGger:LEVel 7.9;:TRIGger:LEVel?")
    assert end_of(events).state is RunState.FINISHED
    assert len(of_kind(events, RoundSpoiled)) == 1
    (found,) = of_kind(events, Found)
    assert (found.kind, found.values["status"]) == (FindingKind.TUNE, "found")
    done = len(of_kind(events, RoundFinished))
    assert found.values["rounds"] == done
    (skipped,) = of_kind(events, RoundsSkipped)
    assert skipped.count == 9 - done > 0
    # The spoiled round is repeated at the same value.
    third_rounds = [each.round for each in of_kind(events, RoundBegan) if each.round.number == 3]
    assert len(third_rounds) == 2
    assert third_rounds[0].settings == third_rounds[1].settings
    # By reading at the value found: 6 pulses, give or take what was asked (a pulse) and the
    # scatter of one round.
    value = found.values["value"]
    steps = f"  - sweep: {{up.width: [{value:.6g} s]}}\n    steps:\n      - preset: down\n"
    steps += "      - {read: up, until: 2.5 V, at most: 30}\n"
    (count,) = of_kind(list(begin(table, logbook, steps)), ReadFinished)
    assert count.crossing == pytest.approx(6.0, abs=1.5)


# A person.

ASK = "  - preset: down\n  - {ask: Change the cell., within: 90 s%s}\n  - preset: down\n"


def test_the_output_is_off_while_a_person_is_asked(table: Simulated, logbook: Logbook) -> None:
    events = []
    for event in begin(table, logbook, ASK % "", person=AlwaysReady()):
        events.append(event)
        if isinstance(event, PersonAsked):
            # By the simulated bench's own word, and as a client reads it back.
            assert table.truth("OUTPut") == 0
            with table.client(table.addresses.generator) as client:
                assert client.ask(":OUTPut1:STATe?") == "0"
        if isinstance(event, PulseArmed):
            assert table.truth("OUTPut") == 1
    assert end_of(events).state is RunState.FINISHED
    assert [each.message for each in of_kind(events, PersonAsked)] == ["Change the cell."]
    assert [each.answered for each in of_kind(events, PersonAnswered)] == [True]
    (kept,) = logbook.select(
        sa.select(tables.asked.c.message, tables.answers.c.answered).join(
            tables.answers, tables.answers.c.asked == tables.asked.c.id
        )
    )
    assert tuple(kept) == ("Change the cell.", True)


@pytest.mark.parametrize("otherwise", ["stop", "go on"])
def test_nobody_is_waited_for_in_the_benchs_time(
    table: Simulated, logbook: Logbook, otherwise: str
) -> None:
    events = []
    steps = ASK % f", otherwise: {otherwise}"
    with table.client(table.addresses.control) as client:
        for event in begin(table, logbook, steps, person=Nobody()):
            events.append(event)
            if isinstance(event, PersonAsked):
                asked = float(client.ask(":CLOCk:TIME?"))
            if isinstance(event, PersonAnswered):
                assert 90 <= float(client.ask(":CLOCk:TIME?")) - asked < 92
                assert table.truth("OUTPut") == 0
    assert [each.answered for each in of_kind(events, PersonAnswered)] == [False]
    presets = sum(each.role is Role.PRESET for each in of_kind(events, PulseArmed))
    ended = end_of(events)
    if otherwise == "stop":
        assert (ended.state, ended.reason) == (
            RunState.STOPPED,
            "nobody answered: Change the cell.",
        )
        assert presets == 1
    else:
        assert (ended.state, presets) == (RunState.FINISHED, 2)
    assert table.truth("OUTPut") == 0


def test_a_stop_asked_instead_of_an_answer_ends_the_run(table: Simulated, logbook: Logbook) -> None:
    stop = StopSwitch()
    events = []
    for event in begin(table, logbook, ASK % "", stop=stop, person=Nobody()):
        events.append(event)
        if isinstance(event, PersonAsked):
            stop.press("Ctrl-C")
    assert (end_of(events).state, end_of(events).reason) == (RunState.STOPPED, "Ctrl-C")
    assert of_kind(events, PersonAnswered) == []
    assert table.truth("OUTPut") == 0


# Logbooks from before.

NEW_TABLES = ("answers", "asked", "train_ends", "trains", "findings", "skipped_rounds")


def old_logbook(path: Path, table: Simulated) -> None:
    """Make a logbook as version 1 left it: one run in it, and none of the later tables."""
    book = Logbook(path)
    list(begin(table, book, "  - preset: down\n"))
    book.close()
    with sqlite3.connect(path) as connection:
        for name in NEW_TABLES:
            connection.execute(f"DROP TABLE {name}")
        connection.execute("UPDATE about SET version = 1")
    connection.close()


def test_an_older_logbook_gets_its_tables_when_it_is_written(
    table: Simulated, tmp_path: Path
) -> None:
    path = tmp_path / "old.db"
    old_logbook(path, table)
    before = path.read_bytes()
    with pytest.raises(LogbookError, match=r"older version of the program .* record any run"):
        Logbook(path, create=False)
    # Whoever only looks changes nothing.
    assert path.read_bytes() == before

    book = Logbook(path)
    list(begin(table, book, MEASURE))
    book.close()
    shown = Logbook(path, create=False)
    assert [(each.run, each.state, each.shots) for each in list_runs(shown)] == [
        (1, "finished", 1),
        (2, "finished", 7),
    ]
    found = [one.kind for each in run_result(shown, 2).rounds for one in each.findings]
    assert found == ["pund", "loop"]
    versions = shown.select(sa.select(tables.about.c.version).order_by(tables.about.c.version))
    assert [row[0] for row in versions] == [1, LOGBOOK_VERSION]
    shown.close()
