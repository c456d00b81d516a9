"""Tables of a record. One file is one run; `user_version` counts changes of this text.

Everything hangs on `entries`: each transaction adds exactly one, and nothing is ever changed
afterwards. Rows of an entry say in `entry` to which one they belong. To read a trial's output in
any SQLite shell: SELECT data FROM arrays JOIN trials USING (entry) WHERE trial = 7 AND
name = 'output', then decode it as `dtype` and `shape` say, row-major. Booleans ("bits") are eight
to a byte, the first in the highest bit. Numbers that are NaN are NULL.
"""

APPLICATION_ID = int.from_bytes(b"TRLR")
SCHEMA_VERSION = 2

TABLES = """
CREATE TABLE entries (
    entry INTEGER PRIMARY KEY,       -- 0: what the run began with
    kind TEXT NOT NULL,              -- run, daemon, trial, request, log
    state TEXT,                      -- JSON: the run state after it; NULL: as before
    chain BLOB NOT NULL              -- SHA-256 over the chain before and all rows of this entry
) STRICT;
CREATE TABLE facts (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE daemons (               -- each time that a daemon takes the record up or lays it down
    entry INTEGER PRIMARY KEY, event TEXT NOT NULL, utc TEXT NOT NULL, version TEXT NOT NULL,
    platform TEXT NOT NULL,          -- JSON: versions of what computes
    config_text TEXT NOT NULL        -- as run from here on; empty on laying down
) STRICT;
CREATE TABLE trials (
    entry INTEGER NOT NULL UNIQUE, trial INTEGER PRIMARY KEY,
    carry_entry INTEGER NOT NULL,    -- entry whose next.feedforward it played
    purpose TEXT NOT NULL, finish TEXT NOT NULL, count INTEGER NOT NULL,
    asked_again INTEGER NOT NULL, played_ok INTEGER NOT NULL,
    start_lateness_s REAL, started_utc TEXT NOT NULL, monotonic_ns INTEGER NOT NULL,
    collect_s REAL, compute_s REAL,
    commit_s REAL,                   -- how long the commit before this one took
    void INTEGER NOT NULL, late INTEGER NOT NULL,
    norm REAL,                       -- NULL: the trial is incomplete
    action TEXT NOT NULL, sentence TEXT NOT NULL
) STRICT;
CREATE TABLE verdicts (
    entry INTEGER NOT NULL, place INTEGER NOT NULL, guard TEXT NOT NULL, level TEXT NOT NULL,
    reason TEXT NOT NULL, value REAL, bound REAL, void INTEGER NOT NULL,
    PRIMARY KEY (entry, place)
) STRICT, WITHOUT ROWID;
CREATE TABLE requests (
    entry INTEGER PRIMARY KEY, id TEXT NOT NULL UNIQUE, kind TEXT NOT NULL, target TEXT NOT NULL,
    who TEXT NOT NULL, why TEXT NOT NULL, asked_utc TEXT NOT NULL,
    effect_trial INTEGER NOT NULL,   -- index of the state that it changed, or would have
    changes_state INTEGER NOT NULL, ok INTEGER NOT NULL, answer TEXT NOT NULL
) STRICT;
CREATE TABLE transitions (
    entry INTEGER NOT NULL, place INTEGER NOT NULL, utc TEXT NOT NULL, trial INTEGER NOT NULL,
    before TEXT NOT NULL, event TEXT NOT NULL, after TEXT NOT NULL, cause TEXT NOT NULL,
    PRIMARY KEY (entry, place)
) STRICT, WITHOUT ROWID;
CREATE TABLE arrays (
    id INTEGER PRIMARY KEY,          -- a rowid keeps large blobs out of the index
    entry INTEGER NOT NULL,
    name TEXT NOT NULL,              -- reference, output...; for the next trial: next.*
    dtype TEXT NOT NULL,             -- NumPy's: <f4, <f8; or bits
    shape TEXT NOT NULL,             -- JSON
    unit TEXT NOT NULL,              -- JSON: UCUM code of each column, [] if it has none
    sha256 BLOB NOT NULL, data BLOB NOT NULL,
    UNIQUE (entry, name)
) STRICT;
"""

COLUMNS = {
    "facts": ("key", "value"),
    "daemons": ("entry", "event", "utc", "version", "platform", "config_text"),
    "trials": (
        "entry", "trial", "carry_entry", "purpose", "finish", "count", "asked_again", "played_ok",
        "start_lateness_s", "started_utc", "monotonic_ns", "collect_s", "compute_s", "commit_s",
        "void", "late", "norm", "action", "sentence",
    ),
    "verdicts": ("entry", "place", "guard", "level", "reason", "value", "bound", "void"),
    "requests": (
        "entry", "id", "kind", "target", "who", "why", "asked_utc", "effect_trial",
        "changes_state", "ok", "answer",
    ),
    "transitions": ("entry", "place", "utc", "trial", "before", "event", "after", "cause"),
    "arrays": ("entry", "name", "dtype", "shape", "unit", "sha256", "data"),
}  # fmt: skip
"""Columns in the order of the tables, which is also the order in which the hash chain takes them.
The chain leaves `data` out: its SHA-256 stands for it."""
