"""The one read-write connection to a record; used from one thread.

A trial, its verdicts, the state after it and the next feedforward are one transaction: a kill at
any instruction leaves either all of it or nothing. Nothing that was written is changed later.
"""

import os
import sqlite3
import time
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Array, Trial
from trialrunner.locks import Busy, Lock, hold_lock
from trialrunner.record import arrays, queries
from trialrunner.record.arrays import Blob
from trialrunner.record.aside import set_aside
from trialrunner.record.entry import Entry
from trialrunner.record.errors import (
    RecordBusy,
    RecordError,
    RecordMisuse,
    RecordUnwritable,
    in_words,
)
from trialrunner.record.rows import DaemonRow, RequestRow, RunFacts, Transition, TrialTiming
from trialrunner.record.schema import APPLICATION_ID, SCHEMA_VERSION, TABLES

WAL_RESET_FIXED = (3, 51, 3)
MAX_PENDING_TRANSITIONS = 10_000
"""Steps of the cycle kept until the next commit; older ones are dropped beyond that."""
KEPT_LOG_BYTES = 64 << 20
"""The write-ahead log is cut back to this after a reader has kept it from being emptied."""
NEW = ".new"
"""A record gets its name only when it is whole, so that none is ever half made."""


class RecordWriter:
    """Writes one record. After a failed write it refuses to go on: nothing is retried in hope."""

    def __init__(
        self,
        path: Path,
        connection: sqlite3.Connection,
        lock: Lock,
        daemon: DaemonRow,
        now_ns: Callable[[], int],
    ) -> None:
        """Use `create` or `open`."""
        self.path = path
        self._db = connection
        self._lock = lock
        self._daemon = daemon
        self._now_ns = now_ns
        self._failed = ""
        self._transitions: deque[Transition] = deque(maxlen=MAX_PENDING_TRANSITIONS)
        self._commit_s = 0.0
        self._entry, self._chain = queries.last_entry(connection)
        self.facts: RunFacts = queries.facts(connection)
        self.state: RunState = queries.state_after(connection, self._entry)
        self._carry_entry = queries.carry_entry(connection)
        self._inputs, self._outputs = self.facts.units("inputs"), self.facts.units("outputs")
        n_outputs = queries.array(connection, 0, "reference").shape[1]
        carry = queries.carry_of(connection, self._carry_entry, n_outputs)
        assert carry is not None
        self.carry: Carry = carry

    # -- opening ----------------------------------------------------------------------------

    @classmethod
    def create(
        cls,
        path: Path,
        facts: RunFacts,
        reference: Array,
        state: RunState,
        carry: Carry,
        now_ns: Callable[[], int] = time.monotonic_ns,
        set_old_aside: bool = False,
    ) -> "RecordWriter":
        """A new record. Raises RecordError; a file of that name is never overwritten.

        `now_ns` is the daemon's monotonic clock, by which commits are timed. With `set_old_aside`
        a file of that name is renamed first, unless somebody writes it.
        """
        with _held(path) as lock:
            if path.exists() and set_old_aside:
                set_aside(path, facts.started_utc)
            elif path.exists():
                raise RecordUnwritable(f"{path}: exists already; choose another name")
            _make(path, facts, reference, state, carry)
            daemon = DaemonRow.start(facts.config_text, facts.version, facts.started_utc)
            return cls._take_up(path, lock, daemon, now_ns)

    @classmethod
    def open(
        cls, path: Path, daemon: DaemonRow, now_ns: Callable[[], int] = time.monotonic_ns
    ) -> "RecordWriter":
        """An existing record, to go on with; `daemon` says who does. Raises RecordError."""
        with _held(path) as lock:
            queries.require_ours(path)
            return cls._take_up(path, lock, daemon, now_ns)

    @classmethod
    def _take_up(
        cls, path: Path, lock: Lock, daemon: DaemonRow, now_ns: Callable[[], int]
    ) -> "RecordWriter":
        db = _connect(path)
        try:
            writer = cls(path, db, lock, daemon, now_ns)
            with writer._new_entry("daemon") as entry:
                entry.insert("daemons", entry.number, *vars(daemon).values())
            writer.checkpoint()
        except BaseException:
            db.close()
            raise
        return writer

    # -- writing ----------------------------------------------------------------------------

    def commit_trial(self, trial: Trial, outcome: Outcome, timing: TrialTiming) -> None:
        """Store a trial and all that follows from it. Raises RecordError, having stored nothing."""
        began_ns = self._now_ns()
        self._require_expected(trial)
        blobs = self._own_blobs(trial)
        moved = not arrays.same_carry(outcome.carry, self.carry)
        if moved:
            blobs |= self._carry_blobs(outcome.carry)
        with self._new_entry("trial", outcome.state) as entry:
            row = _trial_row(trial, outcome, timing, self._commit_s)
            entry.insert("trials", entry.number, trial.index, self._carry_entry, *row)
            for place, verdict in enumerate(outcome.verdicts):
                values = (verdict.guard, verdict.level.word, verdict.reason)
                numbers = (float(verdict.value), float(verdict.limit), verdict.void)
                entry.insert("verdicts", entry.number, place, *values, *numbers)
            entry.insert_arrays(blobs)
        self._moved_on(entry.number, outcome.state, outcome.carry, moved)
        self._commit_s = (self._now_ns() - began_ns) / 1e9

    def commit_request(self, row: RequestRow, state: RunState, carry: Carry | None) -> None:
        """Store an operator's request; with `carry`, also the state that it changed.

        Raises RecordError, having stored nothing.
        """
        changed = carry is not None
        moved = carry is not None and not arrays.same_carry(carry, self.carry)
        blobs = self._carry_blobs(carry) if carry is not None and moved else {}
        asked = (row.id, row.kind, row.target, row.who, row.why, row.asked_utc)
        effect_trial = state.trial if changed else row.effect_trial
        with self._new_entry("request", state if changed else None) as entry:
            answered = (effect_trial, changed, row.ok, row.answer)
            entry.insert("requests", entry.number, *asked, *answered)
            entry.insert_arrays(blobs)
        if carry is not None:
            self._moved_on(entry.number, state, carry, moved)

    def log_transition(self, **values: Any) -> None:
        """Note a step of the cycle; stored with the next commit. Callable from any thread."""
        self._transitions.append(Transition(**values))

    def checkpoint(self) -> None:
        """Move the write-ahead log into the file, while nobody waits for a commit.

        What a reader still looks at stays in the log until the next time; nobody is waited for.
        """
        with self._in_words():
            self._db.execute("PRAGMA wal_checkpoint(PASSIVE)").fetchall()

    def recall(self, trial: int) -> Array:
        """The learned feedforward, (n_samples, n_inputs), with which a trial was run.

        Raises CoreError for a trial that is not in the record.
        """
        with self._in_words():
            return queries.learned_before(self._db, trial)

    def find_request(self, request_id: str) -> str | None:
        """The answer given to a request of that id, as JSON."""
        with self._in_words():
            found = self._db.execute("SELECT answer FROM requests WHERE id = ?", (request_id,))
            row = found.fetchone()
        return None if row is None else str(row[0])

    def close(self, utc: str = "") -> None:
        """Store what waits, empty the log, give the lock back. Harmless when repeated."""
        if self._lock.held and not self._failed:
            try:
                stop = DaemonRow("stop", utc, self._daemon.version, self._daemon.platform)
                with self._new_entry("daemon") as entry:
                    entry.insert("daemons", entry.number, *vars(stop).values())
                with self._in_words():
                    self._db.execute("PRAGMA busy_timeout = 0")
                    self._db.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
            except RecordError:
                # All that counts was committed before: closing must not hide why the run ended.
                pass
        self._db.close()
        self._lock.release()

    # -- helpers ----------------------------------------------------------------------------

    def _require_expected(self, trial: Trial) -> None:
        """The feedforward is stored with the entry that made it, so it must be that one."""
        if trial.index != self.state.trial:
            raise RecordMisuse(
                f"{self.path}: expected trial {self.state.trial}, found trial {trial.index}"
            )
        if not arrays.same_bits(trial.feedforward, self.carry.feedforward):
            raise RecordMisuse(
                f"{self.path}: trial {trial.index} played another feedforward than the record "
                "holds for it"
            )

    def _moved_on(self, entry: int, state: RunState, carry: Carry, moved: bool) -> None:
        self.state, self.carry = state, carry
        if moved:
            self._carry_entry = entry

    def _own_blobs(self, trial: Trial) -> dict[str, Blob]:
        wire, outputs = self.facts.sample_type, self._outputs
        blobs = {"output": arrays.pack("output", trial.output, wire, outputs)}
        if trial.auxiliary.size:
            units = self.facts.units("auxiliary")
            blobs["auxiliary"] = arrays.pack("auxiliary", trial.auxiliary, wire, units)
        if trial.limited.any():
            blobs["limited"] = arrays.pack("limited", trial.limited, wire)
        blobs["start_state"] = arrays.pack("start_state", trial.start_state, "f8", outputs)
        return blobs

    def _carry_blobs(self, carry: Carry) -> dict[str, Blob]:
        return arrays.pack_carry(carry, self.facts.sample_type, self._inputs, self._outputs)

    @contextmanager
    def _new_entry(self, kind: str, state: RunState | None = None) -> Iterator[Entry]:
        """One transaction, with the steps of the cycle that wait."""
        with self._in_words(), _transaction(self._db):
            entry = Entry(self._db, self._entry + 1, kind)
            yield entry
            for place in range(len(self._transitions)):
                values = vars(self._transitions.popleft()).values()
                entry.insert("transitions", entry.number, place, *values)
            chain = entry.finish(self._chain, state)
        self._entry, self._chain = entry.number, chain

    @contextmanager
    def _in_words(self) -> Iterator[None]:
        if self._failed:
            raise RecordUnwritable(f"{self.path}: takes no more writes after: {self._failed}")
        try:
            yield
        except (sqlite3.Error, OSError) as error:
            said = in_words(self.path, error)
            self._failed = str(said)
            raise said from None


