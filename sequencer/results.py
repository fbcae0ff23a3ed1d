"""Look up what runs found: logbook -> results, for people and for programs."""

import itertools
import json
import os
import re
import socket
from collections.abc import Iterable, Iterator
from dataclasses import asdict, dataclass, field
from typing import Any

import sqlalchemy as sa

from pulsetally.sequencer.analysis.counting import CountStatistics, full_count
from pulsetally.sequencer.errors import LogbookError
from pulsetally.sequencer.events import Role, RunState, Shot
from pulsetally.sequencer.logbook import (
    Logbook,
    contacts,
    findings,
    pulses,
    reads,
    round_ends,
    rounds,
    run_ends,
    run_identities,
    runs,
    shots,
    skipped_rounds,
    trains,
    unpack,
)
from pulsetally.sequencer.models import units_of
from pulsetally.sequencer.yaml_places import load_yaml


@dataclass(frozen=True, slots=True, kw_only=True)
class RunSummary:
    """One line about a run. state: a RunState, or 'interrupted' when its process is gone."""

    run: int
    title: str
    mode: str
    state: str
    reason: str
    outputs_off: bool | None
    began_at: str
    ended_at: str | None
    rounds: int
    planned_rounds: int
    shots: int
    skipped: int = 0
    bench: str = ""
    bench_file: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadResult:
    """One read. end_voltages: volts, one a pulse; other fields as in ReadFinished."""

    pulse: str
    threshold: float
    count: int
    crossing: float | None
    reached: bool
    stepped: int
    first: bool
    settings: dict[str, float]
    end_voltages: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """Something beside a count. kind: a FindingKind's word; the rest as in Found."""

    kind: str
    pulse: str
    settings: dict[str, float]
    values: dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class RoundResult:
    """One attempt at a round.

    stepped: pulses of 'step' that were recorded in it. contacts: what each contact pulse found:
    pulse, verdict, final_volts, tau and expected_tau (seconds). findings: what else was
    measured.
    """

    round: int
    attempt: int
    settings: dict[str, float]
    complete: bool
    spoiled: bool
    reason: str
    preset: bool
    stepped: int
    reads: tuple[ReadResult, ...]
    contacts: tuple[dict[str, Any], ...] = ()
    findings: tuple["Finding", ...] = ()

    @property
    def fill(self) -> ReadResult | None:
        """Return the read that filled the cell from fully down, if there was one."""
        if not (self.complete and not self.spoiled and self.preset and self.reads):
            return None
        read = self.reads[0]
        return read if read.first and read.stepped == 0 else None

    @property
    def full_read(self) -> ReadResult | None:
        """Return the read that measured a full count, if one did."""
        read = self.fill
        return read if read is not None and read.crossing is not None else None


@dataclass(frozen=True, slots=True, kw_only=True)
class SettingCount:
    """The full count at one combination of swept settings, in SI units."""

    settings: dict[str, float]
    count: CountStatistics


@dataclass(frozen=True, slots=True, kw_only=True)
class SettingLeftOut:
    """One combination of swept settings at which no round gave a count with a fraction.

    at_most: pulses that were not enough, or None where the first pulse was already too many.
    rounds: how many.
    """

    settings: dict[str, float]
    at_most: int | None
    rounds: int


@dataclass(frozen=True, slots=True, kw_only=True)
class LeftOut:
    """Count the rounds that a full count can't use, though they are complete.

    not_reached: the threshold was not passed within 'at most'. first_pulse: the very first pulse
    passed it, so that nothing lies below. Both kinds would lie at the ends of the scatter.
    """

    not_reached: int
    first_pulse: int


