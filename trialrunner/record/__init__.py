"""The record of a run: one SQLite file that a power cut cannot spoil and anyone can read.

The error is not stored: it is reference minus output, exactly.
"""

from trialrunner.record.errors import (
    NotARecord,
    RecordBusy,
    RecordDamaged,
    RecordError,
    RecordMisuse,
    RecordUnwritable,
)
from trialrunner.record.reader import RecordedTrial, RecordReader, TrialSummary
from trialrunner.record.rows import DaemonRow, RequestRow, RunFacts, Transition, TrialTiming
from trialrunner.record.writer import RecordWriter, sqlite_warning

__all__ = [
    "DaemonRow",
    "NotARecord",
    "RecordBusy",
    "RecordDamaged",
    "RecordError",
    "RecordMisuse",
    "RecordReader",
    "RecordUnwritable",
    "RecordWriter",
    "RecordedTrial",
    "RequestRow",
    "RunFacts",
    "Transition",
    "TrialSummary",
    "TrialTiming",
    "sqlite_warning",
]
