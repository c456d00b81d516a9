"""What can be wrong with a record, in words that say what to do."""

import errno
import sqlite3
from pathlib import Path

from trialrunner.locks import Busy


class RecordError(Exception):
    """Base of all errors of a record; nothing that was committed is lost by any of them."""


class NotARecord(RecordError):
    """The file is not one of ours, or of another version."""


class RecordDamaged(RecordError):
    """Stored bytes are not those that were written."""


class RecordUnwritable(RecordError):
    """The disk is full, the file or its directory is read-only, or the device failed."""


class RecordMisuse(RecordError):
    """What was handed over does not continue this record; a fault of the program."""


class RecordBusy(Busy, RecordError):
    """Another process writes the record."""


PERMISSION = ("readonly", "unable to open")
"""Words of SQLite where it may not read or write, or not make a file beside the record."""


def in_words(path: Path, error: sqlite3.Error | OSError) -> RecordError:
    """A foreign error as one of ours."""
    text = str(error)
    number = getattr(error, "errno", None)
    if "disk is full" in text or number in (errno.ENOSPC, errno.EDQUOT):
        return RecordUnwritable(
            f"{path}: the disk is full; every committed trial is safe. Free space, then start the "
            "same configuration again"
        )
    if isinstance(error, FileNotFoundError):
        return RecordUnwritable(f"{path}: its directory does not exist; create it")
    if isinstance(error, PermissionError) or any(words in text for words in PERMISSION):
        return RecordUnwritable(
            f"{path}: cannot be opened or written ({text}); check the permissions of the file and "
            "of its directory"
        )
    if "not a database" in text:
        return NotARecord(f"{path}: is not a record of trialrunner; choose another file name")
    if "malformed" in text:
        return RecordDamaged(f"{path}: is damaged ({text}); copy it away before anything else")
    if "locked" in text:
        return RecordUnwritable(
            f"{path}: another program writes in it; close that one, trialrunner must be the only "
            "writer"
        )
    return RecordUnwritable(
        f"{path}: {text}; every committed trial is safe. Check the disk, then start the same "
        "configuration again"
    )