@contextmanager
def _held(path: Path) -> Iterator[Lock]:
    """The record's lock, given back if what follows fails; foreign errors as ours."""
    try:
        lock = hold_lock(path.with_name(path.name + ".lock"), f"the record {path}")
    except Busy as error:
        raise RecordBusy(str(error)) from None
    except OSError as error:
        raise in_words(path, error) from None
    try:
        yield lock
    except (sqlite3.Error, OSError) as error:
        lock.release()
        raise in_words(path, error) from None
    except BaseException:
        lock.release()
        raise


def _make(path: Path, facts: RunFacts, reference: Array, state: RunState, carry: Carry) -> None:
    """Write a whole new record under another name, then give it its own."""
    new = path.with_name(path.name + NEW)
    for suffix in ("", "-wal", "-shm"):
        new.with_name(new.name + suffix).unlink(missing_ok=True)
    db = _connect(new)
    try:
        with _transaction(db):
            _begin(db, facts, reference, state, carry)
    finally:
        # The last connection empties the log into the file and removes it.
        db.close()
    new.rename(path)
    _sync_directory(path)


def _begin(
    db: sqlite3.Connection, facts: RunFacts, reference: Array, state: RunState, carry: Carry
) -> None:
    db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
    db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
    for statement in TABLES.split(";\n"):
        if statement.strip():
            db.execute(statement)
    entry = Entry(db, 0, "run")
    for row in sorted(facts.to_rows().items()):
        entry.insert("facts", *row)
    inputs, outputs = facts.units("inputs"), facts.units("outputs")
    wire = facts.sample_type
    entry.insert_arrays({"reference": arrays.pack("reference", reference, wire, outputs)})
    entry.insert_arrays(arrays.pack_carry(carry, wire, inputs, outputs))
    entry.finish(b"", state)


