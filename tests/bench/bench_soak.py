"""A night in minutes: 20,000 short trials as fast as the link allows, and the memory they leave.

    python tests/bench/bench_soak.py [TRIALS]

Mock rig and daemon are two processes on a pseudo-terminal. Resident memory of the daemon is read
every few seconds; after the first tenth of the trials it must stay within 5 %. Exit code 1 if not.
"""

import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import psutil
import zmq

from trialrunner.record import RecordReader

CONFIG = """
[run]
name = "soak"
[link]
url = "serial://{folder}/rig"
[trial]
n_samples = 100
period_s = 0.002
[[inputs]]
name = "belt_force"
unit = "N"
low = -80.0
high = 80.0
rate_limit_per_s = 2000.0
[[outputs]]
name = "head_position"
unit = "m"
low = -0.05
high = 0.6
scale = 1e-3
start_tolerance = 5e-4
[reference]
kind = "profile"
waypoints = [[0.0], [0.02]]
velocity_limit_per_s = [0.4]
acceleration_limit_per_s2 = [6.0]
jerk_limit_per_s3 = [300.0]
[law]
kind = "pd"
proportional = 2000.0
derivative = 80.0
derivative_filter_s = 0.002
lead_samples = 5
[filter]
bandwidth_hz = 20.0
[stop]
trials = {trials}
floor_trials = 5
[operator]
telemetry_url = "ipc://{folder}/telemetry"
command_url = "ipc://{folder}/command"
"""

ALLOWED = 0.05


def main() -> int:
    trials = int(sys.argv[1]) if len(sys.argv) > 1 else 20_000
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "soak.toml").write_text(CONFIG.format(folder=folder, trials=trials))
        rig = subprocess.Popen(
            [sys.executable, "-m", "mock_rig", "--link", f"pty://{folder}/rig"],
            stdout=subprocess.PIPE,
        )
        assert rig.stdout is not None
        rig.stdout.readline()
        daemon = subprocess.Popen(
            [sys.executable, "-m", "trialrunner", "run", "soak.toml", "--log-level", "error"],
            cwd=folder,
            env={**os.environ, "XDG_RUNTIME_DIR": name},
        )
        try:
            return watch(folder, daemon, trials)
        finally:
            rig.terminate()
            rig.wait()


def watch(folder: Path, daemon: "subprocess.Popen[bytes]", trials: int) -> int:
    process, began = psutil.Process(daemon.pid), time.monotonic()
    readings: list[tuple[int, int, int]] = []
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.SUBSCRIBE, b"status\0")
        socket.connect(f"ipc://{folder}/telemetry")
        while daemon.poll() is None:
            if not socket.poll(500):
                continue
            trial = json.loads(socket.recv().partition(b"\0")[2])["data"]["trial"]
            if not readings or trial >= readings[-1][0] + trials // 20:
                memory = process.memory_info().rss
                readings.append((trial, memory, process.num_fds()))
                print(f"trial {trial:6d}: {memory / 1e6:7.2f} MB, {readings[-1][2]} descriptors")
    return judge(folder, readings, trials, time.monotonic() - began)


def judge(folder: Path, readings: list[tuple[int, int, int]], trials: int, took_s: float) -> int:
    settled = [memory for trial, memory, _ in readings if trial >= trials // 10]
    growth = max(settled) / settled[0] - 1
    with RecordReader(folder / "soak.trialrecord") as reader:
        count, state = reader.n_trials, reader.last_state()
        damage = reader.verify()
    print(f"{count} trials in {took_s:.0f} s, {1e3 * took_s / count:.1f} ms each")
    print(f"{state.voids} void; the run: {state.over}; record: {damage or 'sound'}")
    print(f"resident memory grew by {100 * growth:.2f} % after the first tenth")
    return 0 if growth <= ALLOWED and count >= trials and not damage else 1


if __name__ == "__main__":
    sys.exit(main())
