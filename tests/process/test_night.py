"""Real processes on a pseudo-terminal and on ZeroMQ: the main job, and a bench's accidents."""

import json
import os
import random
import re
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import zmq

from trialrunner.exit_codes import ExitCode
from trialrunner.record import RecordReader
from trialrunner.replay import Replay

pytestmark = pytest.mark.slow

CONFIGS = Path(__file__).parents[2] / "config"
PATIENCE_S = 60


class Bench:
    """A mock rig, daemons and operators in a directory of their own."""

    def __init__(self, folder):
        self.folder = folder
        self.record = folder / "night.trialrecord"
        self.telemetry = f"ipc://{folder}/telemetry"
        self.command = f"ipc://{folder}/command"
        self.link = "serial"
        self.processes = []
        self.daemons = 0
        self.environment = {**os.environ, "XDG_RUNTIME_DIR": str(folder), "COLUMNS": "160"}

    def start(self, *command, **options):
        process = subprocess.Popen(
            [sys.executable, *map(str, command)], text=True, env=self.environment, **options
        )
        self.processes.append(process)
        return process

    def rig(self, *options, plant="bead_axis", link="serial"):
        self.link = link
        url = f"pty://{self.folder}/rig" if link == "serial" else f"zmq+ipc://{self.folder}/rig"
        command = ["-m", "mock_rig", "--plant", plant, "--link", url, *options]
        rig = self.start(*command, stdout=subprocess.PIPE)
        assert json.loads(rig.stdout.readline())["listening"] == url
        return rig

    def overrides(self, **changes):
        url = "serial" if self.link == "serial" else "zmq+ipc"
        values = {
            "link.url": f"{url}://{self.folder}/rig",
            "run.record": str(self.record),
            "operator.telemetry_url": self.telemetry,
            "operator.command_url": self.command,
            **changes,
        }
        return [f"--set={key}={json.dumps(value)}" for key, value in values.items()]

    def daemon(self, config="bead_axis.toml", *options, **changes):
        self.daemons += 1
        log = (self.folder / f"daemon-{self.daemons}.log").open("w")
        command = ["-m", "trialrunner", "run", CONFIGS / config, *options]
        daemon = self.start(*command, *self.overrides(**changes), stderr=log)
        log.close()
        return daemon

    def log(self, number=None):
        return (self.folder / f"daemon-{number or self.daemons}.log").read_text()

    def tell(self, verb, *options):
        command = ["-m", "trialrunner", "tell", verb, "--url", self.command, *options]
        done = subprocess.run(
            [sys.executable, *command, "--json"],
            capture_output=True,
            text=True,
            env=self.environment,
            check=False,
        )
        return done.returncode, json.loads(done.stdout) if done.stdout else done.stderr

    def until(self, condition):
        """Wait for a telemetry message (topic, data) of which the condition holds."""
        with zmq.Context() as context, context.socket(zmq.SUB) as socket:
            socket.setsockopt(zmq.LINGER, 0)
            socket.setsockopt(zmq.SUBSCRIBE, b"")
            # Short trials are over in 40 ms; ZeroMQ's own pause between attempts is 100 ms.
            socket.setsockopt(zmq.RECONNECT_IVL, 5)
            socket.connect(self.telemetry)
            while True:
                assert socket.poll(1000 * PATIENCE_S), f"no such message; log:\n{self.log()}"
                topic, _, body = socket.recv().partition(b"\0")
                data = json.loads(body)["data"]
                if condition(topic.decode(), data):
                    return data

    def until_trial(self, index):
        return self.until(lambda topic, data: topic == "status" and data["trial"] >= index)

    def until_state(self, *states):
        return self.until(lambda topic, data: topic == "status" and data["state"] in states)

    def end(self, process):
        code = process.wait(PATIENCE_S)
        assert "Traceback" not in self.log()
        return code

    def close(self):
        for process in self.processes:
            if process.poll() is None:
                process.kill()
                process.wait()
            if process.stdout is not None:
                process.stdout.close()


@pytest.fixture
def bench(tmp_path):
    made = Bench(tmp_path)
    yield made
    made.close()


def rows(path):
    with RecordReader(path) as reader:
        assert reader.verify() == []
        return list(reader.trials())


def reproduced(path):
    with RecordReader(path) as reader:
        return [one.index for one in Replay(reader).trials() if not one.same]


