"""Reading a record through any connection; used by writer and reader alike."""

import hashlib
import json
import sqlite3
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Array
from trialrunner.record import arrays
from trialrunner.record.errors import NotARecord, RecordDamaged, RecordUnwritable, in_words
from trialrunner.record.rows import RunFacts
from trialrunner.record.schema import APPLICATION_ID, SCHEMA_VERSION

_ROW = "dtype, shape, unit, sha256, data"


def require_ours(path: Path) -> None:
    """Raise NotARecord unless the file is a record that this version reads."""
    if not path.exists():
        raise RecordUnwritable(f"{path}: there is no such record")
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
        raise NotARecord(f"{path}: is an SQLite file of another program; choose another file name")
    if version != SCHEMA_VERSION:
        raise NotARecord(
            f"{path}: has the layout {version}, this trialrunner reads {SCHEMA_VERSION}; "
            "use the version that wrote it"
        )


def read_only(path: Path) -> sqlite3.Connection:
    """A connection that can neither write nor checkpoint."""
    uri = path.resolve().as_uri() + "?mode=ro"
    return sqlite3.connect(uri, uri=True, isolation_level=None, timeout=5.0)


def facts(db: sqlite3.Connection) -> RunFacts:
    rows = dict(db.execute("SELECT key, value FROM facts WHERE key != 'state'").fetchall())
    return RunFacts.from_rows(rows)


def array(db: sqlite3.Connection, trial: int, name: str) -> Any:
    """Raises RecordDamaged if it is missing or not what was written."""
    query = f"SELECT {_ROW} FROM arrays WHERE trial = ? AND name = ?"
    row = db.execute(query, (trial, name)).fetchone()
    if row is None:
        raise RecordDamaged(f"trial {trial}: the array {name} is missing")
    return arrays.unpack(f"trial {trial}, {name}", row)


def arrays_of(db: sqlite3.Connection, trial: int) -> dict[str, Any]:
    """Every array of a trial by name."""
    query = f"SELECT name, {_ROW} FROM arrays WHERE trial = ?"
    return {
        name: arrays.unpack(f"trial {trial}, {name}", tuple(row))
        for name, *row in db.execute(query, (trial,))
    }


def first_state(db: sqlite3.Connection) -> RunState:
    (text,) = db.execute("SELECT value FROM facts WHERE key = 'state'").fetchone()
    return RunState.from_json(json.loads(text))


def last_state(db: sqlite3.Connection) -> RunState:
    """After the last trial and the requests that followed it."""
    row = db.execute("SELECT trial, state FROM trials ORDER BY trial DESC LIMIT 1").fetchone()
    after, text = (-1, None) if row is None else row
    changed = db.execute(
        "SELECT state FROM requests WHERE changes_state AND effect_trial > ? "
        "ORDER BY place DESC LIMIT 1",
        (after,),
    ).fetchone()
    if changed is not None:
        text = changed[0]
    return first_state(db) if text is None else RunState.from_json(json.loads(text))


def carry_before(db: sqlite3.Connection, trial: int, n_outputs: int) -> Carry:
    """The arrays with which a trial began, or will begin."""
    return arrays.unpack_carry(arrays_of(db, trial - 1), n_outputs)


def learned_before(db: sqlite3.Connection, trial: int) -> Array:
    """The learned feedforward with which a trial was run. Raises CoreError for an unknown one."""
    ran = db.execute("SELECT 1 FROM trials WHERE trial = ?", (trial,)).fetchone()
    if ran is None:
        raise CoreError(f"trial {trial} is not in the record, so its feedforward is not known")
    names = ("learned", "feedforward")
    for name in names:
        query = f"SELECT {_ROW} FROM arrays WHERE trial = ? AND name = ?"
        row = db.execute(query, (trial - 1, arrays.NEXT + name)).fetchone()
        if row is not None:
            found: Array = arrays.unpack(f"trial {trial}, {name}", row)
            return found
    raise RecordDamaged(f"trial {trial}: its feedforward is missing")


def last_chain(db: sqlite3.Connection) -> bytes:
    row = db.execute("SELECT chain FROM trials ORDER BY trial DESC LIMIT 1").fetchone()
    return b"" if row is None else bytes(row[0])


def digest(db: sqlite3.Connection, trial: int) -> bytes:
    """SHA-256 of the feedforward that a trial left for the next one."""
    row = db.execute(
        "SELECT sha256 FROM arrays WHERE trial = ? AND name = ?",
        (trial, arrays.NEXT + "feedforward"),
    ).fetchone()
    return b"" if row is None else bytes(row[0])


def chain_link(
    before: bytes, row: tuple[Any, ...], played: bytes, own: Mapping[str, arrays.Blob]
) -> bytes:
    """SHA-256 over the link before, the row, the feedforward played and what was measured."""
    sums = {name: blob.sha256 for name, blob in own.items()}
    return chain_of(before, row, played, sums)


def chain_of(
    before: bytes, row: tuple[Any, ...], played: bytes, sums: Mapping[str, bytes]
) -> bytes:
    link = hashlib.sha256(before)
    link.update(json.dumps([_plain(value) for value in row]).encode())
    link.update(played)
    for name in sorted(sums):
        link.update(name.encode())
        link.update(sums[name])
    return link.digest()


def _plain(value: Any) -> Any:
    """SQLite hands a bool back as an integer."""
    return int(value) if isinstance(value, bool) else value
