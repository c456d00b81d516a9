"""The one read-write connection to a record; used from one thread.

A trial, its verdicts, the state after it and the next feedforward are one transaction: a kill at
any instruction leaves either all of it or nothing.
"""

import json
import math
import os
import sqlite3
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Array, Trial, Verdict
from trialrunner.locks import Lock, hold_lock
from trialrunner.record import arrays, queries
from trialrunner.record.errors import RecordError, RecordUnwritable, in_words
from trialrunner.record.rows import RequestRow, RunFacts, Transition, TrialTiming
from trialrunner.record.schema import APPLICATION_ID, SCHEMA_VERSION, TABLES

Fault = Callable[[str], None]
"""Called with the name of each step, for tests that make a step fail."""

WAL_RESET_FIXED = (3, 51, 3)
MAX_PENDING_TRANSITIONS = 10_000
"""Steps of the cycle kept until the next commit; older ones are dropped beyond that."""


class RecordWriter:
    """Writes one record. After a failed write it refuses to go on: nothing is retried in hope."""

    def __init__(self, path: Path, connection: sqlite3.Connection, lock: Lock) -> None:
        self.path = path
        self._db = connection
        self._lock = lock
        self._failed = ""
        self._transitions: deque[Transition] = deque(maxlen=MAX_PENDING_TRANSITIONS)
        self.facts: RunFacts
        self.state: RunState
        self.carry: Carry
        self._chain = b""

    # -- opening ----------------------------------------------------------------------------

    @classmethod
    def create(
        cls, path: Path, facts: RunFacts, reference: Array, state: RunState, carry: Carry
    ) -> "RecordWriter":
        """A new record. Raises Busy, RecordError; a file of that name is never overwritten."""
        lock = _lock(path)
        try:
            if path.exists():
                raise RecordUnwritable(f"{path}: exists already; choose another name")
            writer = cls(path, _connect(path), lock)
            writer._begin_run(facts, reference, state, carry)
        except (sqlite3.Error, OSError) as error:
            lock.release()
            raise in_words(path, error) from None
        except RecordError:
            lock.release()
            raise
        return writer

    @classmethod
    def open(cls, path: Path) -> "RecordWriter":
        """An existing record, to go on with. Raises Busy, RecordError."""
        lock = _lock(path)
        try:
            queries.require_ours(path)
            writer = cls(path, _connect(path), lock)
            writer._resume()
        except (sqlite3.Error, OSError) as error:
            lock.release()
            raise in_words(path, error) from None
        except RecordError:
            lock.release()
            raise
        return writer

    def _begin_run(self, facts: RunFacts, reference: Array, state: RunState, carry: Carry) -> None:
        self.facts, self.state, self.carry = facts, state, carry
        with self._transaction():
            for statement in TABLES.split(";\n"):
                if statement.strip():
                    self._db.execute(statement)
            rows = facts.to_rows() | {"state": _json(state.to_json())}
            self._db.executemany("INSERT INTO facts VALUES (?, ?)", rows.items())
            blobs = {"reference": arrays.pack(reference, facts.sample_type)}
            self._put(-1, blobs | arrays.pack_carry(carry, facts.sample_type))
        self._db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        self._db.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
        self.checkpoint()
        _sync_directory(self.path)

    def _resume(self) -> None:
        self.facts = queries.facts(self._db)
        self.state = queries.last_state(self._db)
        self._chain = queries.last_chain(self._db)
        n_outputs = queries.array(self._db, -1, "reference").shape[1]
        self.carry = queries.carry_before(self._db, self.state.trial, n_outputs)

    # -- writing ----------------------------------------------------------------------------

    def commit_trial(self, trial: Trial, outcome: Outcome, timing: TrialTiming) -> None:
        """Store a trial and all that follows from it. Raises RecordError, having stored nothing."""
        own = self._own_blobs(trial)
        row = _trial_row(trial, outcome, timing)
        chain = queries.chain_link(self._chain, row, queries.digest(self._db, trial.index - 1), own)
        with self._transaction():
            marks = ", ".join("?" * (len(row) + 1))
            self._db.execute(f"INSERT INTO trials VALUES ({marks})", (*row, chain))
            self._put(trial.index, own | arrays.pack_carry(outcome.carry, self.facts.sample_type))
            self._db.executemany(
                "INSERT INTO verdicts VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
                [
                    (trial.index, place, *_verdict_row(verdict))
                    for place, verdict in enumerate(outcome.verdicts)
                ],
            )
            self._flush_transitions()
        self._chain = chain
        self.state, self.carry = outcome.state, outcome.carry

    def commit_request(self, row: RequestRow, state: RunState, carry: Carry | None) -> None:
        """Store an operator's request; with `carry`, also what it changed for the next trial."""
        with self._transaction():
            self._db.execute(
                "INSERT INTO requests VALUES (NULL, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                _request_row(row, state, carry is not None),
            )
            if carry is not None:
                self._replace_carry(state.trial - 1, carry)
            self._flush_transitions()
        if carry is not None:
            self.state, self.carry = state, carry

    def _replace_carry(self, trial: int, carry: Carry) -> None:
        self._db.execute(
            "DELETE FROM arrays WHERE trial = ? AND name GLOB ?", (trial, arrays.NEXT + "*")
        )
        self._put(trial, arrays.pack_carry(carry, self.facts.sample_type))

    def log_transition(self, **values: Any) -> None:
        """Note a step of the cycle; stored with the next commit. Callable from any thread."""
        self._transitions.append(Transition(**values))

    def checkpoint(self) -> None:
        """Move the write-ahead log into the file, while nobody waits for a commit."""
        with self._in_words():
            self._db.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()

    def recall(self, trial: int) -> Array:
        """The learned feedforward, (n_samples, n_inputs), with which a trial was run."""
        with self._in_words():
            return queries.learned_before(self._db, trial)

    def find_request(self, request_id: str) -> str | None:
        """The answer given to a request of that id, as JSON."""
        with self._in_words():
            found = self._db.execute("SELECT answer FROM requests WHERE id = ?", (request_id,))
            row = found.fetchone()
        return None if row is None else str(row[0])

    def close(self) -> None:
        """Store what waits, empty the log, give the lock back. Harmless when repeated."""
        try:
            if not self._failed:
                with self._transaction():
                    self._flush_transitions()
                self.checkpoint()
        except RecordError:
            # The failure was told when it happened; closing must not hide it.
            pass
        finally:
            self._db.close()
            self._lock.release()

    # -- helpers ----------------------------------------------------------------------------

    def _own_blobs(self, trial: Trial) -> dict[str, arrays.Blob]:
        sample_type = self.facts.sample_type
        blobs = {"output": arrays.pack(trial.output, sample_type)}
        if trial.auxiliary.size:
            blobs["auxiliary"] = arrays.pack(trial.auxiliary, sample_type)
        if trial.limited.any():
            blobs["limited"] = arrays.pack(trial.limited, arrays.BITS)
        blobs["start_state"] = arrays.pack(trial.start_state, "f8")
        return blobs

    def _put(self, trial: int, blobs: Mapping[str, arrays.Blob]) -> None:
        self._db.executemany(
            "INSERT INTO arrays VALUES (?, ?, ?, ?, ?, ?, ?)",
            [(trial, name, *blob.row()) for name, blob in blobs.items()],
        )

    def _flush_transitions(self) -> None:
        waiting = [self._transitions.popleft() for _ in range(len(self._transitions))]
        self._db.executemany(
            "INSERT INTO transitions VALUES (NULL, ?, ?, ?, ?, ?, ?)",
            [(t.utc, t.trial, t.before, t.event, t.after, t.cause) for t in waiting],
        )

    @contextmanager
    def _transaction(self) -> Iterator[None]:
        with self._in_words():
            self._db.execute("BEGIN IMMEDIATE")
            try:
                yield
                self._db.execute("COMMIT")
            except BaseException:
                if self._db.in_transaction:
                    self._db.execute("ROLLBACK")
                raise

    @contextmanager
    def _in_words(self) -> Iterator[None]:
        if self._failed:
            raise RecordUnwritable(f"{self.path}: refuses to go on after: {self._failed}")
        try:
            yield
        except (sqlite3.Error, OSError) as error:
            said = in_words(self.path, error)
            self._failed = str(said)
            raise said from None


