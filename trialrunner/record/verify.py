"""Everything that is not as written: SQLite's own check, each array's sum, the hash chain."""

import sqlite3
from collections.abc import Iterator

from trialrunner.record import queries
from trialrunner.record.chain import HASHED, Row, link
from trialrunner.record.errors import RecordDamaged


def problems(db: sqlite3.Connection) -> Iterator[str]:
    """One sentence each; none for a sound record. Raises sqlite3.Error where SQLite cannot read."""
    for (text,) in db.execute("PRAGMA integrity_check"):
        if text != "ok":
            yield f"SQLite: {text}"
    yield from _bad_arrays(db)
    yield from _broken_links(db)


def _bad_arrays(db: sqlite3.Connection) -> Iterator[str]:
    for entry, name in db.execute("SELECT entry, name FROM arrays ORDER BY id"):
        try:
            queries.array(db, entry, name)
        except RecordDamaged as error:
            yield str(error)


def _broken_links(db: sqlite3.Connection) -> Iterator[str]:
    """The first broken link only: all after it follow from it."""
    before, expected = b"", 0
    for *head, chain in db.execute("SELECT entry, kind, state, chain FROM entries ORDER BY entry"):
        entry = head[0]
        if entry != expected:
            yield f"entry {expected} is missing"
            return
        if link(before, tuple(head), _rows_of(db, entry)) != chain:
            yield f"{queries.where(db, entry)}: its rows do not agree with the hash chain"
            return
        before, expected = chain, entry + 1
    yield from _strays(db, expected)


def _rows_of(db: sqlite3.Connection, entry: int) -> Iterator[tuple[str, Row]]:
    """The rows of an entry in the order in which they were hashed."""
    for table, columns in HASHED.items():
        belongs, order = "entry = ?", "rowid"
        if table == "facts":
            belongs, order = "? = 0", "key"
        elif "place" in columns:
            order = "place"
        query = f"SELECT {', '.join(columns)} FROM {table} WHERE {belongs} ORDER BY {order}"
        for row in db.execute(query, (entry,)):
            yield table, row


def _strays(db: sqlite3.Connection, entries: int) -> Iterator[str]:
    """Rows that belong to no entry are in no link."""
    for table in HASHED:
        if table == "facts":
            continue
        query = f"SELECT count(*) FROM {table} WHERE entry < 0 OR entry >= ?"
        (count,) = db.execute(query, (entries,)).fetchone()
        if count:
            yield f"{table}: {count} rows belong to no entry"
