"""A power cut or a kill at any moment leaves every acknowledged trial, and the rest can go on."""

import random
import shutil
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from trialrunner.record import RecordReader, arrays

WRITER = Path(__file__).with_name("endless_writer.py")
LOG_HEADER, FRAME, SECTOR = 32, 24 + 4096, 512
"""Bytes of SQLite's log header, of a frame with its page (sqlite.org/fileformat2.html, 4), and of
what a disk writes whole."""


def check(parts, path, at_least, at_most):
    """The record holds that many trials, is sound, and goes on."""
    with RecordReader(path) as reader:
        count = reader.n_trials
        assert at_least <= count <= at_most
        assert reader.verify() == []
        for k in range(count):
            played = reader.trial(k).trial
            assert arrays.same_bits(played.output, parts.trial(k, None).output)
    again = parts.open_writer(path)
    assert again.state.trial == count
    parts.fill(again, 1)
    again.close()
    with RecordReader(path) as reader:
        assert reader.n_trials == count + 1
        assert reader.verify() == []


def cuts(log, seed, count):
    """Frame boundaries and places inside of frames."""
    chance = random.Random(seed)
    whole = range(LOG_HEADER, len(log) + 1, FRAME)
    return sorted(
        {*chance.sample(whole, count), *(chance.randrange(len(log)) for _ in whole[:count])}
    )


@pytest.mark.parametrize("tail", ["lost", "torn"])
def test_a_log_cut_anywhere_leaves_the_trials_whose_commits_were_whole(parts, path, tmp_path, tail):
    """What a power cut leaves: synced commits stay, of later writes any part may be missing."""
    writer = parts.new_writer(path)
    log = path.with_name(path.name + "-wal")
    ends = []
    for _ in range(4):
        parts.fill(writer, 1)
        ends.append(log.stat().st_size)
    file, data = path.read_bytes(), log.read_bytes()
    chance = random.Random(1)
    for cut in cuts(data, 2, 12):
        copy = tmp_path / "copy.trialrecord"
        for old in tmp_path.glob("copy.*"):
            old.unlink()
        copy.write_bytes(file)
        rest = chance.randbytes(len(data) - cut) if tail == "torn" else b""
        copy.with_name(copy.name + "-wal").write_bytes(data[:cut] + rest)
        committed = sum(end <= cut for end in ends)
        check(parts, copy, committed, committed)
    writer.close()


@pytest.mark.parametrize("seed", range(4))
def test_a_checkpoint_torn_anywhere_loses_nothing(parts, path, tmp_path, seed):
    """Any part of the file may be old, new, or half written: the log still has all of it."""
    writer = parts.new_writer(path)
    parts.fill(writer, 3)
    before = path.read_bytes()
    log = path.with_name(path.name + "-wal").read_bytes()
    writer.checkpoint()
    after = path.read_bytes()
    chance = random.Random(seed)
    sectors = []
    for at in range(0, len(after), SECTOR):
        # The file grew: what the old one lacks may be a hole full of zeros.
        old = before[at : at + SECTOR].ljust(SECTOR, b"\0")
        sectors.append(chance.choice((old, after[at : at + SECTOR])))
    copy = tmp_path / "copy.trialrecord"
    copy.write_bytes(b"".join(sectors))
    copy.with_name(copy.name + "-wal").write_bytes(log)
    writer.close()
    assert copy.read_bytes() not in (before, after)
    check(parts, copy, 3, 3)


def test_a_half_made_record_of_a_killed_daemon_is_made_anew(parts, path):
    """It had not got its name yet."""
    new = path.with_name(path.name + ".new")
    other = path.with_name("other.trialrecord")
    parts.new_writer(other).close()
    new.write_bytes(other.read_bytes()[:5000])
    new.with_name(new.name + "-wal").write_bytes(b"rubbish" * 100)
    writer = parts.new_writer(path)
    parts.fill(writer, 1)
    writer.close()
    check(parts, path, 1, 1)
    assert not list(path.parent.glob("*.new*"))


def test_a_copy_of_file_and_log_of_a_running_daemon_can_be_read(parts, writer, path, tmp_path):
    """A reader rebuilds the index of the log, which was not copied."""
    parts.fill(writer, 3)
    for suffix in ("", "-wal"):
        shutil.copy(path.with_name(path.name + suffix), tmp_path / f"copy{suffix}")
    with RecordReader(tmp_path / "copy") as reader:
        assert reader.n_trials == 3
        assert reader.verify() == []


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3))
def test_a_kill_at_any_moment_leaves_every_acknowledged_trial(parts, path, seed):
    """SIGKILL in the middle of commits and checkpoints, three daemons one after the other."""
    chance = random.Random(seed)
    acknowledged = 0
    for _ in range(3):
        process = subprocess.Popen(
            [sys.executable, str(WRITER), str(path)], stdout=subprocess.PIPE, text=True
        )
        with process.stdout as lines:
            wanted = chance.randrange(1, 12)
            heard = [next(lines) for _ in range(wanted)]
            # Somewhere in what follows: a few thousand turns of this loop are about one commit.
            for _ in range(chance.randrange(40_000)):
                pass
            process.send_signal(signal.SIGKILL)
            heard += lines.readlines()
        process.wait()
        told = [int(line) for line in heard if line.strip().isdigit()]
        acknowledged = max([acknowledged, *(last + 1 for last in told)])
        if path.exists():
            with RecordReader(path) as reader:
                assert reader.n_trials in (acknowledged, acknowledged + 1)
                assert reader.verify() == []
                acknowledged = reader.n_trials
    check(parts, path, acknowledged, acknowledged)
