"""Cyclings and tunes: what they decide when they are told what rounds found. No instrument."""

from collections.abc import Callable

import pytest

from pulsetally.sequencer.analysis.counting import ReadCount
from pulsetally.sequencer.events import FindingKind, Found
from pulsetally.sequencer.groups import CyclingGroup, Group, TuneGroup, group_of
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.rehearsal import shipped_bench
from pulsetally.sequencer.rounds import Cycle, Pund, Read, Round

PULSES = """recipe: r
pulses:
  down: {level: -5 V, width: 2 ms}
  up: {level: 4 V, width: 2 ms}
  weak: {level: 3 V, width: 2 ms}
steps:
"""
CYCLE = """  - cycle: {down: down, up: up}
    pairs: 1000
    pause at: [10, 100]
    stop when: {switched charge below: 50 %, full count off by: 30 %, contact is lost: yes}
    steps:
      - contact: weak
      - pund: up
      - pund: weak
      - preset: down
      - {read: up, until: 2.5 V, at most: 60}
"""
TUNE = """  - tune: up.width
    between: [40 us, 400 us]
    full count: 10
    at most: 8
    steps:
      - preset: down
      - {read: up, until: 2.5 V, at most: 60}
"""


def planned(steps: str) -> Plan:
    return make_plan(parse_recipe(PULSES + steps, file="r.yaml"), shipped_bench())


def counted(crossing: float | None) -> ReadCount:
    reached = crossing is not None
    return ReadCount(count=60 if crossing is None else 9, crossing=crossing, reached=reached)


def begun(plan: Plan) -> Group:
    group = group_of(plan.rounds[0])
    assert group is not None
    return group


def done(group: Group, plan: Plan, tell: Callable[[Group, Round], None]) -> list[int]:
    """Take a group through all rounds of a plan; return the numbers of those it wanted."""
    wanted = []
    for each in plan.rounds:
        assert group.holds(each)
        chosen = group.next_round(each)
        if chosen is not None:
            wanted.append(chosen.number)
            tell(group, chosen)
    return wanted


def told_charges(charges: dict[str, list[float | None]]) -> Callable[[Group, Round], None]:
    """Tell, for each pulse, one charge after the other; and how many pairs went out."""
    left = {name: iter(values) for name, values in charges.items()}

    def tell(group: Group, each: Round) -> None:
        for action in each.actions:
            if isinstance(action, Pund):
                group.switched(action, next(left[action.pulse.name]))
            if isinstance(action, Cycle):
                group.cycled(*[action.done + action.pairs] * 2)

    return tell


def finding(group: Group) -> Found:
    (found,) = group.findings()
    assert isinstance(found, Found)
    return found


def test_a_cycling_goes_to_its_last_pair_while_the_cell_holds() -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    same: list[float | None] = [2.0] * 4
    wanted = done(group, plan, told_charges({"up": same, "weak": same}))
    assert wanted == [each.number for each in plan.rounds]
    found = finding(group)
    assert found.kind is FindingKind.CYCLING
    assert found.values["pairs"] == found.values["planned_pairs"] == 1000
    assert found.values["ended"] == "all pairs were sent"


def test_the_rest_of_a_pause_is_done_though_the_charge_has_gone() -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    wanted = done(group, plan, told_charges({"up": [2.0, 0.9], "weak": [1.0, 1.0]}))
    # Pulses before the first pair, 10 pairs, and the whole pause after them.
    last = max(wanted)
    assert plan.rounds[last - 1].settings["cycles"] == 10
    assert not any(isinstance(each, Cycle) for each in plan.rounds[last - 1].actions)
    assert isinstance(plan.rounds[last].actions[0], Cycle)
    assert wanted == list(range(1, last + 1))
    assert finding(group).values["pairs"] == 10
    assert "45% of the first" in str(finding(group).values["ended"])


def test_charges_of_different_pulses_are_not_compared_with_each_other() -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    # The weak pulse switches a third of what the other does, from the beginning.
    charges: dict[str, list[float | None]] = {"up": [3.0] * 4, "weak": [1.0] * 4}
    assert len(done(group, plan, told_charges(charges))) == len(plan.rounds)


def test_a_charge_that_can_not_be_told_any_more_ends_it() -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    done(group, plan, told_charges({"up": [2.0, None], "weak": [1.0, 1.0]}))
    assert group.reason == "the switched charge can't be told any more"


def test_a_first_charge_that_is_none_is_not_what_others_are_compared_with() -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    done(group, plan, told_charges({"up": [None, 0.0, 2.0, 1.9], "weak": [1.0] * 4}))
    assert group.reason == ""


