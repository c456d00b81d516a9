"""What can be wrong with a record, in words that say what to do."""

import errno
import sqlite3
from pathlib import Path


class RecordError(Exception):
    """Base of all errors of a record; nothing that was committed is lost by any of them."""


class NotARecord(RecordError):
    """The file is not one of ours, or of a newer version."""


class RecordDamaged(RecordError):
    """Stored bytes are not those that were written."""


class RecordUnwritable(RecordError):
    """The disk is full, the file or its directory is read-only, or the device failed."""


def in_words(path: Path, error: sqlite3.Error | OSError) -> RecordError:
    """A foreign error as one of ours."""
    text = str(error)
    full = "disk is full" in text or getattr(error, "errno", None) == errno.ENOSPC
    if full:
        return RecordUnwritable(
            f"{path}: the disk is full; every committed trial is safe. Free space, then start the "
            "same configuration again"
        )
    if "readonly" in text or "unable to open" in text or isinstance(error, PermissionError):
        return RecordUnwritable(
            f"{path}: cannot be written ({text}); check the permissions of file and directory"
        )
    if "not a database" in text:
        return NotARecord(f"{path}: is not a record of trialrunner; choose another file name")
    if "malformed" in text:
        return RecordDamaged(f"{path}: is damaged ({text}); copy it away before anything else")
    return RecordUnwritable(f"{path}: {text}; the record takes no more writes in this process")
