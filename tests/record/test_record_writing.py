"""The record: one transaction a trial, exact arrays, nothing changed afterwards."""

import gc
import json
import math
import sqlite3
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import RunState
from trialrunner.core.trial import Level, Verdict
from trialrunner.record import (
    RecordBusy,
    RecordMisuse,
    RecordReader,
    RecordUnwritable,
    arrays,
    sqlite_warning,
)
from trialrunner.record import writer as writer_module

ODD = [0.0, -0.0, math.nan, math.inf, -math.inf, 5e-324, 1 / 3]


def count(path, query, *values):
    db = sqlite3.connect(path)
    try:
        return db.execute(query, values).fetchone()[0]
    finally:
        db.close()


def test_what_was_committed_reads_back_bit_for_bit(parts, writer, path):
    """Arrays, verdicts, norm and state of every trial, and the chain is whole."""
    parts.fill(writer, 3)
    writer.close()
    with RecordReader(path) as reader:
        rows = list(reader.trials())
        assert reader.facts == parts.facts()
        assert [row.summary.index for row in rows] == [0, 1, 2]
        for k, row in enumerate(rows):
            expected = parts.trial(k, parts.carry(k).feedforward)
            for name in ("feedforward", "reference", "output", "auxiliary", "limited", "error"):
                assert arrays.same_bits(getattr(row.trial, name), getattr(expected, name)), name
            assert row.verdicts == parts.outcome(k, None).verdicts
            assert row.summary.norm == 0.1 * (k + 1)
            assert row.summary.state == parts.outcome(k, None).state
            assert reader.state_after(k) == row.summary.state
            assert reader.trial(k).summary == row.summary
        assert reader.verify() == []
        indices, norms = reader.norms()
        assert indices.tolist() == [0, 1, 2]
        assert norms.tolist() == [row.summary.norm for row in rows]


def test_the_error_is_derived_exactly_and_not_stored(parts, writer, path):
    """Reference minus output is the same operation on the same numbers."""
    made = parts.trial(0, parts.carry(0).feedforward)
    writer.commit_trial(made, parts.outcome(0, parts.carry(1)), parts.TIMING)
    assert count(path, "SELECT count(*) FROM arrays WHERE name LIKE '%error%'") == 0
    with RecordReader(path) as reader:
        assert arrays.same_bits(reader.trial(0).trial.error, made.error)


def test_missing_samples_stay_missing_and_numbers_that_are_none_stay_so(parts, writer, path):
    """NaN lives in blobs and as NULL; infinities are numbers to SQLite."""
    output = parts.f4(np.zeros((parts.N, parts.NY)))
    output[7:9] = np.nan
    made = parts.trial(0, parts.carry(0).feedforward, output=output)
    verdicts = (Verdict("integrity", Level.WARN, "gaps", math.inf, 0.0, void=True),)
    result = parts.outcome(0, parts.carry(0), norm=math.nan, void=True, verdicts=verdicts)
    writer.commit_trial(made, result, parts.TIMING)
    again = parts.trial(1, parts.carry(0).feedforward)
    writer.commit_trial(again, parts.outcome(1, parts.carry(0), norm=math.inf), parts.TIMING)
    with RecordReader(path) as reader:
        row = reader.trial(0)
        assert arrays.same_bits(row.trial.output, output)
        assert math.isnan(row.summary.norm)
        assert row.verdicts == verdicts
        assert reader.trial(1).summary.norm == math.inf
        assert reader.verify() == []
    assert count(path, "SELECT norm IS NULL FROM trials WHERE trial = 0") == 1


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.one_of(st.sampled_from(ODD), st.floats(width=64)), min_size=1, max_size=30),
    st.sampled_from(["f4", "f8"]),
)
def test_an_array_comes_back_with_every_bit_or_is_refused(values, sample_type):
    """Signed zeros, subnormals and infinities too; what the wire's type cannot hold is refused."""
    array = np.array(values)
    with np.errstate(over="ignore"):
        fits = np.array_equal(array.astype(sample_type), array, equal_nan=True)
    if not fits:
        with pytest.raises(RecordMisuse, match="wish: expected values that <f4 holds exactly"):
            arrays.pack("wish", array, sample_type)
        return
    blob = arrays.pack("wish", array, sample_type)
    found = arrays.unpack("wish", blob.row())
    if sample_type == "f8":
        assert arrays.same_bits(found, array)
    else:
        np.testing.assert_array_equal(found, array)
        np.testing.assert_array_equal(np.signbit(found[found == 0]), np.signbit(array[array == 0]))