@dataclass(frozen=True, slots=True, kw_only=True)
class RunResult:
    """All that a run found.

    units: SI units of the recipe's parameters that have one. left_out_by_setting: the settings
    that by_setting lacks.
    """

    summary: RunSummary
    identities: dict[str, str]
    swept: tuple[str, ...]
    rounds: tuple[RoundResult, ...]
    full_count: CountStatistics | None
    left_out: LeftOut
    by_setting: tuple[SettingCount, ...]
    units: dict[str, str] = field(default_factory=dict)
    left_out_by_setting: tuple[SettingLeftOut, ...] = ()

    def as_object(self) -> dict[str, Any]:
        """Return the result as an object for JSON; volts, seconds and pulses throughout."""
        summary = self.summary
        return {
            "run": summary.run,
            "recipe": summary.title,
            "mode": summary.mode,
            "bench": summary.bench,
            "bench_file": summary.bench_file,
            "state": summary.state,
            "reason": summary.reason,
            "outputs_off": summary.outputs_off,
            "began_at": summary.began_at,
            "ended_at": summary.ended_at,
            "instruments": self.identities,
            "planned_rounds": summary.planned_rounds,
            "skipped_rounds": summary.skipped,
            "shots": summary.shots,
            "swept": list(self.swept),
            "units": self.units,
            "rounds": [_round_object(each) for each in self.rounds],
            "full_count": _statistics_object(self.full_count),
            "left_out": {
                "not_reached": self.left_out.not_reached,
                "first_pulse": self.left_out.first_pulse,
            },
            "left_out_by_setting": [asdict(each) for each in self.left_out_by_setting],
            "full_count_by_setting": [
                {"settings": each.settings, **(_statistics_object(each.count) or {})}
                for each in self.by_setting
            ],
        }


def list_runs(logbook: Logbook) -> list[RunSummary]:
    """Return all runs, oldest first."""
    return [_summary(row) for row in logbook.select(_summaries().order_by(runs.c.id))]


def find_run(logbook: Logbook, which: str) -> int:
    """Return the number of a run: 'latest' or a number. Raises LogbookError."""
    latest = logbook.select(sa.select(sa.func.max(runs.c.id)))[0][0]
    if latest is None:
        raise LogbookError(
            f"{logbook.path}: no run is in this logbook yet. To fix it, make one with"
            " 'pulsetally rehearse full_count'."
        )
    if which == "latest":
        return int(latest)
    if re.fullmatch("[0-9]{1,9}", which):
        found = logbook.select(sa.select(runs.c.id).where(runs.c.id == int(which)))
        if found:
            return int(which)
    raise LogbookError(
        f"{logbook.path}: there is no run {which[:40]!r}. To fix it, write 'latest' or a number"
        f" from 'pulsetally runs' (the last is {latest})."
    )


def run_result(logbook: Logbook, run: int) -> RunResult:
    """Look up all that a run found."""
    summary = _summary(logbook.select(_summaries().where(runs.c.id == run))[0])
    swept = json.loads(logbook.select(sa.select(runs.c.swept).where(runs.c.id == run))[0][0])
    found = _rounds(logbook, run, going=summary.state == RunState.RUNNING)
    counted = [read for each in found if (read := each.full_read) is not None]
    groups: dict[tuple[tuple[str, float], ...], list[float]] = {}
    for read in counted:
        if read.crossing is not None:
            # Not everything that is swept is in force everywhere, as the pairs of a cycling.
            place = tuple((name, read.settings[name]) for name in swept if name in read.settings)
            groups.setdefault(place, []).append(read.crossing)
    by_setting = [
        SettingCount(settings=dict(place), count=statistics)
        for place, group in groups.items()
        if swept and (statistics := full_count(group)) is not None
    ]
    return RunResult(
        summary=summary,
        identities=_identities(logbook, run),
        swept=tuple(swept),
        rounds=tuple(found),
        left_out=_left_out(found),
        full_count=full_count([each for group in groups.values() for each in group]),
        by_setting=tuple(by_setting),
        units=_units(logbook, run),
        left_out_by_setting=tuple(_settings_left_out(found, swept, {*groups})),
    )


