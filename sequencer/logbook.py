"""The store of everything measured: append-only tables, one commit for each thing that happened.

SQLite in WAL mode by default. Each commit reaches the disk before it returns, so a pulse that
is in the logbook was meant, and a shot that is in it can't be lost any more. Nothing is ever
changed or deleted: how a round or a run ended is a row of its own.
"""

import json
import os
import platform
import socket
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any
from urllib.parse import quote

import numpy as np
import sqlalchemy as sa
from sqlalchemy.engine import Connection, Engine, Row
from sqlalchemy.exc import SQLAlchemyError

from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import LogbookError
from pulsetally.sequencer.events import (
    ContactChecked,
    Event,
    Found,
    PersonAnswered,
    PersonAsked,
    PulseArmed,
    PulseSetUp,
    ReadFinished,
    RoundBegan,
    RoundFinished,
    RoundSpoiled,
    RoundsSkipped,
    RunBegan,
    RunEnded,
    ShotTaken,
    WaitBegan,
    Waveform,
)
from pulsetally.sequencer.plan import Plan

LOGBOOK_VERSION = 2
# Tells our files from other SQLite databases ('ptly' in ASCII).
_MARK = 0x70746C79

_tables = sa.MetaData()


def _key() -> sa.Column[int]:
    return sa.Column("id", sa.Integer, primary_key=True)


def _to(name: str, target: str, *, unique: bool = False) -> sa.Column[int]:
    return sa.Column(
        name, sa.ForeignKey(f"{target}.id"), nullable=False, index=not unique, unique=unique
    )


def _text(name: str) -> sa.Column[str]:
    return sa.Column(name, sa.Text, nullable=False)


def _whole(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.Integer, nullable=False)


def _real(name: str, *, optional: bool = False) -> sa.Column[float]:
    return sa.Column(name, sa.Float, nullable=optional)


about = sa.Table("about", _tables, _whole("version"), _text("written_by"))
runs = sa.Table(
    "runs",
    _tables,
    _key(),
    _text("began_at"),
    _text("mode"),
    _text("title"),
    _text("recipe_file"),
    _text("recipe_text"),
    _text("overrides"),
    _text("bench_name"),
    _text("bench_file"),
    _text("bench_text"),
    _text("cell"),
    _text("swept"),
    _whole("planned_rounds"),
    _whole("most_pulses"),
    _text("software"),
    _text("host"),
    _whole("process"),
)
run_identities = sa.Table(
    "run_identities", _tables, _key(), _to("run", "runs"), _text("role"), _text("identity")
)
run_ends = sa.Table(
    "run_ends",
    _tables,
    _key(),
    _to("run", "runs", unique=True),
    _text("ended_at"),
    _text("state"),
    _text("reason"),
    sa.Column("outputs_off", sa.Boolean, nullable=True),
)
rounds = sa.Table(
    "rounds",
    _tables,
    _key(),
    _to("run", "runs"),
    _whole("number"),
    _whole("attempt"),
    _text("settings"),
    _text("began_at"),
)
round_ends = sa.Table(
    "round_ends",
    _tables,
    _key(),
    _to("round", "rounds", unique=True),
    sa.Column("spoiled", sa.Boolean, nullable=False),
    _text("reason"),
    _text("ended_at"),
)
setups = sa.Table(
    "setups", _tables, _key(), _to("run", "runs"), _text("pulse"), _text("settings"), _text("at")
)
pulses = sa.Table(
    "pulses",
    _tables,
    _key(),
    _to("round", "rounds"),
    _to("setup", "setups"),
    _whole("order"),
    _text("role"),
    _text("pulse"),
    _real("threshold", optional=True),
    _text("armed_at"),
)
shots = sa.Table(
    "shots",
    _tables,
    _key(),
    _to("pulse", "pulses", unique=True),
    _text("at"),
    _real("bench_seconds"),
    _real("sample_interval"),
    _real("first_seconds"),
    _real("source_scale"),
    _real("source_offset"),
    sa.Column("source_codes", sa.LargeBinary, nullable=False),
    _real("node_scale"),
    _real("node_offset"),
    sa.Column("node_codes", sa.LargeBinary, nullable=False),
    sa.Column("clipped", sa.Boolean, nullable=False),
    _real("end_volts", optional=True),
    _real("end_uncertainty", optional=True),
    _real("end_seconds", optional=True),
)
reads = sa.Table(
    "reads",
    _tables,
    _key(),
    _to("round", "rounds"),
    _text("pulse"),
    _real("threshold"),
    _whole("count"),
    _real("crossing", optional=True),
    sa.Column("reached", sa.Boolean, nullable=False),
    _whole("stepped"),
    sa.Column("first", sa.Boolean, nullable=False),
    _text("settings"),
    _text("end_voltages"),
)