def _connect(path: Path) -> sqlite3.Connection:
    db = sqlite3.connect(path, isolation_level=None, timeout=queries.LOCK_WAIT_S)
    for pragma, expected in (("journal_mode", "wal"), ("synchronous", 2)):
        value = "WAL" if pragma == "journal_mode" else "FULL"
        db.execute(f"PRAGMA {pragma} = {value}")
        found = db.execute(f"PRAGMA {pragma}").fetchone()[0]
        if found != expected:
            db.close()
            raise RecordUnwritable(
                f"{path}: {pragma} is {found} and must be {value}; put the record on a local disk"
            )
    db.execute("PRAGMA wal_autocheckpoint = 0")
    db.execute(f"PRAGMA journal_size_limit = {KEPT_LOG_BYTES}")
    return db


@contextmanager
def _transaction(db: sqlite3.Connection) -> Iterator[None]:
    db.execute("BEGIN IMMEDIATE")
    try:
        yield
        db.execute("COMMIT")
    except BaseException:
        if db.in_transaction:
            db.execute("ROLLBACK")
        raise


def _sync_directory(path: Path) -> None:
    """Make the new file's name durable, not only its contents."""
    handle = os.open(path.resolve().parent, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _trial_row(
    trial: Trial, outcome: Outcome, timing: TrialTiming, commit_s: float
) -> tuple[Any, ...]:
    """Columns from `purpose` on."""
    return (
        trial.purpose.value,
        trial.finish,
        int(trial.count),
        int(trial.asked_again),
        trial.played_ok,
        float(trial.start_lateness_s),
        timing.started_utc,
        timing.monotonic_ns,
        float(timing.collect_s),
        float(timing.compute_s),
        commit_s,
        outcome.void,
        outcome.late,
        float(outcome.norm),
        outcome.action,
        outcome.sentence,
    )


def sqlite_warning() -> str:
    """What to know about this Python's SQLite; empty if nothing."""
    if sqlite3.sqlite_version_info >= WAL_RESET_FIXED:
        return ""
    return (
        f"SQLite {sqlite3.sqlite_version} can damage a record that two programs write at once "
        "(fixed in 3.51.3): trialrunner is the only writer, other programs must only read"
    )
