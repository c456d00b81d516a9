"""Everything that a record can meet: each gets a typed error in words, and nothing is lost."""

import os
import resource
import shutil
import sqlite3
from contextlib import contextmanager

import pytest

from trialrunner.locks import Busy
from trialrunner.record import (
    NotARecord,
    RecordBusy,
    RecordDamaged,
    RecordError,
    RecordReader,
    RecordUnwritable,
)


def change(path, statement, *values):
    """What another program, or a rotten disk, did to the file."""
    db = sqlite3.connect(path)
    with db:
        db.execute(statement, values)
    db.close()


@contextmanager
def file_size_limit(size):
    """Writes beyond `size` bytes into any file fail, as on a disk that fills up."""
    before = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, before)


# -- whose file it is -----------------------------------------------------------------------


@pytest.fixture(params=["text", "empty", "other", "newer", "older"])
def foreign(request, parts, tmp_path):
    """A file that is no record of this version, and words of the error."""
    file = tmp_path / "file.trialrecord"
    if request.param == "text":
        file.write_text("no database at all, but long enough to be looked at as one " * 40)
        return file, "is not a record"
    if request.param == "empty":
        file.touch()
        return file, "is a file of another program"
    if request.param == "other":
        change(file, "CREATE TABLE t (x)")
        return file, "is a file of another program"
    parts.new_writer(file).close()
    change(file, f"PRAGMA user_version = {99 if request.param == 'newer' else 1}")
    return file, f"has the {request.param} layout"


def test_files_of_others_are_refused_and_left_alone(foreign, parts):
    """By reader and writer, with the file's name; not a byte is changed."""
    file, words = foreign
    before = file.read_bytes()
    for touch in (RecordReader, parts.open_writer):
        with pytest.raises(NotARecord, match=words) as caught:
            touch(file)
        assert str(file) in str(caught.value)
    with pytest.raises(RecordUnwritable, match="exists already"):
        parts.new_writer(file)
    assert file.read_bytes() == before


def test_what_is_not_there_is_said_to_be_missing(parts, tmp_path):
    """A file, its directory, or a directory in its place."""
    with pytest.raises(RecordUnwritable, match="no such record"):
        RecordReader(tmp_path / "nothing")
    with pytest.raises(RecordUnwritable, match="directory does not exist; create it"):
        parts.new_writer(tmp_path / "no" / "run.trialrecord")
    with pytest.raises(NotARecord, match="is not a file"):
        RecordReader(tmp_path)


def test_a_record_is_never_overwritten(parts, path):
    """Also not by a run that is told to begin."""
    parts.new_writer(path).close()
    with pytest.raises(RecordUnwritable, match="exists already"):
        parts.new_writer(path)


# -- permissions ----------------------------------------------------------------------------


def test_a_read_only_directory_is_refused_with_a_hint(parts, public_folder, as_plain_user):
    """Before anything is written."""
    public_folder.chmod(0o555)
    with as_plain_user(), pytest.raises(RecordUnwritable, match="check the permissions"):
        parts.new_writer(public_folder / "run.trialrecord")


def test_a_read_only_record_is_refused_with_a_hint(parts, public_folder, as_plain_user):
    """It can still be read."""
    path = public_folder / "run.trialrecord"
    with as_plain_user():
        parts.new_writer(path).close()
        path.chmod(0o444)
        with pytest.raises(RecordUnwritable, match="check the permissions"):
            parts.open_writer(path)
        with RecordReader(path) as reader:
            assert reader.n_trials == 0


def test_a_finished_record_on_a_read_only_medium_can_be_read(parts, public_folder, as_plain_user):
    """Though SQLite would like to make a file beside it."""
    path = public_folder / "run.trialrecord"
    with as_plain_user():
        writer = parts.new_writer(path)
        parts.fill(writer, 2)
        writer.close()
        assert sorted(one.name for one in public_folder.iterdir()) == [
            "run.trialrecord",
            "run.trialrecord.lock",
        ]
        public_folder.chmod(0o555)
        with RecordReader(path) as reader:
            assert len(list(reader.trials())) == 2
            assert reader.verify() == []


def test_a_log_on_a_read_only_medium_is_read_or_spoken_of(
    parts, public_folder, as_plain_user, tmp_path
):
    """An empty one says nothing; one with trials in it must not be passed over."""
    busy = parts.new_writer(tmp_path / "busy.trialrecord")
    parts.fill(busy, 2)
    path = public_folder / "run.trialrecord"
    log = path.with_name(path.name + "-wal")
    path.write_bytes(busy.path.read_bytes())
    log.write_bytes(busy.path.with_name(busy.path.name + "-wal").read_bytes())
    busy.close()
    public_folder.chmod(0o555)
    with as_plain_user(), pytest.raises(RecordUnwritable, match="check the permissions"):
        RecordReader(path)
    public_folder.chmod(0o755)
    with RecordReader(path) as reader:
        assert reader.n_trials == 2
    parts.open_writer(path).close()
    log.touch()
    public_folder.chmod(0o555)
    with as_plain_user(), RecordReader(path) as reader:
        assert reader.n_trials == 2


