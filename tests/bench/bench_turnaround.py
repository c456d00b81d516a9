"""From the last sample to the next table, judged, learned and committed; against its floors.

    python tests/bench/bench_turnaround.py

Floors, measured in the same run and interleaved: one rfft + irfft of the padded length for the law
and one for the filter (each over all channels), and a raw write + fdatasync of the bytes that the
commit stores. The turn-around takes what the daemon takes: unpacking the last block, checking the
whole trial, guards, law, filter, limits, wire rounding, the commit, and the next table
with its checksum, up to the first frame of it.
"""

import os
import statistics
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from drivers.codec import pack_frame
from drivers.messages import Finished, FinishReason, Samples, Table, TableBlock, encode
from drivers.tables import table_crc
from trialrunner.clock import SystemClock
from trialrunner.config import load_text
from trialrunner.conversation.collector import Collector
from trialrunner.conversation.table_sender import TableData
from trialrunner.core.advance import Advancer
from trialrunner.core.laws import LawContext
from trialrunner.core.trial import Trial
from trialrunner.launch import keep_freed_memory
from trialrunner.record import RecordWriter, RunFacts, TrialTiming
from trialrunner.update_job import UpdateJob

CONFIG = """
[run]
name = "bench"
[link]
url = "serial:///dev/none"
[trial]
n_samples = {n}
period_s = 0.001
[law]
kind = "pd"
proportional = 0.4
derivative = 0.001
lead_samples = 3
[filter]
shape = "gaussian"
bandwidth_hz = 60.0
[reference]
kind = "profile"
waypoints = [{zeros}, {steps}, {zeros}]
velocity_limit_per_s = {ones}
acceleration_limit_per_s2 = {tens}
jerk_limit_per_s3 = {thousands}
[stop]
trials = 100000
"""

CHANNEL = """
[[inputs]]
name = "u{i}"
unit = "N"
low = -50.0
high = 50.0
rate_limit_per_s = 5000.0
[[outputs]]
name = "y{i}"
unit = "m"
low = -10.0
high = 10.0
"""


class Setup:
    """A run of n samples by m channels with made-up measurements, no rig."""

    def __init__(self, folder: Path, n: int, m: int) -> None:
        rows = {
            "steps": [1.0] * m,
            "zeros": [0.0] * m,
            "ones": [4.0] * m,
            "tens": [80.0] * m,
            "thousands": [8e3] * m,
        }
        text = CONFIG.format(n=n, **rows) + "".join(CHANNEL.format(i=i) for i in range(m))
        config = load_text(text)
        self.reference = config.load_reference().astype("f4").astype(float)
        limits = {"low": [-50.0] * m, "high": [50.0] * m, "rate_per_s": [5000.0] * m}
        arrays = {name: np.array(values) for name, values in limits.items()}
        context = LawContext(0.001, n, m, m, self.reference, **arrays)
        self.advancer = Advancer(config.run_settings(), context, "f4")
        self.state, self.carry = self.advancer.begin()
        facts = RunFacts(text, {}, limits, "f4", "bench", "2026-01-01T00:00:00Z")
        path = folder / f"bench-{n}-{m}.trialrecord"
        self.writer = RecordWriter.create(path, facts, self.reference, self.state, self.carry)
        self.n, self.m = n, m
        self.rng = np.random.default_rng(1)

    def blocks(self) -> tuple[list[Samples], Finished]:
        """What the rig would send: the reference with a first-order lag, and noise."""
        moved = 0.02 * self.carry.feedforward
        noise = self.rng.normal(0, 1e-4, self.reference.shape)
        rows = (0.97 * self.reference + moved + noise).astype("<f4")
        data, row = rows.tobytes(), 4 * self.m
        step = 600 // row
        blocks = [
            Samples(self.state.trial, k, data[k * row : (k + step) * row])
            for k in range(0, self.n, step)
        ]
        start = tuple(float(value) for value in self.reference[0])
        done = Finished(
            self.state.trial, FinishReason.COMPLETE, self.n, 1, table_crc(data), 1, start
        )
        return blocks, done

    def turn_around(self) -> float:
        """Seconds from the last block to the next table's frames."""
        blocks, done = self.blocks()
        collector = Collector(self.state.trial, self.n, self.m, "f4")
        for block in blocks[:-1]:
            collector.take(block)
        begin = time.perf_counter()
        collector.take(blocks[-1])
        collector.finished = done
        whole = not collector.missing() and collector.checksum_agrees()
        got = collector.result(whole)
        trial = Trial(
            index=self.state.trial,
            purpose=self.state.purpose,
            feedforward=self.carry.feedforward,
            reference=self.reference,
            output=got.samples,
            auxiliary=got.samples[:, :0],
            limited=np.zeros((self.n, self.m), dtype=bool),
            start_state=np.array(got.start_state),
            count=self.n,
        )
        timing = TrialTiming("2026-01-01T00:00:00Z", 0)
        job = UpdateJob(
            self.advancer, self.writer, SystemClock(), trial, self.state, self.carry, timing, ()
        )
        outcome = job.run()
        self.first_frame(outcome.carry.feedforward)
        seconds = time.perf_counter() - begin
        assert outcome.action == "learn", outcome.sentence
        self.state, self.carry = outcome.state, outcome.carry
        self.writer.checkpoint()
        return seconds

    def first_frame(self, feedforward: np.ndarray) -> bytes:
        """The table as bytes with its checksum, and the first frame that goes out; the others are
        packed one by one while the line takes them."""
        data = np.ascontiguousarray(feedforward, dtype="<f4").tobytes()
        table = TableData.of(Table.FEEDFORWARD, data, self.n, self.m)
        size = 600 // table.row_bytes * table.row_bytes
        return pack_frame(1, 0, encode(TableBlock(0, 1, 0, data[:size])))


def floor(folder: Path, n: int, m: int) -> float:
    """One rfft + irfft for the law and one for the filter, and raw write + fdatasync."""
    from scipy.fft import irfft, next_fast_len, rfft

    length = next_fast_len(2 * n - 1, real=True)
    x = np.random.default_rng(2).normal(size=(m, n))
    data = os.urandom(2 * 4 * n * m)
    handle = os.open(folder / "raw", os.O_WRONLY | os.O_CREAT | os.O_APPEND)
    begin = time.perf_counter()
    for _ in range(2):
        irfft(rfft(x, length), length)
    os.write(handle, data)
    os.fdatasync(handle)
    seconds = time.perf_counter() - begin
    os.close(handle)
    return seconds


def measure(folder: Path, n: int, m: int, trials: int) -> None:
    setup = Setup(folder, n, m)
    took, floors = [], []
    for k in range(trials + 5):
        one, bare = setup.turn_around(), floor(folder, n, m)
        if k >= 5:
            took.append(one)
            floors.append(bare)
    setup.writer.close()
    middle, bare = statistics.median(took), statistics.median(floors)
    p99 = sorted(took)[int(0.99 * (len(took) - 1))]
    print(
        f"N = {n:6d} x {m}: turn-around {1e3 * middle:6.2f} ms, floor {1e3 * bare:5.2f} ms, "
        f"ratio {middle / bare:4.2f}, p99 / median {p99 / middle:4.2f}"
    )


def main() -> None:
    keep_freed_memory()
    trials = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    # Beside the code, not in a memory file system: the commit is to reach a disk.
    with tempfile.TemporaryDirectory(dir=Path(__file__).parent) as folder:
        for n, m in ((1_000, 1), (1_000, 2), (20_000, 2)):
            measure(Path(folder), n, m, trials)


if __name__ == "__main__":
    main()