waits = sa.Table(
    "waits", _tables, _key(), _to("round", "rounds"), _real("seconds"), _text("began_at")
)
contacts = sa.Table(
    "contacts",
    _tables,
    _key(),
    _to("round", "rounds"),
    _text("pulse"),
    _text("verdict"),
    _real("final_volts"),
    _real("tau"),
    _real("expected_tau", optional=True),
)


# Of a pulse that stands for several, sent by one trigger: how many, and how far apart.
trains = sa.Table(
    "trains",
    _tables,
    _key(),
    _to("pulse", "pulses", unique=True),
    _whole("count"),
    _real("period_seconds"),
)
# The end voltage of each pulse of a train, from its one shot.
train_ends = sa.Table(
    "train_ends",
    _tables,
    _key(),
    _to("shot", "shots"),
    _whole("place"),
    _real("end_volts"),
    _real("end_uncertainty"),
    _real("end_seconds"),
)
findings = sa.Table(
    "findings",
    _tables,
    _key(),
    _to("round", "rounds"),
    _text("kind"),
    _text("pulse"),
    _text("settings"),
    _text("found"),
    _text("at"),
)
asked = sa.Table(
    "asked",
    _tables,
    _key(),
    _to("round", "rounds"),
    _text("message"),
    _text("asked_at"),
)
answers = sa.Table(
    "answers",
    _tables,
    _key(),
    _to("asked", "asked", unique=True),
    sa.Column("answered", sa.Boolean, nullable=False),
    _text("at"),
)
skipped_rounds = sa.Table(
    "skipped_rounds",
    _tables,
    _key(),
    _to("run", "runs"),
    _whole("count"),
    _text("reason"),
)


class Logbook:
    """Open a logbook; begin runs in it and look runs up."""

    def __init__(self, path: Path, *, create: bool = True) -> None:
        """Open the file, or make it where create allows. Raises LogbookError."""
        self.path = path
        if not create and not path.exists():
            raise LogbookError(
                f"{path}: there is no logbook here. To fix it, name one with --logbook, or make"
                " one with 'pulsetally rehearse full_count'."
            )
        self._engine = _connect(path, read_only=not create)
        if not create:
            self._check_version()
            return
        with self._guarded("opened") as connection:
            mark = connection.exec_driver_sql("PRAGMA application_id").scalar()
            if mark != _MARK and sa.inspect(connection).get_table_names():
                raise LogbookError(
                    f"{path}: this database is not a logbook; nothing was changed in it. To fix it,"
                    " name another file with --logbook."
                )
            _tables.create_all(connection)
            connection.exec_driver_sql(f"PRAGMA application_id={_MARK}")
            # An older logbook lacks tables only, which have just been made.
            if (_version(connection) or 0) < LOGBOOK_VERSION:
                _insert(connection, about, version=LOGBOOK_VERSION, written_by=_software())
        self._check_version()

    def _check_version(self) -> None:
        with self._guarded("read") as connection:
            found = _version(connection) or 0
        if found > LOGBOOK_VERSION:
            raise LogbookError(
                f"{self.path}: this logbook was written by a newer version of the program (its"
                f" version is {found}, this program knows {LOGBOOK_VERSION}). To fix it,"
                " upgrade the program."
            )
        if found < LOGBOOK_VERSION:
            raise LogbookError(
                f"{self.path}: this logbook was written by an older version of the program (its"
                f" version is {found}, this program's {LOGBOOK_VERSION}). To fix it, keep a"
                " copy, then record any run or rehearsal into it, which brings it up to date."
            )

    def close(self) -> None:
        """Give the file back."""
        self._engine.dispose()

    def begin_run(self, plan: Plan, bench: Bench, *, mode: str) -> "Recorder":
        """Enter a run; mode is 'run' or 'rehearsal'."""
        model = bench.model
        with self._guarded("written") as connection:
            run = _insert(
                connection,
                runs,
                began_at=_now(),
                mode=mode,
                title=plan.recipe.title,
                recipe_file=plan.recipe.file,
                recipe_text=plan.recipe.text,
                overrides=json.dumps(plan.recipe.overrides),
                bench_name=model.bench,
                bench_file=bench.file,
                bench_text=bench.text,
                cell=model.cell.model_dump_json(),
                swept=json.dumps(plan.swept),
                planned_rounds=len(plan.rounds),
                most_pulses=plan.most_pulses,
                software=_software(),
                host=socket.gethostname(),
                process=os.getpid(),
            )
        return Recorder(self, run)

    def select(self, query: "sa.Select[Any]") -> Sequence[Row[Any]]:
        """Run a query; return its rows. Raises LogbookError."""
        with self._guarded("read") as connection:
            return connection.execute(query).all()

    @contextmanager
    def _guarded(self, verb: str) -> Iterator[Connection]:
        """Give a transaction; turn the database's errors into ours."""
        try:
            with self._engine.begin() as connection:
                yield connection
        except SQLAlchemyError as error:
            cause = getattr(error, "orig", None) or error
            raise LogbookError(
                f"{self.path}: the logbook can't be {verb} ({cause}). To fix it, check that the"
                " disk has room, that the file may be written, and that it is a logbook."
            ) from error


