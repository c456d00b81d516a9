"""Reading a record through any connection; used by writer and reader alike."""

import json
import sqlite3
from pathlib import Path
from typing import Any

from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Array
from trialrunner.record import arrays
from trialrunner.record.errors import (
    PERMISSION,
    NotARecord,
    RecordDamaged,
    RecordUnwritable,
    in_words,
)
from trialrunner.record.rows import RunFacts
from trialrunner.record.schema import APPLICATION_ID, SCHEMA_VERSION

BLOB = "dtype, shape, unit, sha256, data"

LOCK_WAIT_S = 5.0
"""Patience with a program that holds SQLite's own lock for a moment."""


def require_ours(path: Path) -> None:
    """Raise NotARecord unless the file is a record that this version reads."""
    if not path.exists():
        raise RecordUnwritable(f"{path}: there is no such record")
    if not path.is_file():
        raise NotARecord(f"{path}: is not a file; name the record itself")
    try:
        db = read_only(path)
        try:
            (application,) = db.execute("PRAGMA application_id").fetchone()
            (version,) = db.execute("PRAGMA user_version").fetchone()
        finally:
            db.close()
    except (sqlite3.Error, OSError) as error:
        raise in_words(path, error) from None
    if application != APPLICATION_ID:
        raise NotARecord(
            f"{path}: is a file of another program, not a record of trialrunner; choose another "
            "file name"
        )
    if version != SCHEMA_VERSION:
        age = "newer" if version > SCHEMA_VERSION else "older"
        raise NotARecord(
            f"{path}: has the {age} layout {version}, this trialrunner reads {SCHEMA_VERSION}; "
            "use the version that wrote it"
        )


def read_only(path: Path) -> sqlite3.Connection:
    """A connection that can neither write nor checkpoint."""
    uri = path.resolve().as_uri() + "?mode=ro"
    db = _connect(uri)
    try:
        db.execute("SELECT 1 FROM sqlite_schema").fetchone()
    except sqlite3.OperationalError as error:
        db.close()
        log = path.with_name(path.name + "-wal")
        refused = any(words in str(error) for words in PERMISSION)
        if not refused or (log.exists() and log.stat().st_size):
            raise
        # A finished record on a read-only medium: nobody can be writing it.
        return _connect(uri + "&immutable=1")
    return db


def _connect(uri: str) -> sqlite3.Connection:
    return sqlite3.connect(uri, uri=True, isolation_level=None, timeout=LOCK_WAIT_S)


def facts(db: sqlite3.Connection) -> RunFacts:
    return RunFacts.from_rows(dict(db.execute("SELECT key, value FROM facts").fetchall()))


def array(db: sqlite3.Connection, entry: int, name: str) -> Any:
    """Raises RecordDamaged if it is missing or not what was written."""
    query = f"SELECT {BLOB} FROM arrays WHERE entry = ? AND name = ?"
    row = db.execute(query, (entry, name)).fetchone()
    if row is None:
        raise RecordDamaged(f"{where(db, entry)}: the array {name} is missing")
    return arrays.unpack(f"{where(db, entry)}, {name}", row)


def arrays_of(db: sqlite3.Connection, entry: int, left_for_next: bool) -> dict[str, Any]:
    """By name the arrays of an entry: its own, or those that it left for the next trial."""
    test = "GLOB" if left_for_next else "NOT GLOB"
    query = f"SELECT name, {BLOB} FROM arrays WHERE entry = ? AND name {test} '{arrays.NEXT}*'"
    owner = where(db, entry)
    return {
        name: arrays.unpack(f"{owner}, {name}", tuple(row))
        for name, *row in db.execute(query, (entry,))
    }


def where(db: sqlite3.Connection, entry: int) -> str:
    """An entry in words."""
    row = db.execute("SELECT trial FROM trials WHERE entry = ?", (entry,)).fetchone()
    return f"entry {entry}" if row is None else f"trial {row[0]}"


def state_after(db: sqlite3.Connection, entry: int) -> RunState:
    """The run state that an entry left: its own or the last one before it."""
    row = db.execute(
        "SELECT state FROM entries WHERE entry <= ? AND state IS NOT NULL "
        "ORDER BY entry DESC LIMIT 1",
        (entry,),
    ).fetchone()
    if row is None:
        raise RecordDamaged(f"entry {entry}: there is no run state")
    return RunState.from_json(json.loads(row[0]))


def last_entry(db: sqlite3.Connection) -> tuple[int, bytes]:
    """Number and chain of the last entry; (-1, b"") in an empty record."""
    row = db.execute("SELECT entry, chain FROM entries ORDER BY entry DESC LIMIT 1").fetchone()
    return (-1, b"") if row is None else (int(row[0]), bytes(row[1]))


def carry_entry(db: sqlite3.Connection, before_trial: int | None = None) -> int:
    """The entry whose arrays a trial began with; None stands for the trial to come."""
    if before_trial is not None:
        query = "SELECT carry_entry FROM trials WHERE trial = ?"
        row = db.execute(query, (before_trial,)).fetchone()
        if row is not None:
            return int(row[0])
    row = db.execute(
        "SELECT entry FROM arrays WHERE name = ? ORDER BY entry DESC LIMIT 1",
        (arrays.FEEDFORWARD,),
    ).fetchone()
    if row is None:
        raise RecordDamaged("the feedforward of the next trial is missing")
    return int(row[0])


def carry_of(db: sqlite3.Connection, entry: int, n_outputs: int) -> Carry | None:
    """The arrays that an entry left for the next trial; None where it left them as they were."""
    found = arrays_of(db, entry, left_for_next=True)
    return arrays.unpack_carry(found, n_outputs) if found else None


def learned_before(db: sqlite3.Connection, trial: int) -> Array:
    """The learned feedforward with which a trial was run. Raises CoreError for an unknown one."""
    row = db.execute("SELECT carry_entry FROM trials WHERE trial = ?", (trial,)).fetchone()
    if row is None:
        raise CoreError(f"trial {trial} is not in the record, so its feedforward is not known")
    query = "SELECT 1 FROM arrays WHERE entry = ? AND name = ?"
    own = db.execute(query, (row[0], arrays.NEXT + "learned")).fetchone()
    found: Array = array(db, row[0], arrays.NEXT + ("learned" if own else "feedforward"))
    return found
