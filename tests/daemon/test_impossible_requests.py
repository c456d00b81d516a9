"""A request that cannot be done is refused; it never ends the run."""

import json

import pytest

from trialrunner.core.cycle import State
from trialrunner.record import RecordReader
from trialrunner.replay import Replay


def finished(run, counted):
    run.run()
    assert run.session.exit_reason == ""
    assert run.session.state.counted == counted
    with RecordReader(run.config.record_path) as reader:
        replay = Replay(reader)
        assert all(row.same for row in replay.trials())
        return reader.requests()


@pytest.mark.parametrize("target", ["99", "3"])
def test_a_roll_back_to_a_trial_that_was_not_run_is_refused_at_once(world, target):
    """The answer names the trials that there are; the run goes on."""
    run = world(trials=5)
    run.until_trial(2)
    run.until_state(State.RUNNING)
    reply = run.tell("rollback", to=target)
    assert not reply.ok
    assert f"trial {target} is unknown; trials 0 to 2 have been run" in reply.text
    (row,) = finished(run, 5)
    assert (row.ok, row.changes_state) == (False, False)


def test_a_roll_back_before_anything_was_learned_is_refused(world):
    """There is nothing to go back to."""
    run = world(trials=4)
    run.until_state(State.RUNNING)
    reply = run.tell("rollback")
    assert not reply.ok
    assert "nothing has been learned yet" in reply.text
    finished(run, 4)


def test_the_trial_under_way_can_be_rolled_back_to(world):
    """It will have been run by then."""
    run = world(trials=5)
    run.until_trial(2)
    run.until_state(State.RUNNING)
    assert run.tell("rollback", to="2").ok
    (row,) = finished(run, 5)
    assert row.changes_state


def test_learning_is_not_taken_up_in_the_floor_trials(world):
    """Refused at once."""
    run = world(trials=3)
    run.until(lambda: run.session.state.floor_left > 0)
    run.until_state(State.RUNNING)
    reply = run.tell("learn")
    assert not reply.ok
    assert "floor trials" in reply.text
    finished(run, 3)


def test_what_becomes_impossible_before_it_takes_effect_changes_nothing(world):
    """A roll back accepted in the last learning trial meets the floor trials."""
    run = world(trials=3)
    run.until_trial(2)
    run.until_state(State.RUNNING)
    assert run.tell("rollback", to="1").ok
    (row,) = finished(run, 3)
    assert (row.ok, row.changes_state) == (False, False)
    answer = json.loads(row.answer)
    assert not answer["ok"]
    assert "floor trials run" in answer["text"]
