"""A record read with nothing of the project: SQLite, hashlib and struct alone.

Sources: the SQLite file format (sqlite.org/fileformat2.html, from memory: magic at 0, write and
read version 2 for WAL at 18 and 19, user version at 60, application id at 68, all big-endian),
SHA-256 (FIPS 180-4) by hashlib, IEEE 754 by struct. The project's reader is not imported; its
writer makes the record that is looked at.
"""

import hashlib
import json
import math
import sqlite3
import struct

import numpy as np
import pytest

from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Level, Purpose, Trial, Verdict
from trialrunner.record import RecordWriter, RunFacts, TrialTiming

N = 11
FORMATS = {"<f4": ("<f", 4), "<f8": ("<d", 8)}


def f4(values):
    return np.asarray(values, dtype=np.float32).astype(np.float64)


def feedforward(k):
    return f4(np.sin(np.arange(N) + k)[:, None])


def output(k):
    values = f4(np.cos(np.arange(N) * 0.5 + k)[:, None])
    if k == 2:
        values[4] = np.nan
    return values


LIMITED = np.arange(N)[:, None] % 3 == 0


@pytest.fixture
def shell(tmp_path):
    """A plain read-only SQLite connection to a record of four trials, and its path."""
    path = tmp_path / "run.trialrecord"
    facts = RunFacts("[run]\nname = 'x'\n", {}, {}, "f4", "0.1", "2026-01-01T00:00:00Z")
    zeros = np.zeros((N, 1))

    def carry(k):
        return Carry(feedforward(k), zeros > 0, feedforward(k), zeros)

    writer = RecordWriter.create(path, facts, zeros, RunState(), carry(0))
    for k in range(4):
        trial = Trial(
            index=k,
            purpose=Purpose.LEARN,
            feedforward=feedforward(k),
            reference=zeros,
            output=output(k),
            auxiliary=np.zeros((N, 0)),
            limited=LIMITED,
            start_state=np.array([0.25]),
        )
        verdicts = (Verdict("integrity", Level.WARN, "gaps", math.inf, 1.0, void=k == 2),)
        norm = math.nan if k == 2 else 0.5 / (k + 1)
        done = Outcome(
            verdicts, k == 2, norm, "learn", f"Trial {k}.", RunState(trial=k + 1), carry(k + 1)
        )
        writer.commit_trial(trial, done, TrialTiming("2026-01-01T00:00:01Z", k))
    writer.close()
    db = sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True)
    yield db, path
    db.close()


def decode(dtype, data):
    letter, size = FORMATS[dtype]
    return [struct.unpack(letter, data[i : i + size])[0] for i in range(0, len(data), size)]


def test_the_file_is_sqlite_and_says_whose_it_is(shell):
    """By the bytes of its header, and sound by SQLite's own check."""
    db, path = shell
    header = path.read_bytes()[:100]
    assert header[:16] == b"SQLite format 3\x00"
    assert header[18:20] == b"\x02\x02"
    assert header[60:64] == struct.pack(">I", 2)
    assert header[68:72] == b"TRLR"
    assert db.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
    assert db.execute("PRAGMA foreign_key_check").fetchall() == []


def test_every_table_is_strict(shell):
    """SQLite refuses a value of another type in any column."""
    db, _ = shell
    tables = db.execute("PRAGMA table_list").fetchall()
    ours = [row for row in tables if row[0] == "main" and not row[1].startswith("sqlite_")]
    assert len(ours) == 8
    assert all(row[5] == 1 for row in ours)