@given(st.lists(st.booleans(), min_size=1, max_size=40))
def test_masks_are_packed_eight_to_a_byte(flags):
    """And come back whatever their length."""
    mask = np.array(flags)[:, None]
    blob = arrays.pack("mask", mask, "f4")
    assert len(blob.data) == -(-len(flags) // 8)
    assert arrays.same_bits(arrays.unpack("mask", blob.row()), mask)


def test_arrays_of_another_type_or_shape_are_never_the_same_bits():
    """Though their bytes may be."""
    assert not arrays.same_bits(np.zeros(4, dtype=np.float32), np.zeros(4))
    assert not arrays.same_bits(np.zeros((4, 1)), np.zeros((2, 2)))
    assert arrays.same_bits(np.zeros((4, 2))[::2], np.zeros((2, 2)))


def test_a_resumed_writer_goes_on_with_the_same_state_and_arrays(parts, writer, path):
    """State and carry, law's and floor's arrays included, bit for bit."""
    after = parts.carry(
        1,
        clipped=np.arange(parts.N * parts.NU).reshape(parts.N, parts.NU) % 3 == 0,
        learned=np.full((parts.N, parts.NU), 1 / 3),
        mean_error=np.full((parts.N, parts.NY), 0.1),
        law={"memory": np.array(ODD), "mask": np.array([True, False])},
        floor={"mean": np.e * np.ones((parts.N, parts.NY))},
    )
    made = parts.trial(0, parts.carry(0).feedforward)
    writer.commit_trial(made, parts.outcome(0, after), parts.TIMING)
    writer.close()
    again = parts.open_writer(path)
    assert again.facts == parts.facts()
    assert again.state == parts.outcome(0, after).state
    assert arrays.same_carry(again.carry, after)
    parts.fill(again, 1)
    again.close()
    with RecordReader(path) as reader:
        assert reader.n_trials == 2
        assert reader.verify() == []
        assert arrays.same_carry(reader.carry_before(1), after)


@pytest.mark.parametrize("name", ["learned", "mean_error"])
def test_a_negative_zero_is_not_taken_for_zero(parts, writer, path, name):
    """Arrays that are equal as numbers and not as bits are both stored."""
    shape = (parts.N, parts.NU if name == "learned" else parts.NY)
    after = parts.carry(1, feedforward=np.zeros((parts.N, parts.NU)), **{name: -np.zeros(shape)})
    made = parts.trial(0, parts.carry(0).feedforward)
    writer.commit_trial(made, parts.outcome(0, after), parts.TIMING)
    with RecordReader(path) as reader:
        assert arrays.same_carry(reader.carry_before(1), after)


def test_equal_arrays_are_stored_once(parts, writer, path):
    """A learned feedforward equal to the one played, and what a repeated trial plays again."""
    parts.fill(writer, 1)
    names = "SELECT group_concat(name) FROM arrays WHERE entry = (SELECT max(entry) FROM trials)"
    own = {"output", "auxiliary", "limited", "start_state"}
    assert set(count(path, names).split(",")) == {*own, "next.feedforward"}
    made = parts.trial(1, parts.carry(1).feedforward)
    writer.commit_trial(made, parts.outcome(1, parts.carry(1), action="repeat"), parts.TIMING)
    assert set(count(path, names).split(",")) == own
    with RecordReader(path) as reader:
        assert arrays.same_carry(reader.carry_before(2), parts.carry(1))


def test_arrays_carry_their_units(parts, writer, path):
    """One UCUM code a column, as the rig declared them."""
    parts.fill(writer, 1)
    unit = "SELECT unit FROM arrays WHERE name = ? ORDER BY entry DESC LIMIT 1"
    assert json.loads(count(path, unit, "next.feedforward")) == ["N", "N"]
    assert json.loads(count(path, unit, "output")) == ["mm"]
    assert json.loads(count(path, unit, "auxiliary")) == ["Cel"]
    assert json.loads(count(path, unit, "reference")) == ["mm"]


def test_a_request_changes_what_the_next_trial_plays_and_nothing_before(parts, writer, path):
    """What the trial before had left stays on record."""
    parts.fill(writer, 1)
    changed = RunState(trial=1, learning=False)
    writer.commit_request(parts.request(1), changed, parts.carry(77))
    writer.commit_request(parts.request(2, kind="note", changes_state=False), changed, None)
    assert json.loads(writer.find_request("request-0001")) == {"ok": True}
    assert writer.find_request("request-9999") is None
    writer.close()
    again = parts.open_writer(path)
    assert again.state == changed
    assert arrays.same_carry(again.carry, parts.carry(77))
    parts.fill(again, 1)
    again.close()
    with RecordReader(path) as reader:
        kinds = [(one.kind, one.effect_trial, one.who, one.why) for one in reader.requests()]
        assert kinds == [("rollback", 1, "ann", "looked odd"), ("note", 1, "ann", "looked odd")]
        assert reader.find_request("request-0002") == json.dumps({"ok": True})
        left = reader.carry_at(reader.trial(0).summary.entry)
        assert arrays.same_bits(left.feedforward, parts.carry(1).feedforward)
        played = reader.trial(1).trial.feedforward
        assert arrays.same_bits(played, parts.carry(77).feedforward)
        assert reader.verify() == []


def test_a_request_that_leaves_the_arrays_stores_none(parts, writer, path):
    """A freeze of a long horizon costs a row."""
    parts.fill(writer, 1)
    before = count(path, "SELECT count(*) FROM arrays")
    writer.commit_request(parts.request(1, kind="freeze"), RunState(trial=1), writer.carry)
    assert count(path, "SELECT count(*) FROM arrays") == before
    assert writer.state == RunState(trial=1)


def test_recall_gives_the_learned_feedforward_of_any_trial_that_was_run(parts, writer, path):
    """Where a probe played something else, the learned one."""
    learned = np.full((parts.N, parts.NU), 1 / 3)
    parts.fill(writer, 2)
    made = parts.trial(2, parts.carry(2).feedforward)
    after = parts.carry(3, learned=learned)
    writer.commit_trial(made, parts.outcome(2, after), parts.TIMING)
    parts.fill(writer, 1)
    with RecordReader(path) as reader:
        for source in (writer, reader):
            assert arrays.same_bits(source.recall(2), parts.carry(2).feedforward)
            assert arrays.same_bits(source.recall(3), learned)
            with pytest.raises(CoreError, match="trial 9 is not in the record"):
                source.recall(9)


def test_transitions_wait_for_the_next_commit_and_for_closing(parts, writer, path):
    """They need no commit of their own, and none is lost at the end."""
    values = {"utc": "u", "trial": 0, "before": "idle", "event": "greeted", "after": "loading"}
    writer.log_transition(**values, cause="the rig greets")
    parts.fill(writer, 1)
    writer.log_transition(**values, cause="over")
    writer.close()
    with RecordReader(path) as reader:
        assert [one.cause for one in reader.transitions()] == ["the rig greets", "over"]
        assert reader.verify() == []


def test_every_daemon_that_took_the_record_up_is_on_record(parts, writer, path):
    """With the configuration that it ran; one that died has no second row."""
    writer.close("2026-01-01T09:00:00Z")
    parts.open_writer(path)._lock.release()
    parts.open_writer(path).close("2026-01-03T00:00:00Z")
    with RecordReader(path) as reader:
        found = [(one.event, one.utc, one.config_text) for one in reader.daemons()]
        again = ("start", parts.DAEMON.utc, "[run]")
        assert found == [
            ("start", "2026-01-01T00:00:00Z", "[run]"),
            ("stop", "2026-01-01T09:00:00Z", ""),
            again,
            again,
            ("stop", "2026-01-03T00:00:00Z", ""),
        ]
        assert json.loads(reader.daemons()[0].platform)["numpy"] == np.__version__


def test_a_reader_sees_committed_trials_while_the_daemon_writes(parts, writer, path):
    """And the writer commits and empties its log in the middle of a long reading."""
    parts.fill(writer, 3)
    with RecordReader(path) as reader:
        reading = reader.trials()
        assert next(reading).summary.index == 0
        log = path.with_name(path.name + "-wal")
        sizes = []
        for _ in range(12):
            parts.fill(writer, 1)
            writer.checkpoint()
            sizes.append(log.stat().st_size)
        assert sizes[-1] <= 2 * sizes[0]
        assert reader.n_trials == 15
        assert [one.summary.index for one in reading] == list(range(1, 15))


def test_reading_takes_no_more_memory_for_a_longer_record(parts, writer, path):
    """Trials stream by, one at a time: 120 of them would be a quarter of a megabyte."""
    parts.fill(writer, 200)
    held = {}
    tracemalloc.start()
    with RecordReader(path) as reader:
        for row in reader.trials():
            if row.summary.index in (70, 190):
                gc.collect()
                held[row.summary.index] = tracemalloc.get_traced_memory()[0]
    tracemalloc.stop()
    assert held[190] - held[70] < 100_000


def test_the_connection_is_as_safe_as_it_was_asked_to_be(writer):
    """Read back, because SQLite ignores what it cannot do."""
    asked = {"journal_mode": "wal", "synchronous": 2, "wal_autocheckpoint": 0}
    for pragma, expected in asked.items():
        assert writer._db.execute(f"PRAGMA {pragma}").fetchone()[0] == expected
    with pytest.raises(RecordUnwritable, match="journal_mode is memory and must be WAL"):
        writer_module._connect(Path(":memory:"))


def test_trials_out_of_turn_are_refused_and_the_record_goes_on(parts, writer):
    """What is not the next trial, or played what the record does not hold, never gets in."""
    right = parts.carry(0).feedforward
    result = parts.outcome(0, parts.carry(1))
    with pytest.raises(RecordMisuse, match="expected trial 0, found trial 3"):
        writer.commit_trial(parts.trial(3, right), result, parts.TIMING)
    with pytest.raises(RecordMisuse, match="trial 0 played another feedforward"):
        writer.commit_trial(parts.trial(0, right + 1), result, parts.TIMING)
    inexact = parts.outcome(0, parts.carry(1, feedforward=np.full((parts.N, parts.NU), 0.1)))
    with pytest.raises(RecordMisuse, match=r"next\.feedforward: expected values that <f4 holds"):
        writer.commit_trial(parts.trial(0, right), inexact, parts.TIMING)
    parts.fill(writer, 2)


def test_an_old_sqlite_is_spoken_of(monkeypatch):
    """The one bug that a second writer could meet."""
    monkeypatch.setattr(writer_module.sqlite3, "sqlite_version_info", (3, 51, 2))
    assert "only writer" in sqlite_warning()
    monkeypatch.setattr(writer_module.sqlite3, "sqlite_version_info", (3, 51, 3))
    assert sqlite_warning() == ""


def begin_anew(parts, path):
    made = parts.RecordWriter.create(
        path, parts.facts(), parts.REFERENCE, RunState(), parts.carry(0), set_old_aside=True
    )
    made.close()


def test_a_new_run_keeps_the_old_record_beside_it(parts, writer, path):
    """Whole, also what a killed daemon left in the log, and as often as it is asked for."""
    parts.fill(writer, 3)
    writer._lock.release()
    begin_anew(parts, path)
    begin_anew(parts, path)
    names = ["run.20260101000000.trialrecord", "run.20260101000000-2.trialrecord"]
    trials = []
    for name in names:
        with RecordReader(path.with_name(name)) as reader:
            trials.append(reader.n_trials)
            assert reader.verify() == []
    assert trials == [3, 0]
    with RecordReader(path) as reader:
        assert reader.n_trials == 0


def test_a_record_in_use_is_not_set_aside(parts, writer, path):
    """Its daemon would go on writing into a file of another name."""
    parts.fill(writer, 1)
    with pytest.raises(RecordBusy, match="held by another trialrunner"):
        begin_anew(parts, path)
    parts.fill(writer, 1)
    assert [one.name for one in path.parent.glob("*.trialrecord")] == ["run.trialrecord"]


def test_a_file_of_another_program_is_set_aside_as_it_is(parts, path):
    """Nothing of it is lost."""
    path.write_text("somebody's notes")
    begin_anew(parts, path)
    kept = path.with_name("run.20260101000000.trialrecord")
    assert kept.read_text() == "somebody's notes"
