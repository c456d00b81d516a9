"""How long an operator's request waits for its answer while trials run and updates compute.

    python tests/bench/bench_halt.py [SECONDS]

Real processes: the mock gantry over ZeroMQ as fast as it goes, the daemon, and this client. The
floor is a bare ZeroMQ echo between two processes' sockets in the same run. The last request is a
halt: the time until the rig's own heartbeat says that it is safe stands beside it.
"""

import json
import os
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path

import zmq

from trialrunner.operator_client import OperatorClient, new_id
from trialrunner.operator_messages import OperatorRequest

CONFIG = Path(__file__).parents[2] / "config" / "bead_gantry.toml"


def main() -> None:
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 15.0
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        link = f"zmq+ipc://{folder}/rig"
        rig = subprocess.Popen(
            [sys.executable, "-m", "mock_rig", "--plant", "bead_gantry", "--link", link],
            stdout=subprocess.PIPE,
        )
        assert rig.stdout is not None
        rig.stdout.readline()
        values = {
            "link.url": link,
            "run.record": f"{folder}/halt.trialrecord",
            "operator.command_url": f"ipc://{folder}/command",
            "operator.telemetry_url": f"ipc://{folder}/telemetry",
            "stop.trials": 100_000,
        }
        command = [sys.executable, "-m", "trialrunner", "run", str(CONFIG), "--log-level", "error"]
        command += [f"--set={key}={json.dumps(value)}" for key, value in values.items()]
        daemon = subprocess.Popen(
            command, env={**os.environ, "XDG_RUNTIME_DIR": name}, stderr=subprocess.DEVNULL
        )
        try:
            measure(folder, seconds)
        finally:
            daemon.terminate()
            daemon.wait()
            rig.terminate()
            rig.wait()


def measure(folder: Path, seconds: float) -> None:
    url = f"ipc://{folder}/command"
    while not Path(f"{folder}/command").exists():
        time.sleep(0.05)
    bare = echo(folder, 1000)
    waits = []
    with OperatorClient(url) as client:
        trial = client.ask(request("status"), 30.0).trial
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            begin = time.perf_counter()
            trial = client.ask(request("status"), 5.0).trial
            waits.append(time.perf_counter() - begin)
        begin = time.perf_counter()
        client.ask(request("halt"), 5.0)
        halted = time.perf_counter() - begin
        while client.ask(request("status"), 5.0).data["rig"]["state"] != "safe":
            pass
        safe = time.perf_counter() - begin
    print(f"bare echo:        {line(bare)}")
    print(f"status answered:  {line(waits)}, {len(waits)} requests over {trial} trials")
    print(f"halt answered in {1e3 * halted:.2f} ms, rig safe {1e3 * safe:.2f} ms after the request")


def request(verb: str) -> OperatorRequest:
    return OperatorRequest(new_id(), verb, "bench", "measuring")


def line(waits: list[float]) -> str:
    ordered = sorted(waits)
    p50, p99 = ordered[len(ordered) // 2], ordered[int(0.99 * (len(ordered) - 1))]
    return f"p50 {1e3 * p50:5.2f} ms, p99 {1e3 * p99:5.2f} ms, max {1e3 * ordered[-1]:5.2f} ms"


def echo(folder: Path, count: int) -> list[float]:
    """Round trips of a bare DEALER and ROUTER, the other end in a thread of its own."""
    context = zmq.Context()
    server, client = context.socket(zmq.ROUTER), context.socket(zmq.DEALER)
    server.bind(f"ipc://{folder}/echo")
    client.connect(f"ipc://{folder}/echo")

    def serve() -> None:
        for _ in range(count):
            server.send_multipart(server.recv_multipart())

    thread = threading.Thread(target=serve)
    thread.start()
    waits = []
    for _ in range(count):
        begin = time.perf_counter()
        client.send(b"x" * 200)
        client.recv()
        waits.append(time.perf_counter() - begin)
    thread.join()
    for socket in (server, client):
        socket.close(0)
    context.term()
    return waits


if __name__ == "__main__":
    main()