class Recorder:
    """Record the events of one run, each committed before the call returns."""

    def __init__(self, logbook: Logbook, run: int) -> None:
        self.run, self._logbook = run, logbook
        self.ended: RunEnded | None = None
        self._round = self._pulse = self._asked = 0
        self._setups: dict[str, int] = {}

    def record(self, event: Event) -> None:
        """Enter an event. Raises LogbookError when it can't be kept."""
        match event:
            case RunBegan():
                for role, identity in event.identities.items():
                    self._enter(run_identities, run=self.run, role=role, identity=identity)
            case RoundBegan():
                self._round = self._enter(
                    rounds,
                    run=self.run,
                    number=event.round.number,
                    attempt=event.attempt,
                    settings=_json(event.round.settings),
                    began_at=_now(),
                )
            case PulseSetUp():
                self._setups[event.pulse] = self._enter(
                    setups,
                    run=self.run,
                    pulse=event.pulse,
                    settings=_json(event.settings),
                    at=_now(),
                )
            case PulseArmed():
                self._pulse = self._enter(
                    pulses,
                    round=self._round,
                    setup=self._setups[event.pulse],
                    order=event.order,
                    role=event.role.value,
                    pulse=event.pulse,
                    threshold=event.threshold,
                    armed_at=_now(),
                )
                if event.period is not None:
                    # In the same breath as the intent: nothing goes out before both are kept.
                    self._enter(
                        trains, pulse=self._pulse, count=event.count, period_seconds=event.period
                    )
            case ShotTaken():
                self._record_shot(event)
            case ReadFinished():
                self._enter(
                    reads,
                    round=self._round,
                    pulse=event.pulse,
                    threshold=event.threshold,
                    count=event.count,
                    crossing=event.crossing,
                    reached=event.reached,
                    stepped=event.stepped,
                    first=event.first,
                    settings=_json(event.settings),
                    end_voltages=json.dumps(event.end_voltages),
                )
            case WaitBegan():
                self._enter(waits, round=self._round, seconds=event.seconds, began_at=_now())
            case ContactChecked():
                self._enter(
                    contacts,
                    round=self._round,
                    pulse=event.pulse,
                    verdict=event.result.verdict.value,
                    final_volts=event.result.final_volts,
                    tau=event.result.tau,
                    expected_tau=event.result.expected_tau,
                )
            case Found():
                self._enter(
                    findings,
                    round=self._round,
                    kind=event.kind.value,
                    pulse=event.pulse,
                    settings=_json(event.settings),
                    found=json.dumps(event.values),
                    at=_now(),
                )
            case PersonAsked():
                self._asked = self._enter(
                    asked, round=self._round, message=event.message, asked_at=_now()
                )
            case PersonAnswered():
                self._enter(answers, asked=self._asked, answered=event.answered, at=_now())
            case RoundsSkipped():
                self._enter(skipped_rounds, run=self.run, count=event.count, reason=event.reason)
            case RoundFinished():
                self._enter(
                    round_ends, round=self._round, spoiled=False, reason="", ended_at=_now()
                )
            case RoundSpoiled():
                self._enter(
                    round_ends,
                    round=self._round,
                    spoiled=True,
                    reason=event.reason,
                    ended_at=_now(),
                )

    def close(self, event: RunEnded) -> None:
        """Enter how the run ended. Raises LogbookError when it can't be kept.

        ended holds it all the same, for whoever has to tell it.
        """
        self.ended = event
        self._enter(
            run_ends,
            run=self.run,
            ended_at=_now(),
            state=event.state.value,
            reason=" ".join(each for each in (event.reason, event.unconfirmed) if each),
            outputs_off=event.outputs_off,
        )

    def _record_shot(self, event: ShotTaken) -> None:
        shot = event.shot
        # Of a train the last one stands for the shot; all of them follow.
        end = event.ends[-1] if event.ends else None
        entered = self._enter(
            shots,
            pulse=self._pulse,
            at=_now(),
            bench_seconds=shot.bench_seconds,
            sample_interval=shot.sample_interval,
            first_seconds=shot.first_seconds,
            source_scale=shot.source.scale,
            source_offset=shot.source.offset,
            source_codes=_pack(shot.source),
            node_scale=shot.node.scale,
            node_offset=shot.node.offset,
            node_codes=_pack(shot.node),
            clipped=shot.clipped,
            end_volts=end.volts if end else None,
            end_uncertainty=end.uncertainty if end else None,
            end_seconds=end.seconds if end else None,
        )
        if len(event.ends) > 1:
            rows = [
                {
                    "shot": entered,
                    "place": place,
                    "end_volts": each.volts,
                    "end_uncertainty": each.uncertainty,
                    "end_seconds": each.seconds,
                }
                for place, each in enumerate(event.ends, start=1)
            ]
            with self._logbook._guarded("written") as connection:
                connection.execute(sa.insert(train_ends), rows)

    def _enter(self, table: sa.Table, **values: Any) -> int:
        with self._logbook._guarded("written") as connection:
            return _insert(connection, table, **values)