def test_a_record_that_turns_read_only_under_way_stops_the_writer(parts, writer):
    """As when a file system is mounted anew after an error."""
    writer._db.execute("PRAGMA query_only = 1")
    with pytest.raises(RecordUnwritable, match="check the permissions"):
        parts.fill(writer, 1)


# -- others at the same file ----------------------------------------------------------------


def test_a_second_writer_is_refused_and_told_who_holds_the_record(parts, writer, path):
    """And gets it once the first one is gone."""
    for kind in (Busy, RecordBusy, RecordError):
        with pytest.raises(kind, match=f"process {os.getpid()}"):
            parts.open_writer(path)
    writer.close()
    parts.open_writer(path).close()


def test_a_foreign_program_that_writes_in_it_stops_the_writer(parts, writer, path):
    """The lock is ours alone; SQLite's own lock is not."""
    writer._db.execute("PRAGMA busy_timeout = 0")
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(RecordUnwritable, match="another program writes in it"):
        parts.fill(writer, 1)
    other.close()


# -- a disk that fills up -------------------------------------------------------------------


def test_a_full_disk_stops_the_writer_and_loses_nothing_committed(parts, writer, path):
    """After the first failed write there is no second one."""
    parts.fill(writer, 2)
    pages = writer._db.execute("PRAGMA page_count").fetchone()[0]
    writer._db.execute(f"PRAGMA max_page_count = {pages}")
    with pytest.raises(RecordUnwritable, match="the disk is full; every committed trial is safe"):
        parts.fill(writer, 50)
    writer._db.execute("PRAGMA max_page_count = 1000000")
    for again in (
        lambda: parts.fill(writer, 1),
        lambda: writer.commit_request(parts.request(1), writer.state, writer.carry),
        writer.checkpoint,
        lambda: writer.recall(0),
    ):
        with pytest.raises(RecordUnwritable, match="takes no more writes after"):
            again()
    stored = writer.state.trial
    assert stored >= 2
    writer.close()
    with RecordReader(path) as reader:
        assert reader.n_trials == stored
        assert reader.verify() == []


def failing_commits(parts, base, path, act):
    """`act` on a copy of `base` with each possible room on the disk, until it has enough.

    Yields the number of bytes at which the disk was full, each time that it failed.
    """
    for room in range(0, 1 << 20, 2048):
        shutil.copy(base, path)
        writer = parts.open_writer(path)
        try:
            with file_size_limit(room):
                act(writer)
        except RecordUnwritable:
            writer.close()
            yield room
        else:
            writer.close()
            return
    pytest.fail("never succeeded")


def test_a_commit_that_fails_at_any_of_its_writes_leaves_all_trials_before(parts, path, tmp_path):
    """Whichever page of the log no longer found room, whole or in the middle."""
    base = tmp_path / "base.trialrecord"
    writer = parts.new_writer(base)
    parts.fill(writer, 2)
    writer.close()
    failed = 0
    for _ in failing_commits(parts, base, path, lambda writer: parts.fill(writer, 1)):
        failed += 1
        with RecordReader(path) as reader:
            assert reader.n_trials == 2
            assert reader.verify() == []
        again = parts.open_writer(path)
        parts.fill(again, 1)
        again.close()
        with RecordReader(path) as reader:
            assert reader.n_trials == 3
            assert reader.verify() == []
    assert failed >= 5
    with RecordReader(path) as reader:
        assert reader.n_trials == 3


def test_a_checkpoint_that_fails_loses_nothing(parts, writer, path):
    """What is committed is in the log until the file holds it."""
    parts.fill(writer, 5)
    with (
        file_size_limit(path.stat().st_size),
        pytest.raises(RecordUnwritable, match="every committed trial is safe"),
    ):
        writer.checkpoint()
    writer.close()
    with RecordReader(path) as reader:
        assert reader.n_trials == 5
        assert reader.verify() == []


def test_a_record_that_cannot_be_made_leaves_its_name_free(parts, path):
    """The next start makes it whole."""
    for room in range(0, 40_000, 4096):
        with file_size_limit(room), pytest.raises(RecordError):
            parts.new_writer(path)
        assert not path.exists()
    writer = parts.new_writer(path)
    parts.fill(writer, 1)
    writer.close()
    assert not path.with_name(path.name + ".new").exists()


# -- a disk that rots -----------------------------------------------------------------------