def _lock(path: Path) -> Lock:
    return hold_lock(path.with_name(path.name + ".lock"), f"the record {path}")


def _connect(path: Path) -> sqlite3.Connection:
    db = sqlite3.connect(path, isolation_level=None, timeout=5.0)
    # A reader that is just looking must not make a commit fail: the WAL lets both go on.
    for pragma, expected in (("journal_mode", "wal"), ("synchronous", 2)):
        value = "WAL" if pragma == "journal_mode" else "FULL"
        db.execute(f"PRAGMA {pragma} = {value}")
        found = db.execute(f"PRAGMA {pragma}").fetchone()[0]
        if found != expected:
            db.close()
            raise RecordUnwritable(f"{path}: {pragma} is {found} and must be {value}")
    db.execute("PRAGMA wal_autocheckpoint = 0")
    return db


def sqlite_warning() -> str:
    """What to know about this Python's SQLite; empty if nothing."""
    if sqlite3.sqlite_version_info >= WAL_RESET_FIXED:
        return ""
    return (
        f"SQLite {sqlite3.sqlite_version} can damage a record that two programs write at once "
        "(fixed in 3.51.3): trialrunner is the only writer, other programs must only read"
    )


def _sync_directory(path: Path) -> None:
    """Make the new file's name durable, not only its contents."""
    handle = os.open(path.resolve().parent, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _trial_row(trial: Trial, outcome: Outcome, timing: TrialTiming) -> tuple[Any, ...]:
    """All columns of a row but the chain."""
    return (
        trial.index,
        trial.purpose.value,
        trial.finish,
        trial.count,
        trial.asked_again,
        trial.played_ok,
        trial.start_lateness_s,
        timing.started_utc,
        timing.monotonic_ns,
        timing.collect_s,
        timing.compute_s,
        outcome.void,
        outcome.late,
        _finite(outcome.norm),
        outcome.action,
        outcome.sentence,
        _json(outcome.state.to_json()),
    )


def _verdict_row(verdict: Verdict) -> tuple[Any, ...]:
    value, limit = _finite(verdict.value), _finite(verdict.limit)
    return verdict.guard, verdict.level.word, verdict.reason, value, limit, verdict.void


def _request_row(row: RequestRow, state: RunState, changed: bool) -> tuple[Any, ...]:
    asked = (row.id, row.kind, row.target, row.who, row.why, row.asked_utc)
    effect_trial = state.trial if changed else row.effect_trial
    after = _json(state.to_json()) if changed else None
    return (*asked, effect_trial, changed, row.ok, row.answer, after)


def _finite(value: float) -> float | None:
    """SQLite stores NaN as NULL; say so openly, and keep infinities out."""
    return float(value) if math.isfinite(value) else None


def _json(values: Any) -> str:
    return json.dumps(values, allow_nan=False, separators=(",", ":"))
