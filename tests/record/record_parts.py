"""Small made-up trials for the record's tests; also imported by the process that gets killed."""

import json
import math

import numpy as np

from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Level, Purpose, Trial, Verdict
from trialrunner.record import DaemonRow, RecordWriter, RequestRow, RunFacts, TrialTiming

N, NU, NY, NA = 50, 2, 1, 1

DAEMON = DaemonRow("start", "2026-01-02T00:00:00Z", "0.1", "{}", "[run]")
TIMING = TrialTiming("2026-01-01T00:00:01Z", 5, 0.001, 0.002)


def channel(role, index, name, unit):
    values = {"number": 2, "role": role, "index": index, "name": name, "unit": unit}
    return values | {"low": -10.0, "high": 10.0, "rate_per_s": math.inf, "meaning": ""}


def facts():
    return RunFacts(
        config_text="[run]",
        rig={
            "greeting": {"name": "x"},
            "inputs": [channel(0, 0, "x", "N"), channel(0, 1, "y", "N")],
            "outputs": [channel(1, 0, "z", "mm")],
            "auxiliary": [channel(2, 0, "warmth", "Cel")],
        },
        limits={"low": [-1.0, -1.0], "high": [1.0, 1.0], "rate_per_s": [math.inf, 5.0]},
        sample_type="f4",
        version="0.1",
        started_utc="2026-01-01T00:00:00Z",
    )


def f4(values):
    return np.asarray(values, dtype=np.float32).astype(np.float64)


REFERENCE = f4(np.linspace(0, 1, N)[:, None])


def carry(k, **changes):
    """The arrays with which trial k begins."""
    feedforward = f4(np.random.default_rng(k).normal(size=(N, NU)))
    values = {
        "feedforward": feedforward,
        "clipped": np.zeros((N, NU), dtype=bool),
        "learned": feedforward,
        "mean_error": np.zeros((N, NY)),
    }
    return Carry(**(values | changes))


def trial(k, feedforward, **changes):
    rng = np.random.default_rng(1000 + k)
    values = {
        "index": k,
        "purpose": Purpose.LEARN,
        "feedforward": feedforward,
        "reference": REFERENCE,
        "output": f4(rng.normal(size=(N, NY))),
        "auxiliary": f4(rng.normal(size=(N, NA))),
        "limited": rng.random((N, NU)) < 0.3,
        "start_state": np.array([0.1]),
        "start_lateness_s": 1e-6,
        "count": N,
    }
    return Trial(**(values | changes))


def outcome(k, after, **changes):
    values = {
        "verdicts": (Verdict("integrity", Level.PASS), Verdict("x", Level.WARN, "why", 1.5, 1.2)),
        "void": False,
        "norm": 0.1 * (k + 1),
        "action": "learn",
        "sentence": f"Trial {k}.",
        "state": RunState(trial=k + 1, best_norm=0.1, best_trial=0),
        "carry": after,
    }
    return Outcome(**(values | changes))


def request(k, **changes):
    values = {
        "id": f"request-{k:04d}",
        "kind": "rollback",
        "target": "0",
        "who": "ann",
        "why": "looked odd",
        "asked_utc": "2026-01-01T00:00:02Z",
        "effect_trial": 1,
        "changes_state": True,
        "ok": True,
        "answer": json.dumps({"ok": True}),
    }
    return RequestRow(**(values | changes))


def new_writer(path):
    return RecordWriter.create(path, facts(), REFERENCE, RunState(), carry(0))


def open_writer(path):
    return RecordWriter.open(path, DAEMON)


def fill(writer, count, start=None):
    """Commit trials with the arrays that `carry` makes."""
    start = writer.state.trial if start is None else start
    for k in range(start, start + count):
        writer.commit_trial(trial(k, writer.carry.feedforward), outcome(k, carry(k + 1)), TIMING)
