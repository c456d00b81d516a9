"""Power cuts at every system call of the real writer, with whatever a disk may then have lost.

The writer runs under strace; its calls are played into a model of a disk that keeps only what was
synced, and of the rest any part, in any order, torn at sectors (the idea of ALICE, Pillai et al.,
OSDI 2014, from memory). Names behave alike: a rename holds once its directory was synced, before
that it may or may not. Every such disk must hold a sound record with all that was acknowledged.
"""

import random
import re
import shutil
import subprocess
import sys
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from trialrunner.record import RecordError, RecordReader, arrays

WRITER = Path(__file__).with_name("traced_writer.py")
CALLS = "openat,close,write,pwrite64,ftruncate,fsync,fdatasync,rename,unlink"
SECTOR = 512
LINE = re.compile(r"(\w+)\((.*)\)\s+= (-?\d+)")
TEXT = re.compile(r'"((?:\\x[0-9a-f]{2})*)"')

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(shutil.which("strace") is None, reason="strace is not installed"),
]


def unhex(text):
    return bytes.fromhex(text.replace("\\x", ""))


@dataclass
class File:
    """Bytes on the disk, and what was written since the last sync."""

    durable: bytes = b""
    pending: list = field(default_factory=list)

    def sync(self):
        for change in self.pending:
            self.durable = apply(self.durable, change)
        self.pending = []

    def after_a_cut(self, chance):
        data = self.durable
        for change in chance.choice((self.pending, random_part(self.pending, chance))):
            data = apply(data, change)
        return data


def apply(data, change):
    """A write (offset, bytes) or a truncation (length, None)."""
    at, written = change
    if written is None:
        return data[:at].ljust(at, b"\0")
    return data[:at].ljust(at, b"\0") + written + data[at + len(written) :]


def random_part(changes, chance):
    """Each change whole, not at all, or some of its sectors."""
    for at, written in changes:
        fate = chance.randrange(3)
        if fate == 0:
            continue
        if fate == 1 or written is None:
            yield at, written
            continue
        for first in range(0, len(written), SECTOR):
            if chance.random() < 0.5:
                yield at + first, written[first : first + SECTOR]


class Disk:
    """Files by name, and the renames that no sync of their directory has made sure of."""

    def __init__(self):
        self.files, self.handles, self.unsure = {}, {}, []
        self.said = -1

    def play(self, name, arguments, result):
        """One system call that succeeded."""
        texts = [unhex(text) for text in TEXT.findall(arguments)]
        numbers = re.sub(TEXT, "", arguments).replace(" ", "").split(",")
        handle = int(numbers[0]) if numbers[0].isdigit() else -1
        if name == "openat":
            self.handles[result] = texts[0].decode()
            if "O_CREAT" in arguments:
                self.files.setdefault(texts[0].decode(), File())
        elif name == "close":
            self.handles.pop(handle, None)
        elif name == "write" and handle == 1:
            self.said = int(texts[0].split()[1])
        elif name == "rename":
            self.rename(*(text.decode() for text in texts))
        elif name == "unlink":
            self.files.pop(texts[0].decode(), None)
        else:
            self.change(name, self.handles.get(handle, ""), texts, numbers)

    def change(self, name, path, texts, numbers):
        file = self.files.get(path)
        if file is None:
            if name == "fsync":
                # A directory: what was renamed in it stays so.
                self.unsure = []
        elif name in ("fsync", "fdatasync"):
            file.sync()
        elif name == "pwrite64":
            file.pending.append((int(numbers[-1]), texts[0]))
        elif name == "ftruncate":
            file.pending.append((int(numbers[-1]), None))

    def rename(self, old, new):
        self.files[new] = self.files.pop(old)
        self.unsure.append((old, new))

    def cut(self, folder, path, chance):
        """What is found in `folder` after the power is back: record and log by their names."""
        files = dict(self.files)
        for old, new in reversed(self.unsure):
            if chance.random() < 0.5:
                files[old] = files.pop(new)
        for found in folder.iterdir():
            found.unlink()
        for suffix in ("", "-wal"):
            if path + suffix in files:
                data = files[path + suffix].after_a_cut(chance)
                (folder / ("record" + suffix)).write_bytes(data)
        return folder / "record"


@pytest.fixture(scope="module")
def calls(tmp_path_factory):
    """Name of the record and the system calls of the writer, in order."""
    folder = tmp_path_factory.mktemp("traced")
    path, log = folder / "run.trialrecord", folder / "strace.log"
    command = ["strace", "-xx", "-s", "10000000", "-e", f"trace={CALLS}", "-o", str(log)]
    done = subprocess.run(
        [*command, sys.executable, str(WRITER), str(path)], capture_output=True, text=True
    )
    if "ptrace" in done.stderr.lower():
        pytest.skip("tracing is not permitted here")
    assert done.returncode == 0, done.stderr
    found = [LINE.match(line) for line in log.read_text().splitlines()]
    parsed = [(one[1], one[2], int(one[3])) for one in found if one]
    return str(path), [one for one in parsed if one[2] >= 0]


def test_no_power_cut_loses_what_was_acknowledged(calls, parts, tmp_path):
    """Nor leaves a record that is not sound."""
    path, made = calls
    chance = random.Random(5)
    folder = tmp_path / "after"
    folder.mkdir()
    disk, states, seen = Disk(), 0, set()
    for name, arguments, result in made:
        disk.play(name, arguments, result)
        if path + ".new" not in disk.files and path not in disk.files:
            continue
        record = disk.cut(folder, path, chance)
        states += 1
        if not record.exists():
            assert disk.said < 0, "an acknowledged record is gone"
            continue
        with RecordReader(record) as reader:
            count = reader.n_trials
            assert max(disk.said, 0) <= count <= disk.said + 1
            assert reader.verify() == []
            for k in range(count):
                expected = parts.trial(k, None).output
                assert arrays.same_bits(reader.trial(k).trial.output, expected)
        seen.add(count)
    assert disk.said == 6
    assert seen == set(range(7))
    assert states > 300


def test_the_model_of_the_disk_finds_a_writer_that_does_not_sync(calls, tmp_path):
    """A check of the check: with every sync of the log ignored, something is lost."""
    path, made = calls
    chance = random.Random(5)
    folder = tmp_path / "after"
    folder.mkdir()
    disk = Disk()
    lost = 0
    for name, arguments, result in made:
        handle = arguments.partition(",")[0]
        target = disk.handles.get(int(handle), "") if handle.isdigit() else ""
        if name in ("fsync", "fdatasync") and target.endswith("-wal"):
            continue
        disk.play(name, arguments, result)
        if disk.said < 1:
            continue
        try:
            with RecordReader(disk.cut(folder, path, chance)) as reader:
                lost += reader.n_trials < disk.said
        except RecordError:
            lost += 1
    assert lost