def test_every_array_agrees_with_its_sha256_and_its_shape(shell):
    """Recomputed with hashlib; the size follows from type and shape."""
    db, _ = shell
    rows = db.execute("SELECT dtype, shape, sha256, data FROM arrays").fetchall()
    assert len(rows) >= 4 * 4
    for dtype, shape, sha256, data in rows:
        assert hashlib.sha256(data).digest() == sha256
        count = math.prod(json.loads(shape))
        assert len(data) == (-(-count // 8) if dtype == "bits" else count * FORMATS[dtype][1])


def test_what_was_measured_is_found_by_trial_and_decoded_by_hand(shell):
    """The query that the tables' description gives; a missing sample is NaN in the bytes."""
    db, _ = shell
    for k in range(4):
        query = (
            "SELECT dtype, data FROM arrays JOIN trials USING (entry) "
            "WHERE trial = ? AND name = 'output'"
        )
        found = decode(*db.execute(query, (k,)).fetchone())
        for one, expected in zip(found, output(k)[:, 0], strict=True):
            assert one == expected or (math.isnan(one) and math.isnan(expected))


def test_what_was_played_is_found_through_the_entry_that_made_it(shell):
    """The feedforward stands once, with the trial that taught it."""
    db, _ = shell
    for k in range(4):
        query = (
            "SELECT dtype, data FROM arrays JOIN trials ON arrays.entry = trials.carry_entry "
            "WHERE trial = ? AND name = 'next.feedforward'"
        )
        assert decode(*db.execute(query, (k,)).fetchone()) == feedforward(k)[:, 0].tolist()


def test_masks_are_bits_the_first_in_the_highest(shell):
    """Spelled out by hand."""
    db, _ = shell
    (data,) = db.execute("SELECT data FROM arrays WHERE name = 'limited' LIMIT 1").fetchone()
    bits = "".join(f"{byte:08b}" for byte in data)[:N]
    assert bits == "".join("1" if i % 3 == 0 else "0" for i in range(N))


def test_no_json_in_it_says_nan_and_unknown_numbers_are_null(shell):
    """Any JSON parser reads it; SQLite's own function agrees."""
    db, _ = shell

    def refuse(word):
        raise AssertionError(f"{word} is no JSON")

    texts = [value for (value,) in db.execute("SELECT value FROM facts")]
    texts += [state for (state,) in db.execute("SELECT state FROM entries WHERE state NOT NULL")]
    assert len(texts) >= 5 + 6
    for text in texts:
        json.loads(text, parse_constant=refuse)
        assert db.execute("SELECT json_valid(?)", (text,)).fetchone() == (1,)
    assert db.execute("SELECT trial FROM trials WHERE norm IS NULL").fetchall() == [(2,)]
    assert db.execute("SELECT DISTINCT value FROM verdicts").fetchall() == [(math.inf,)]


def test_the_hash_chain_can_be_computed_by_a_stranger(shell):
    """SHA-256 over the link before and one JSON line a row, table by table, bytes as hex."""
    db, _ = shell
    columns = {
        "daemons": ("entry, event, utc, version, platform, config_text", "entry"),
        "trials": (
            "entry, trial, carry_entry, purpose, finish, count, asked_again, played_ok, "
            "start_lateness_s, started_utc, monotonic_ns, collect_s, compute_s, commit_s, void, "
            "late, norm, action, sentence",
            "entry",
        ),
        "verdicts": ("entry, place, guard, level, reason, value, bound, void", "place"),
        "arrays": ("entry, name, dtype, shape, unit, sha256", "id"),
    }
    before = b""
    entries = db.execute("SELECT entry, kind, state, chain FROM entries ORDER BY entry").fetchall()
    assert [entry for entry, *_ in entries] == list(range(7))
    for entry, kind, state, chain in entries:
        lines = [["entries", entry, kind, state]]
        if entry == 0:
            facts = db.execute("SELECT key, value FROM facts ORDER BY key").fetchall()
            lines += [["facts", *row] for row in facts]
        for table, (names, order) in columns.items():
            query = f"SELECT {names} FROM {table} WHERE entry = ? ORDER BY {order}"
            lines += [[table, *row] for row in db.execute(query, (entry,))]
        text = "".join(json.dumps(line, default=bytes.hex) + "\n" for line in lines)
        assert hashlib.sha256(before + text.encode()).digest() == chain
        before = chain