@pytest.fixture
def three(parts, path):
    """A record of three trials and a request, closed."""
    writer = parts.new_writer(path)
    parts.fill(writer, 2)
    writer.commit_request(parts.request(1, kind="freeze"), writer.state, writer.carry)
    values = {"utc": "u", "trial": 2, "before": "idle", "event": "greeted", "after": "loading"}
    writer.log_transition(**values, cause="the rig greets")
    parts.fill(writer, 1)
    writer.close()
    return path


OUTPUT = "entry = (SELECT entry FROM trials WHERE trial = 1) AND name = 'output'"


def test_a_flipped_bit_in_an_array_is_found_and_named(three):
    """Wherever in it; SQLite's own check does not see it."""
    db = sqlite3.connect(three)
    (data,) = db.execute(f"SELECT data FROM arrays WHERE {OUTPUT}").fetchone()
    db.close()
    for at in (0, len(data) // 2, len(data) - 1):
        rotten = bytearray(data)
        rotten[at] ^= 1
        change(three, f"UPDATE arrays SET data = ? WHERE {OUTPUT}", bytes(rotten))
        with RecordReader(three) as reader:
            (text,) = reader.verify()
            assert "trial 1, output: the stored bytes do not agree with their SHA-256" in text
            with pytest.raises(RecordDamaged, match="trial 1, output"):
                list(reader.trials())
            assert reader.trial(0).summary.index == 0


@pytest.mark.parametrize(
    "damage",
    [f"UPDATE arrays SET {what} WHERE {OUTPUT}" for what in ("shape = '[7]'", "dtype = '<f2'")]
    + [f"DELETE FROM arrays WHERE {OUTPUT}"],
)
def test_an_array_that_does_not_fit_its_description_is_named(three, damage):
    """And one that is gone."""
    change(three, damage)
    with RecordReader(three) as reader:
        assert reader.verify()
        with pytest.raises(RecordDamaged, match="trial 1"):
            list(reader.trials())


def read_all(path):
    """Raises RecordError for what reading or verifying finds."""
    with RecordReader(path) as reader:
        list(reader.trials())
        found = reader.verify()
    if found:
        raise RecordDamaged("\n".join(found))


def test_a_torn_page_is_damage_and_no_crash(three):
    """A page of the file overwritten with rubbish."""
    whole = three.read_bytes()
    for page in range(1, len(whole) // 4096):
        three.write_bytes(whole[: page * 4096] + b"\xa5" * 4096 + whole[(page + 1) * 4096 :])
        with pytest.raises(RecordError):
            read_all(three)


@pytest.mark.parametrize(
    ("tampering", "where"),
    [
        ("UPDATE trials SET sentence = 'nothing happened' WHERE trial = 1", "trial 1"),
        ("UPDATE trials SET norm = norm * 1.0000000001 WHERE trial = 1", "trial 1"),
        ("UPDATE verdicts SET level = 'pass' WHERE guard = 'x'", "trial 0"),
        ("DELETE FROM verdicts WHERE guard = 'x'", "trial 0"),
        ("UPDATE entries SET state = replace(state, 'true', 'false') WHERE entry = 0", "entry 0"),
        ("UPDATE requests SET who = 'bob'", "entry 4"),
        ("DELETE FROM requests", "entry 4"),
        ("UPDATE transitions SET cause = 'nobody knows'", "trial 2"),
        ("UPDATE facts SET value = '\"[run2]\"' WHERE key = 'config_text'", "entry 0"),
        ("UPDATE daemons SET utc = '2020-01-01T00:00:00Z'", "entry 1"),
        ("DELETE FROM entries WHERE entry = 3", "entry 3 is missing"),
    ],
)
def test_a_row_rewritten_by_hand_breaks_the_chain(three, tampering, where):
    """The first place is named; the trials stay readable."""
    change(three, tampering)
    with RecordReader(three) as reader:
        (text,) = reader.verify()
        assert text.startswith(where)


def test_rows_that_belong_to_nothing_are_found(three):
    """They are in no link of the chain."""
    change(three, "INSERT INTO verdicts VALUES (99, 0, 'x', 'pass', '', 0.0, 0.0, 0)")
    with RecordReader(three) as reader:
        assert reader.verify() == ["verdicts: 1 rows belong to no entry"]


def test_an_end_cut_off_shows_in_the_head_of_the_chain(three):
    """The chain itself stays whole: that is why the head is printed."""
    with RecordReader(three) as reader:
        head = reader.chain_head()
    db = sqlite3.connect(three)
    (last,) = db.execute("SELECT max(entry) FROM entries").fetchone()
    db.close()
    for table in ("entries", "daemons", "trials", "verdicts", "transitions", "arrays", "requests"):
        change(three, f"DELETE FROM {table} WHERE entry >= ?", last - 1)
    with RecordReader(three) as reader:
        assert reader.verify() == []
        assert reader.chain_head() != head