@pytest.mark.parametrize("config", sorted(path.name for path in CONFIGS.glob("*.toml")))
def test_every_shipped_configuration_reaches_twice_its_floor(tmp_path, config):
    record = tmp_path / "rehearsal.trialrecord"
    command = [sys.executable, "-m", "trialrunner", "rehearse", CONFIGS / config, "--json"]
    done = subprocess.run(
        [*map(str, command), "--record", str(record)],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "XDG_RUNTIME_DIR": str(tmp_path)},
    )
    assert done.returncode == 0, done.stderr
    summary = json.loads(done.stdout)
    assert summary["reached"]
    assert summary["last_norm"] <= 2 * summary["floor"]
    assert summary["reduction"] > 30
    assert summary["voids"] == 0
    assert reproduced(record) == []


def test_the_same_seed_gives_the_same_record_on_either_link(tmp_path):
    played = []
    for link in ("serial", "zmq"):
        record = tmp_path / f"{link}.trialrecord"
        command = ["-m", "trialrunner", "rehearse", CONFIGS / "chamber.toml", "--trials", "6"]
        command += ["--link", link, "--record", record, "--seed", "9", "--json"]
        subprocess.run(
            [sys.executable, *map(str, command)],
            capture_output=True,
            check=False,
            env={**os.environ, "XDG_RUNTIME_DIR": str(tmp_path)},
        )
        played.append([(one.trial.feedforward, one.trial.output) for one in rows(record)])
    for one, two in zip(*played, strict=True):
        np.testing.assert_array_equal(one[0], two[0])
        np.testing.assert_array_equal(one[1], two[1])


def test_kill_9_again_and_again_loses_nothing_and_changes_nothing(bench, tmp_path):
    chance = random.Random(5)
    changes = {"stop.trials": 40, "stop.floor_trials": 2}
    # Longer than a start of the daemon: a rig that its watchdog stopped would wait for a person.
    bench.rig("--seed", "3", "--watchdog-ms", "5000")
    for _ in range(5):
        daemon = bench.daemon(**changes)
        bench.until_trial(chance.randrange(1, 4) + (1 if not bench.record.exists() else 0))
        wanted = chance.choice(["loading", "armed", "running", "settling", "updating"])
        bench.until(
            lambda topic, data, wanted=wanted: topic == "status" and data["state"] == wanted
        )
        daemon.send_signal(signal.SIGKILL)
        daemon.wait()
    assert bench.end(bench.daemon(**changes)) == ExitCode.OK
    found = rows(bench.record)
    assert [one.summary.index for one in found] == list(range(len(found)))
    assert reproduced(bench.record) == []
    bench.close()

    folder = tmp_path / "undisturbed"
    folder.mkdir()
    undisturbed = Bench(folder)
    undisturbed.rig("--seed", "3")
    assert undisturbed.end(undisturbed.daemon(**changes)) == ExitCode.OK
    clean = rows(undisturbed.record)
    undisturbed.close()
    for one, two in zip(found, clean, strict=True):
        np.testing.assert_array_equal(one.trial.feedforward, two.trial.feedforward)


def test_sigterm_ends_the_run_safely_and_the_next_start_goes_on(bench):
    bench.rig()
    daemon = bench.daemon()
    bench.until_trial(3)
    daemon.send_signal(signal.SIGTERM)
    assert bench.end(daemon) == ExitCode.OK
    n_first = len(rows(bench.record))
    assert bench.end(bench.daemon(**{"stop.trials": n_first + 2, "stop.floor_trials": 0})) == 0
    assert len(rows(bench.record)) == n_first + 2


def test_a_second_daemon_on_the_same_port_or_record_is_refused_by_name(bench):
    bench.rig("--real-time")
    first = bench.daemon()
    bench.until_state("running")
    second = bench.daemon()
    assert second.wait(PATIENCE_S) == ExitCode.BUSY
    assert re.search(rf"the link .* is held by another .*{first.pid}", bench.log())


def test_a_vanished_port_is_waited_for_and_the_run_goes_on(bench):
    rig = bench.rig()
    daemon = bench.daemon(**{"stop.trials": 60, "stop.floor_trials": 2})
    bench.until_trial(3)
    rig.kill()
    rig.wait()
    bench.until(lambda topic, data: topic == "event" and "link lost" in data["text"])
    bench.rig()
    assert bench.end(daemon) == ExitCode.OK
    assert reproduced(bench.record) == []


def test_a_rig_that_dies_in_a_trial_comes_back_to_a_voided_trial(bench):
    bench.rig("--fault", "crash@trial=3,size=0.3")
    daemon = bench.daemon(**{"stop.trials": 8, "stop.floor_trials": 2})
    assert bench.end(daemon) == ExitCode.OK
    found = rows(bench.record)
    assert [one.summary.index for one in found if one.summary.void] == [3]
    np.testing.assert_array_equal(found[3].trial.feedforward, found[4].trial.feedforward)


