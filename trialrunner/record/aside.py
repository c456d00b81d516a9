"""Make room for a new record: the old one gets another name, nothing is deleted."""

import contextlib
import sqlite3
from pathlib import Path

LOG_FILES = ("-wal", "-shm")


def set_aside(path: Path, utc: str) -> Path:
    """Rename the file `path` after the moment `utc` (RFC 3339); returns the new name.

    Call with the record's lock held: renamed under a daemon that writes, file and log would part.
    Raises OSError.
    """
    # Whatever the log of a killed daemon still holds goes into the file first, so that one rename
    # moves all. A file of another program, or a damaged one, is moved as it is, with its log.
    with contextlib.suppress(sqlite3.Error):
        db = sqlite3.connect(path, isolation_level=None)
        try:
            db.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
        finally:
            db.close()
    target = _free_name(path, "".join(letter for letter in utc if letter.isdigit())[:14])
    for suffix in ("", *LOG_FILES):
        old = path.with_name(path.name + suffix)
        if old.exists():
            old.rename(target.with_name(target.name + suffix))
    return target


def _free_name(path: Path, stamp: str) -> Path:
    name = path.with_name(f"{path.stem}.{stamp}{path.suffix}")
    count = 1
    while name.exists():
        count += 1
        name = path.with_name(f"{path.stem}.{stamp}-{count}{path.suffix}")
    return name
