"""Tables of a record. One file is one run; `user_version` counts changes of this text."""

APPLICATION_ID = int.from_bytes(b"TRLR")
SCHEMA_VERSION = 1

TABLES = """
CREATE TABLE facts (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE arrays (
    trial INTEGER NOT NULL,          -- -1: belongs to the run
    name TEXT NOT NULL,              -- of the trial: output...; after it: next.feedforward...
    dtype TEXT NOT NULL, shape TEXT NOT NULL, unit TEXT NOT NULL, sha256 BLOB NOT NULL,
    data BLOB NOT NULL,
    PRIMARY KEY (trial, name)
) STRICT, WITHOUT ROWID;
CREATE TABLE trials (
    trial INTEGER PRIMARY KEY,
    purpose TEXT NOT NULL, finish TEXT NOT NULL, count INTEGER NOT NULL,
    asked_again INTEGER NOT NULL, played_ok INTEGER NOT NULL,
    start_lateness_s REAL NOT NULL, started_utc TEXT NOT NULL, monotonic_ns INTEGER NOT NULL,
    collect_s REAL NOT NULL, compute_s REAL NOT NULL,
    void INTEGER NOT NULL, late INTEGER NOT NULL,
    norm REAL,                       -- NULL: the trial is incomplete
    action TEXT NOT NULL, sentence TEXT NOT NULL,
    state TEXT NOT NULL,             -- JSON: the run state after the trial
    chain BLOB NOT NULL              -- SHA-256 over the row before and all that belongs to this one
) STRICT;
CREATE TABLE verdicts (
    trial INTEGER NOT NULL, place INTEGER NOT NULL, guard TEXT NOT NULL, level TEXT NOT NULL,
    reason TEXT NOT NULL, value REAL, bound REAL, void INTEGER NOT NULL,
    PRIMARY KEY (trial, place)
) STRICT, WITHOUT ROWID;
CREATE TABLE requests (
    place INTEGER PRIMARY KEY, id TEXT NOT NULL UNIQUE, kind TEXT NOT NULL, target TEXT NOT NULL,
    who TEXT NOT NULL, why TEXT NOT NULL, asked_utc TEXT NOT NULL,
    effect_trial INTEGER NOT NULL,   -- index of the state that it changed, or would have
    changes_state INTEGER NOT NULL, ok INTEGER NOT NULL, answer TEXT NOT NULL,
    state TEXT                       -- JSON: the run state after it, where it changed
) STRICT;
CREATE TABLE transitions (
    place INTEGER PRIMARY KEY, utc TEXT NOT NULL, trial INTEGER NOT NULL,
    before TEXT NOT NULL, event TEXT NOT NULL, after TEXT NOT NULL, cause TEXT NOT NULL
) STRICT;
"""
