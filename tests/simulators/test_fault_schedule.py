"""Which fault happens at which exchange, without any line."""

import math
from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.faults import INSTRUMENTS, KINDS, Fault, FaultSchedule
from pulsetally.simulators.settings import SimulationSettings

VALUES: dict[str, Any] = {
    "seconds": 2.0,
    "share": 0.25,
    "followed": False,
    "number": -222,
    "message": "?",
    "ohms": 3,
}
OCCASIONS = ("kind", "instrument", "exchange", "chance", "at_seconds")


def fault(kind: str = "no answer", *, exchange: int = 1, **more: Any) -> Fault:
    return Fault(kind=kind, instrument="generator", exchange=exchange, **more)


def run(schedule: FaultSchedule, exchanges: int, kind: str = "no answer") -> list[int]:
    """Return at which of the generator's next exchanges the fault happens."""
    happened = []
    for _ in range(exchanges):
        schedule.begin_exchange("generator")
        if schedule.take("generator", (kind,)) is not None:
            happened.append(schedule.exchanges("generator"))
    return happened


def test_the_test_knows_every_value_of_a_fault() -> None:
    assert {field.name for field in fields(Fault)} == {*OCCASIONS, *VALUES}


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", VALUES)
def test_a_kind_takes_its_own_values_and_no_others(kind: str, name: str) -> None:
    if name in KINDS[kind].takes:
        assert getattr(fault(kind, **{name: VALUES[name]}), name) == VALUES[name]
    else:
        with pytest.raises(ValueError, match=f"{kind}.*has no use for a value of {name}; it takes"):
            fault(kind, **{name: VALUES[name]})


@pytest.mark.parametrize("kind", KINDS)
def test_only_a_fault_of_the_cell_has_an_instant(kind: str) -> None:
    if KINDS[kind].breaks_cell:
        assert Fault(kind=kind, at_seconds=3.0).at_seconds == 3.0
    else:
        with pytest.raises(ValueError, match="only a fault of the cell may, give an exchange"):
            Fault(kind=kind, at_seconds=3.0)


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"kind": "smoke"}, "kind is 'smoke'; it must be one of no answer, late answer"),
        ({"instrument": "meter"}, "instrument 'meter'; it must be one of generator, oscilloscope"),
        ({"instrument": None}, "instrument None; it must be one of"),
        ({"exchange": 0}, "exchange 0; they are counted from 1"),
        ({"exchange": None}, "has none of exchange, chance and at_seconds; give exactly one"),
        ({"chance": 0.5}, "has exchange and chance of exchange, chance and at_seconds"),
        ({"exchange": None, "chance": 0.0}, "chance 0.0; it must be above 0, and 1 at most"),
        ({"exchange": None, "chance": math.nan}, "chance nan"),
        ({"kind": "late answer", "seconds": 0.0}, "seconds 0.0; it must be above 0"),
        ({"kind": "power lost", "seconds": math.inf}, "seconds inf"),
        ({"kind": "cut block", "share": 1.0}, "share 1.0; it must be from 0 to below 1"),
        ({"kind": "error entry", "number": 0}, "number 0; it must be from -32768 to 32767"),
        ({"kind": "error entry", "number": 40_000}, "number 40000"),
        ({"kind": "garbage", "message": "\u20ac"}, "write characters up to"),
        ({"kind": "cell shorts", "ohms": 0.0}, "ohms 0.0; it must be from 0.001 to"),
        (
            {"kind": "cell opens", "exchange": None, "at_seconds": 1.0},
            "at_seconds and an instrument; leave the instrument out",
        ),
        (
            {"kind": "cell opens", "exchange": None, "instrument": None, "at_seconds": -1.0},
            "at_seconds -1.0; it must be 0 or more",
        ),
    ],
)
def test_what_cannot_be_is_refused(wrong: dict[str, Any], message: str) -> None:
    right: dict[str, Any] = {"kind": "no answer", "instrument": "generator", "exchange": 1}
    with pytest.raises(ValueError, match=message):
        Fault(**(right | wrong))


def test_a_fault_happens_once_at_its_exchange() -> None:
    assert run(FaultSchedule([fault(exchange=4)]), 10) == [4]


def test_each_instrument_has_exchanges_of_its_own() -> None:
    schedule = FaultSchedule([replace(fault(exchange=2), instrument="oscilloscope")])
    assert run(schedule, 5) == []
    for expected in (False, True, False):
        schedule.begin_exchange("oscilloscope")
        assert (schedule.take("oscilloscope", ("no answer",)) is not None) is expected
    assert [schedule.exchanges(name) for name in INSTRUMENTS] == [5, 3]