@pytest.mark.parametrize(
    ("counts", "reason"),
    [
        ([10.0, 12.9], ""),
        ([10.0, 13.1], "the full count is 13.10 and was 10.00 at first"),
        ([10.0, 6.9], "the full count is 6.90 and was 10.00 at first"),
        ([10.0, None], "the cell no longer gives a full count"),
        ([None, 10.0, 11.0], ""),
    ],
)
def test_a_full_count_too_far_from_the_first_ends_it(
    counts: list[float | None], reason: str
) -> None:
    plan = planned(CYCLE)
    group = begun(plan)
    planned_actions = (each for one in plan.rounds for each in one.actions)
    read = next(each for each in planned_actions if isinstance(each, Read))
    for crossing in counts:
        group.counted(read, counted(crossing))
    assert group.reason == reason


def test_counts_at_different_settings_are_not_compared_with_each_other() -> None:
    text = CYCLE[: CYCLE.index("      - contact")].replace("switched charge below: 50 %, ", "")
    text = text.replace(", contact is lost: yes", "")
    text += (
        "      - sweep: {up.level: [3.5 V, 4 V]}\n        steps:\n          - preset: down\n"
        "          - {read: up, until: 2.5 V, at most: 60}\n"
    )
    plan = planned(text)
    group = begun(plan)
    assert isinstance(group, CyclingGroup)

    def tell(group: Group, each: Round) -> None:
        for action in each.actions:
            if isinstance(action, Read):
                # What a lower amplitude gives from the beginning.
                group.counted(action, counted(20.0 if action.pulse.level < 4 else 9.0))

    assert len(done(group, plan, tell)) == len(plan.rounds)
    assert group.reason == ""


@pytest.mark.parametrize("asked", [True, False])
def test_a_lost_cell_ends_a_cycling_only_where_the_recipe_says_so(asked: bool) -> None:
    plan = planned(CYCLE if asked else CYCLE.replace(", contact is lost: yes", ""))
    group = begun(plan)
    assert group.next_round(plan.rounds[0]) is not None
    assert group.ends_at_lost_contact("the cell looks open") is asked
    goes_on = group.next_round(plan.rounds[1]) is not None
    assert goes_on is not asked
    assert ("open" in str(finding(group).values["ended"])) is asked


def test_a_tune_chooses_values_and_leaves_out_what_it_does_not_need() -> None:
    plan = planned(TUNE)
    group = begun(plan)
    assert isinstance(group, TuneGroup)
    values = []

    def tell(group: Group, each: Round) -> None:
        read = each.actions[1]
        assert isinstance(read, Read)
        # The pulse that is sent, what is in force at the read, and the round's settings agree.
        assert read.pulse.width == read.settings["up.width"] == each.settings["up.width"]
        values.append(read.pulse.width)
        # An invented law without scatter: half the width, twice the count.
        group.counted(read, counted(1e-3 / read.pulse.width))

    wanted = done(group, plan, tell)
    assert values[:2] == pytest.approx([40e-6, 400e-6])
    assert len(wanted) < 8
    assert group.reason == "the value was found before"
    found = finding(group)
    assert found.kind is FindingKind.TUNE
    assert (found.values["setting"], found.values["status"]) == ("up.width", "found")
    # Closed form of the law above: 10 pulses at 100 us.
    assert found.values["value"] == pytest.approx(100e-6, rel=0.05)
    assert found.values["rounds"] == len(wanted)


def test_a_tune_that_found_nothing_does_not_say_that_it_did() -> None:
    plan = planned(TUNE)
    group = begun(plan)

    def tell(group: Group, each: Round) -> None:
        read = each.actions[1]
        assert isinstance(read, Read)
        group.counted(read, counted(30.0))

    assert len(done(group, plan, tell)) == 2
    assert group.reason == "no value in the range does it"
    assert finding(group).values["value"] is None


def test_a_tune_that_is_stopped_on_the_way_has_no_result() -> None:
    plan = planned(TUNE)
    group = begun(plan)
    assert group.next_round(plan.rounds[0]) is not None
    assert list(group.findings()) == []


def test_two_tunes_in_a_row_are_two_groups() -> None:
    plan = planned(
        "  - repeat: 2\n    steps:\n"
        + TUNE.replace("  ", "      ", 1).replace("\n    ", "\n        ")
    )
    first = begun(plan)
    held = [first.holds(each) for each in plan.rounds]
    assert held == [True] * 8 + [False] * 8


def test_a_round_outside_belongs_to_no_group() -> None:
    plan = planned("  - preset: down\n")
    assert group_of(plan.rounds[0]) is None