def unpack(codes: bytes, scale: float, offset: float) -> Waveform:
    """Turn what a shot's row holds of one channel into a waveform."""
    return Waveform(
        codes=np.frombuffer(codes, dtype="<i2").astype(np.int16), scale=scale, offset=offset
    )


def _pack(waveform: Waveform) -> bytes:
    return waveform.codes.astype("<i2").tobytes()


def _insert(connection: Connection, table: sa.Table, **values: Any) -> int:
    result = connection.execute(sa.insert(table).values(**values))
    key = result.inserted_primary_key
    return int(key[0]) if key else 0


def _json(settings: Mapping[str, float]) -> str:
    return json.dumps(dict(settings))


def _version(connection: Connection) -> int | None:
    """Return the newest version that has written into the logbook."""
    return connection.execute(sa.select(sa.func.max(about.c.version))).scalar()


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="milliseconds")


def _software() -> str:
    return f"pulsetally {version('pulsetally')}, Python {platform.python_version()}"


def _connect(path: Path, *, read_only: bool) -> Engine:
    if read_only:
        # A logbook that is archived, or on a full disk, must still be readable.
        fixed = "" if os.access(path.parent, os.W_OK) else "&immutable=1"
        place = f"file:{quote(str(path.absolute()))}?mode=ro{fixed}"
        return sa.create_engine(
            "sqlite://",
            creator=lambda: sqlite3.connect(place, uri=True, check_same_thread=False),
            poolclass=sa.pool.StaticPool,
        )
    engine = sa.create_engine(sa.URL.create("sqlite", database=str(path)))

    @sa.event.listens_for(engine, "connect")
    def prepare(connection: Any, record: Any) -> None:
        cursor = connection.cursor()
        # FULL: a commit is on the disk when it returns, also through a power cut.
        for pragma in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON"):
            cursor.execute(f"PRAGMA {pragma}")
        cursor.execute("PRAGMA busy_timeout=10000")
        cursor.close()

    return engine
