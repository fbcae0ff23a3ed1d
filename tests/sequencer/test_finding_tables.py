"""What was measured beside a full count, as people see it."""

import io
from typing import Any

import pytest
from rich.console import Console

from pulsetally.sequencer.finding_tables import with_uncertainty
from pulsetally.sequencer.results import (
    Finding,
    LeftOut,
    ReadResult,
    RoundResult,
    RunResult,
    RunSummary,
)
from pulsetally.sequencer.summary import show_result

SUMMARY = RunSummary(
    run=7,
    title="of a test",
    mode="rehearsal",
    state="finished",
    reason="",
    outputs_off=True,
    began_at="2026-01-01T00:00:00",
    ended_at=None,
    rounds=1,
    planned_rounds=1,
    shots=5,
)
PUND: dict[str, Any] = {
    "switched_coulombs": 4.9939e-9,
    "uncertainty_coulombs": 5.2e-12,
    "asymmetry_coulombs": -7e-12,
    "switched_polarization": 0.49939,
}


def shown(*rounds: RoundResult, swept: tuple[str, ...] = ()) -> str:
    result = RunResult(
        summary=SUMMARY,
        identities={},
        swept=swept,
        rounds=rounds,
        full_count=None,
        left_out=LeftOut(not_reached=0, first_pulse=0),
        by_setting=(),
    )
    told = io.StringIO()
    show_result(Console(file=told, width=80), result, rounds=False)
    return told.getvalue()


def one_round(**changes: Any) -> RoundResult:
    made: dict[str, Any] = {
        "round": 1,
        "attempt": 1,
        "settings": {},
        "complete": True,
        "spoiled": False,
        "reason": "",
        "preset": True,
        "stepped": 0,
        "reads": (),
    }
    return RoundResult(**(made | changes))


def found(kind: str, values: dict[str, Any], **settings: float) -> RoundResult:
    return one_round(
        findings=(Finding(kind=kind, pulse="test", settings=settings, values=values),),
    )


def read(**changes: Any) -> ReadResult:
    made: dict[str, Any] = {
        "pulse": "up",
        "threshold": 2.5,
        "count": 4,
        "crossing": 3.78,
        "reached": True,
        "stepped": 5,
        "first": True,
        "settings": {},
        "end_voltages": (1.0, 2.0, 2.4, 2.6),
    }
    return ReadResult(**(made | changes))


# JCGM 100:2008, 7.2.6 (from memory): an uncertainty has two digits at most, and the value ends
# where it does.
@pytest.mark.parametrize(
    ("value", "uncertainty", "words"),
    [
        (4.99391, 0.00523, "4.9939 ± 0.0052"),
        (25.1264, 0.42, "25.13 ± 0.42"),
        (25.1264, 17.3, "25 ± 17"),
        (25.1264, None, "25.13"),
        (25.1264, 0.0, "25.13"),
    ],
)
def test_a_value_ends_where_its_uncertainty_does(
    value: float, uncertainty: float | None, words: str
) -> None:
    assert with_uncertainty(value, uncertainty) == words


def test_switched_charge_stands_against_cycles_with_unit_and_uncertainty() -> None:
    half = PUND | {"switched_coulombs": PUND["switched_coulombs"] / 2}
    told = shown(
        found("pund", PUND, cycles=0.0), found("pund", half, cycles=100_000.0), swept=("cycles",)
    )
    assert "nC" in told
    assert "4.9939 ± 0.0052" in told
    assert "100,000" in told
    assert "50.0%" in told
    # It was not asked to count.
    assert "full count" not in told.lower()


def test_what_could_not_be_told_says_why_and_the_rest_stands() -> None:
    told = shown(found("pund", {"problem": "the record ends [bold]early"}), found("pund", PUND))
    assert "4.9939" in told
    assert "can't be told" in told
    assert "bold" in told


def test_spoiled_rounds_show_no_charge() -> None:
    spoiled = one_round(
        spoiled=True, findings=(Finding(kind="pund", pulse="", settings={}, values=PUND),)
    )
    assert "4.9939" not in shown(spoiled)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (
            {"status": "found", "value": 8.8e-5, "uncertainty": 5.5e-7, "count": 12.0},
            "Tuned up.width to a full count of 12: 88 us ± 550 ns, found in 5 rounds; the full"
            " count there is about 12.00.",
        ),
        (
            {"status": "not bracketed", "value": None, "uncertainty": None, "count": None},
            "no value was found in 5 rounds; the wanted count does not lie between the two ends",
        ),
        (
            {"status": "at most reached", "value": 8.8e-5, "uncertainty": 5e-6, "count": 11.0},
            "Not sure: the rounds were used up",
        ),
    ],
)
def test_a_tune_is_told_in_a_sentence(values: dict[str, Any], words: str) -> None:
    asked = {"setting": "up.width", "wanted_count": 12.0, "rounds": 5.0}
    assert words in " ".join(shown(found("tune", asked | values)).split())


def test_a_cycling_says_why_it_ended() -> None:
    values = {
        "pairs": 1e5,
        "planned_pairs": 1e6,
        "ended": "the switched charge is 37% of the first",
    }
    told = " ".join(shown(found("cycling", values)).split())
    assert (
        "Cycling ended after 100,000 of 1,000,000 pairs: the switched charge is 37% of the first."
        in told
    )


def test_what_remains_after_steps_has_a_table_and_a_readback_a_sentence() -> None:
    told = shown(one_round(stepped=5, reads=(read(), read(first=False, crossing=9.9))))
    assert "Remaining after what was stepped" in told
    assert "3.78" in told
    assert "9.9" not in told
    back = shown(one_round(preset=False, reads=(read(stepped=0),)))
    assert "Round 1, read without a preset: 4 pulses remained, crossing 3.78." in back
    assert "full count" not in back.lower()