def test_a_due_fault_waits_for_what_it_spoils() -> None:
    schedule = FaultSchedule([fault("trigger ignored", exchange=2)])
    for _ in range(3):
        schedule.begin_exchange("generator")
        assert schedule.take("generator", ("no answer",)) is None
    assert (schedule.pending, schedule.happened) == (1, [])
    assert schedule.take("generator", ("trigger ignored",)) is not None
    assert schedule.take("generator", ("trigger ignored",)) is None
    assert [(found.kind, exchange) for found, exchange in schedule.happened] == [
        ("trigger ignored", 3)
    ]
    assert schedule.pending == 0


def test_of_two_that_are_due_the_first_added_happens_first() -> None:
    schedule = FaultSchedule([fault("garbage"), fault("closed connection")])
    kinds = ("closed connection", "garbage")
    found = []
    for _ in range(3):
        schedule.begin_exchange("generator")
        taken = schedule.take("generator", kinds)
        found.append(None if taken is None else taken.kind)
    assert found == ["garbage", "closed connection", None]


def test_from_now_counts_from_the_next_exchange() -> None:
    schedule = FaultSchedule()
    run(schedule, 7)
    schedule.add_from_now(fault(exchange=3))
    assert run(schedule, 5) == [10]
    with pytest.raises(ValueError, match="only the exchange of an instrument"):
        schedule.add_from_now(Fault(kind="cell opens", at_seconds=0.0))


def test_what_is_cleared_never_happens() -> None:
    timed = Fault(kind="cell opens", at_seconds=0.0)
    schedule = FaultSchedule([fault(exchange=1), fault(exchange=3), timed])
    assert run(schedule, 2) == [1]
    schedule.clear()
    assert run(schedule, 5) == []
    assert not schedule.take_timed(timed)
    assert len(schedule.happened) == 1


def test_an_instant_happens_once() -> None:
    timed = Fault(kind="cell shorts", at_seconds=5.0)
    schedule = FaultSchedule([timed])
    assert schedule.take_timed(timed)
    assert not schedule.take_timed(timed)
    assert schedule.happened == [(timed, None)]


RANDOM = Fault(kind="no answer", instrument="generator", chance=0.1)


@given(seed=st.integers(0, 2**32))
def test_one_seed_gives_one_course(seed: int) -> None:
    first, second = (run(FaultSchedule([RANDOM], seed=seed), 200) for _ in range(2))
    assert first == second


def test_another_seed_gives_another_course() -> None:
    courses = [run(FaultSchedule([RANDOM], seed=seed), 200) for seed in range(5)]
    assert len({tuple(course) for course in courses}) == 5


def test_one_more_fault_changes_nothing_about_the_others() -> None:
    alone = run(FaultSchedule([RANDOM], seed=3), 300)
    garbage = replace(RANDOM, kind="garbage")
    schedule = FaultSchedule([RANDOM, garbage, fault("garbage", exchange=7)], seed=3)
    assert run(schedule, 300) == alone
    # Two with the same chance fall on different exchanges.
    assert run(FaultSchedule([fault("garbage"), garbage], seed=3), 300, "garbage")[1:] != alone


# The bench draws domains, lifetimes and jitters from these (cell.py, ageing.py,
# generator_model.py, digitizer.py).
@pytest.mark.parametrize("other", [(7,), (7, 1), (7, 2), (7, 3)])
def test_no_fault_draws_what_another_part_of_the_bench_draws(other: tuple[int, ...]) -> None:
    drawn = np.random.default_rng(other if len(other) > 1 else other[0]).random(200)
    expected = [exchange for exchange, share in enumerate(drawn, 1) if share < 0.1]
    for ahead in range(3):
        # Each fault draws by itself, wherever it stands in the list.
        faults = [*[fault("garbage")] * ahead, RANDOM]
        assert run(FaultSchedule(faults, seed=7), 200) != expected


# A: the number of happenings is binomial. 3000 draws of 0.1: 300 with a standard deviation of
# sqrt(3000 * 0.1 * 0.9) = 16.4; five of them are allowed.
def test_a_chance_is_as_large_as_it_says() -> None:
    assert len(run(FaultSchedule([RANDOM], seed=11), 3000)) == pytest.approx(300, abs=82)
    certain = replace(RANDOM, chance=1.0)
    assert run(FaultSchedule([certain]), 5) == [1, 2, 3, 4, 5]


def test_draws_do_not_depend_on_what_was_there_to_be_spoiled() -> None:
    taking, waiting = (FaultSchedule([RANDOM], seed=5) for _ in range(2))
    for _ in range(100):
        waiting.begin_exchange("generator")
    run(taking, 100)
    waiting.take("generator", ("no answer",))
    assert run(taking, 200) == run(waiting, 200)


def test_settings_hold_faults() -> None:
    faults = (fault(), RANDOM)
    assert SimulationSettings(faults=faults).faults == faults