def run_shots(logbook: Logbook, run: int, *, round_number: int | None = None) -> Iterable[Shot]:
    """Return a run's waveforms, in order, or those of one round."""
    query = (
        sa.select(shots)
        .join(pulses, shots.c.pulse == pulses.c.id)
        .join(rounds, pulses.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(pulses.c.id)
    )
    if round_number is not None:
        query = query.where(rounds.c.number == round_number)
    for row in logbook.select(query):
        yield Shot(
            source=unpack(row.source_codes, row.source_scale, row.source_offset),
            node=unpack(row.node_codes, row.node_scale, row.node_offset),
            sample_interval=row.sample_interval,
            first_seconds=row.first_seconds,
            clipped=row.clipped,
            bench_seconds=row.bench_seconds,
        )


def _summaries() -> "sa.Select[Any]":
    done = (
        sa.select(sa.func.count(sa.distinct(rounds.c.number)))
        .join(round_ends, round_ends.c.round == rounds.c.id)
        .where(rounds.c.run == runs.c.id, sa.not_(round_ends.c.spoiled))
    )
    taken = (
        sa.select(sa.func.count(shots.c.id))
        .join(pulses, shots.c.pulse == pulses.c.id)
        .join(rounds, pulses.c.round == rounds.c.id)
        .where(rounds.c.run == runs.c.id)
    )
    skipped = sa.select(sa.func.coalesce(sa.func.sum(skipped_rounds.c["count"]), 0)).where(
        skipped_rounds.c.run == runs.c.id
    )
    return sa.select(
        runs,
        run_ends.c.state,
        run_ends.c.reason,
        run_ends.c.outputs_off,
        run_ends.c.ended_at,
        done.scalar_subquery().label("rounds_done"),
        taken.scalar_subquery().label("shots_taken"),
        skipped.scalar_subquery().label("rounds_skipped"),
    ).outerjoin(run_ends, run_ends.c.run == runs.c.id)


def _summary(row: Any) -> RunSummary:
    state, reason = row.state, row.reason or ""
    if state is None:
        state = RunState.RUNNING.value
        if row.host == socket.gethostname() and not _alive(row.process):
            state, reason = "interrupted", "its process is gone; outputs may be on"
    return RunSummary(
        run=row.id,
        title=row.title,
        mode=row.mode,
        state=state,
        reason=reason,
        outputs_off=row.outputs_off,
        began_at=row.began_at,
        ended_at=row.ended_at,
        rounds=row.rounds_done,
        planned_rounds=row.planned_rounds,
        shots=row.shots_taken,
        skipped=row.rounds_skipped,
        bench=row.bench_name,
        bench_file=row.bench_file,
    )


def _alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _settings_left_out(
    found: list[RoundResult], swept: list[str], counted: set[tuple[tuple[str, float], ...]]
) -> Iterator[SettingLeftOut]:
    lacking: dict[tuple[tuple[str, float], ...], list[ReadResult]] = {}
    for each in found:
        if (read := each.fill) is not None and read.crossing is None:
            place = tuple((name, read.settings[name]) for name in swept if name in read.settings)
            if place and place not in counted:
                lacking.setdefault(place, []).append(read)
    for place, reads_here in lacking.items():
        most = None if reads_here[0].reached else reads_here[0].count
        yield SettingLeftOut(settings=dict(place), at_most=most, rounds=len(reads_here))


def _units(logbook: Logbook, run: int) -> dict[str, str]:
    text = logbook.select(sa.select(runs.c.recipe_text).where(runs.c.id == run))[0][0]
    recipe = load_yaml(text, "recipe").data
    parameters = recipe.get("parameters") if isinstance(recipe, dict) else None
    return units_of(parameters) if isinstance(parameters, dict) else {}


def _identities(logbook: Logbook, run: int) -> dict[str, str]:
    query = sa.select(run_identities).where(run_identities.c.run == run)
    return {row.role: row.identity for row in logbook.select(query)}


def _rounds(logbook: Logbook, run: int, *, going: bool) -> list[RoundResult]:
    sent: dict[int, list[str]] = {}
    recorded = (
        sa.select(
            pulses.c.round,
            pulses.c.role,
            sa.func.coalesce(trains.c["count"], 1).label("several"),
        )
        .join(shots, shots.c.pulse == pulses.c.id)
        .outerjoin(trains, trains.c.pulse == pulses.c.id)
        .join(rounds, pulses.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(pulses.c.id)
    )
    for row in logbook.select(recorded):
        sent.setdefault(row.round, []).extend([row.role] * row.several)
    read: dict[int, list[ReadResult]] = {}
    for row in logbook.select(
        sa.select(reads)
        .join(rounds, reads.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(reads.c.id)
    ):
        read.setdefault(row.round, []).append(
            ReadResult(
                pulse=row.pulse,
                threshold=row.threshold,
                # 'count' is a method of every row, so the column is asked for by name.
                count=row._mapping["count"],
                crossing=row.crossing,
                reached=row.reached,
                stepped=row.stepped,
                first=row.first,
                settings=json.loads(row.settings),
                end_voltages=tuple(json.loads(row.end_voltages)),
            )
        )
    looked: dict[int, list[dict[str, Any]]] = {}
    for row in logbook.select(
        sa.select(contacts)
        .join(rounds, contacts.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(contacts.c.id)
    ):
        names = ("pulse", "verdict", "final_volts", "tau", "expected_tau")
        looked.setdefault(row.round, []).append({name: row._mapping[name] for name in names})
    found: dict[int, list[Finding]] = {}
    for row in logbook.select(
        sa.select(findings)
        .join(rounds, findings.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(findings.c.id)
    ):
        found.setdefault(row.round, []).append(
            Finding(
                kind=row.kind,
                pulse=row.pulse,
                settings=json.loads(row.settings),
                values=json.loads(row.found),
            )
        )
    query = (
        sa.select(rounds, round_ends.c.spoiled, round_ends.c.reason)
        .outerjoin(round_ends, round_ends.c.round == rounds.c.id)
        .where(rounds.c.run == run)
        .order_by(rounds.c.id)
    )
    return [
        RoundResult(
            round=row.number,
            attempt=row.attempt,
            settings=json.loads(row.settings),
            complete=row.spoiled is False,
            # A round without an end was cut, unless it is the one that is going on.
            spoiled=not going if row.spoiled is None else row.spoiled,
            reason=("still going" if going else "cut off") if row.reason is None else row.reason,
            preset=_from_down(sent.get(row.id, [])),
            stepped=sent.get(row.id, []).count(Role.STEP.value),
            reads=tuple(read.get(row.id, [])),
            contacts=tuple(looked.get(row.id, [])),
            findings=tuple(found.get(row.id, [])),
        )
        for row in logbook.select(query)
    ]


def _left_out(found: list[RoundResult]) -> LeftOut:
    fills = [read for each in found if (read := each.fill) is not None and read.crossing is None]
    not_reached = sum(not read.reached for read in fills)
    return LeftOut(not_reached=not_reached, first_pulse=len(fills) - not_reached)


def _from_down(roles: list[str]) -> bool:
    """Say whether the first read found the cell fully down, or as steps after a preset left it.

    The pulses of a switched charge and of a loop don't preset, though they may end below 0 V.
    """
    before = itertools.takewhile(lambda each: each != Role.READ.value, roles)
    passed_over = (Role.CONTACT.value, Role.STEP.value)
    return [each for each in before if each not in passed_over] == [Role.PRESET.value]


def _round_object(each: RoundResult) -> dict[str, Any]:
    return {
        "round": each.round,
        "attempt": each.attempt,
        "settings": each.settings,
        "spoiled": each.spoiled,
        "reason": each.reason,
        "stepped": each.stepped,
        "contacts": list(each.contacts),
        "findings": [
            {
                "kind": one.kind,
                "pulse": one.pulse,
                "settings": one.settings,
                **one.values,
            }
            for one in each.findings
        ],
        "reads": [
            {
                "pulse": read.pulse,
                "threshold": read.threshold,
                "count": read.count,
                "crossing": read.crossing,
                "reached": read.reached,
                "stepped": read.stepped,
                "settings": read.settings,
                "end_voltages": list(read.end_voltages),
            }
            for read in each.reads
        ],
    }


def _statistics_object(count: CountStatistics | None) -> dict[str, Any] | None:
    if count is None:
        return None
    return {"mean": count.mean, "sd": count.sd, "rounds": count.rounds}
