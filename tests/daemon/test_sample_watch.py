"""The envelope while samples stream in: the rig is halted in the middle of the trial."""

import numpy as np
import pytest

from drivers.messages import RigState
from mock_rig.options import RigOptions
from trialrunner.core.cycle import State
from trialrunner.core.trial import Level
from trialrunner.record import RecordReader

LIMITS = {
    "error": "guards.envelope.error_limits={ position = 1.2 }",
    "rate": "guards.envelope.rate_limits_per_s={ position = 20.0 }",
    "tube": "guards.envelope.tube={ position = 0.9 }",
}


@pytest.mark.parametrize("limit", ["error", "rate"])
def test_a_breach_halts_at_once_and_the_trial_is_void(world, limit):
    """Long before the trial would have ended; the record tells the same limit."""
    run = world(
        trials=6,
        options=RigOptions(fast=False),
        faults=["gain@trial=3,size=-9"],
        overrides=[LIMITS[limit]],
    )
    run.until_state(State.HALTED)
    assert run.session.state.trial == 3
    assert "envelope" in run.session.halted_by
    assert "the limit is" in run.session.halted_by
    run.until(lambda: run.rig.runner.state is RigState.SAFE)
    run.until(lambda: run.session.state.trial == 4)
    with RecordReader(run.config.record_path) as reader:
        row = reader.trial(3)
        said = next(one for one in reader.verdicts(3) if one.guard == "envelope")
    assert row.summary.void
    assert np.isnan(row.trial.output[-20:]).all(), "the rig was stopped before its end"
    assert (said.level, said.void) == (Level.HALT, True)
    assert said.value > said.limit


def test_the_tube_lies_around_the_last_accepted_trial(world):
    run = world(
        trials=6,
        options=RigOptions(fast=False),
        faults=["gain@trial=4,size=-9"],
        overrides=[LIMITS["tube"]],
    )
    run.until_state(State.HALTED)
    assert run.session.state.trial == 4
    assert "last accepted trial" in run.session.halted_by


def test_after_a_resume_the_run_goes_on(world):
    run = world(trials=6, faults=["gain@trial=3,size=-9"], overrides=[LIMITS["error"]])
    run.until_state(State.HALTED)
    run.until(lambda: run.rig.runner.state is RigState.SAFE)
    run.until(lambda: run.session.state.trial == 4)
    run.tell("resume", why="looked at it")
    run.run()
    assert run.session.state.counted == 6
    assert run.session.state.voids == 1


def test_a_healthy_run_never_touches_its_envelope(world):
    run = world(trials=6, overrides=list(LIMITS.values())).run()
    assert run.session.state.over
    assert run.session.state.voids == 0


def test_lost_and_reordered_blocks_are_no_breach(world):
    """A gap between blocks is no jump."""
    faults = ["drop@from=0,size=2", "reorder@from=0", "duplicate@from=0"]
    run = world(trials=6, faults=faults, overrides=list(LIMITS.values())).run()
    assert run.session.state.counted == 6
    assert run.session.state.voids == 0