def test_an_emergency_stop_waits_for_a_person_with_a_reason(bench):
    bench.rig("--fault", "emergency_stop@trial=2,size=0.1")
    daemon = bench.daemon(**{"stop.trials": 5, "stop.floor_trials": 2})
    bench.until_state("halted")
    assert bench.tell("learn", "--why", "impatient")[0] in (ExitCode.OK, ExitCode.REFUSED)
    code, _ = bench.tell("resume")
    assert code == ExitCode.USAGE
    code, answer = bench.tell("resume", "--why", "guard closed, button released")
    assert (code, answer["ok"]) == (0, True)
    assert bench.end(daemon) == ExitCode.OK
    with RecordReader(bench.record) as reader:
        asked = [(one.kind, one.why) for one in reader.requests()]
    assert ("resume", "guard closed, button released") in asked


def test_operators_steer_a_run_and_every_answer_names_a_trial(bench):
    bench.rig("--real-time")
    daemon = bench.daemon(**{"stop.trials": 50, "trial.dwell_s": 0.0})
    bench.until_state("running")
    code, status = bench.tell("status")
    assert code == 0
    assert status["data"]["run"] == "bead_axis"
    for verb in ("freeze", "learn", "note", "pause"):
        code, answer = bench.tell(verb, "--why", "try it")
        assert (code, answer["ok"]) == (0, True), answer
        assert answer["trial"] is not None
    bench.until_state("paused")
    code, answer = bench.tell("halt", "--why", "enough")
    assert answer["ok"]
    bench.until_state("halted")
    daemon.send_signal(signal.SIGTERM)
    assert bench.end(daemon) == ExitCode.HALTED


def test_without_a_daemon_tell_says_so(bench):
    code, text = bench.tell("status", "--timeout", "0.2")
    assert code == ExitCode.NO_ANSWER
    assert bench.command in str(text)


def test_a_rig_in_other_units_is_refused_before_anything_moves(bench):
    bench.rig()
    daemon = bench.daemon("bead_axis.toml", "--set", "inputs.0.unit='kN'")
    assert daemon.wait(PATIENCE_S) == ExitCode.DISAGREEMENT
    assert "belt_force is in 'N' on the rig, in 'kN' in the configuration" in bench.log()
    assert not bench.record.exists()


def test_a_changed_configuration_is_refused_and_a_new_run_keeps_the_old_record(bench):
    bench.rig()
    changes = {"stop.trials": 2, "stop.floor_trials": 0}
    assert bench.end(bench.daemon(**changes)) == ExitCode.OK
    other = bench.daemon(**changes, **{"law.proportional": 2000.0})
    assert other.wait(PATIENCE_S) == ExitCode.DISAGREEMENT
    assert "law.proportional: 2500.0 -> 2000.0" in bench.log()
    new = bench.daemon("bead_axis.toml", "--new-run", **changes, **{"law.proportional": 2000.0})
    assert bench.end(new) == ExitCode.OK
    assert len(list(bench.folder.glob("night*.trialrecord"))) == 2


def test_tables_larger_than_the_rigs_memory_are_streamed_over_a_real_line(bench):
    bench.rig("--table-capacity", "100")
    assert bench.end(bench.daemon(**{"stop.trials": 3, "stop.floor_trials": 0})) == ExitCode.OK
    assert not any(one.summary.void for one in rows(bench.record))


def test_a_record_of_another_program_is_refused(bench):
    bench.rig()
    bench.record.write_bytes(b"SQLite it is not " * 100)
    daemon = bench.daemon()
    assert daemon.wait(PATIENCE_S) == ExitCode.RECORD
    assert "is not a record" in bench.log()
    assert bench.record.read_bytes().startswith(b"SQLite it is not")


def test_a_killed_daemon_is_a_stranger_over_zeromq_until_the_watchdogs_time_is_over(bench):
    bench.rig("--watchdog-ms", "10000", link="zmq")
    changes = {"stop.floor_trials": 0, "link.silence_s": 20.0}
    daemon = bench.daemon(**changes, **{"stop.trials": 100_000})
    bench.until_trial(1)
    daemon.send_signal(signal.SIGKILL)
    daemon.wait()
    daemon = bench.daemon(**changes, **{"stop.trials": len(rows(bench.record)) + 3})
    bench.until(lambda topic, data: topic == "event" and "daemon is alive" in data["text"])
    state = bench.until_state("halted", "loading", "running")["state"]
    if state == "halted":
        # The kill hit a trial: the rig's watchdog stopped it, and going on takes a person.
        assert bench.tell("resume", "--why", "axis looked at")[1]["ok"]
    assert bench.end(daemon) == ExitCode.OK
