"""The whole daemon against the mock rig, in one thread on a hand-moved clock."""

import numpy as np
import pytest

from drivers.errors import LinkError
from drivers.messages import FaultCode, RigState
from mock_rig.options import RigOptions
from trialrunner.core.cycle import State
from trialrunner.record import RecordReader, RecordUnwritable
from trialrunner.run_parts import RunRefused


def played(path):
    """Feedforward of every recorded trial, and the rows beside it."""
    with RecordReader(path) as reader:
        return [(one.summary, one.trial) for one in reader.trials()]


def test_a_run_learns_down_to_its_floor_and_ends(world):
    run = world(trials=8).run()
    state = run.session.state
    assert state.over
    assert state.counted == 8
    assert state.best_norm < state.first_norm / 20
    assert np.isfinite(state.floor_norm)
    assert run.rig.runner.state in (RigState.READY, RigState.RETURNING)
    assert run.session.exit_reason == ""


def test_the_record_holds_what_the_rig_was_sent_and_the_law_starts_from_it(world):
    run = world(trials=5).run()
    rows = played(run.config.record_path)
    assert [summary.index for summary, _ in rows] == list(range(8))
    for _, trial in rows:
        as_sent = trial.feedforward.astype(np.float32)
        np.testing.assert_array_equal(as_sent, trial.feedforward)
    assert not np.array_equal(rows[0][1].feedforward, rows[1][1].feedforward)


@pytest.mark.parametrize("kind", ["drop", "duplicate", "reorder", "late", "corrupt"])
def test_spoiled_blocks_cost_a_resend_at_most_and_no_trial(world, kind):
    run = world(trials=4, faults=[f"{kind}@from=0"]).run()
    assert run.session.state.voids == 0
    clean = world(trials=4, record="clean.trialrecord").run()
    for (_, one), (_, two) in zip(
        played(run.config.record_path), played(clean.config.record_path), strict=True
    ):
        np.testing.assert_array_equal(one.feedforward, two.feedforward)


def test_lost_and_doubled_answers_change_nothing(world):
    faults = ["lost_answer@from=0,size=3", "double_answer@from=0"]
    run = world(trials=4, faults=faults).run()
    assert run.session.state.counted == 4
    assert run.session.state.voids == 0


@pytest.mark.parametrize(
    ("fault", "guard"),
    [
        ("missed_start@trial=2", "integrity"),
        ("cut_short@trial=2", "integrity"),
        ("nan@trial=2", "integrity"),
        ("offset@trial=2,size=2", "start_state"),
        ("late_start@trial=2,size=0.5", "start_timing"),
        ("spike@trial=2", "integrity"),
    ],
)
def test_a_trial_that_cannot_be_trusted_is_void_and_repeated_unchanged(world, fault, guard):
    run = world(trials=4, faults=[fault]).run()
    rows = played(run.config.record_path)
    assert [summary.void for summary, _ in rows[:5]] == [False, False, True, False, False]
    np.testing.assert_array_equal(rows[2][1].feedforward, rows[3][1].feedforward)
    with RecordReader(run.config.record_path) as reader:
        voiding = [verdict for verdict in reader.verdicts(2) if verdict.void]
    assert voiding[0].guard == guard
    assert voiding[0].reason


def test_too_many_voids_in_a_row_halt_the_run(world):
    run = world(trials=6, faults=["missed_start@from=1"])
    run.until_state(State.HALTED)
    assert "void" in run.session.state.halted
    run.until(lambda: run.rig.runner.state is RigState.SAFE)


def test_an_emergency_stop_holds_everything_until_a_person_resumes(world):
    run = world(trials=5, faults=["emergency_stop@trial=2,size=0.01"])
    run.until_state(State.HALTED)
    for _ in range(2000):
        run.turn()
    assert run.session.cycle.state is State.HALTED
    assert run.rig.runner.state is RigState.SAFE
    assert run.session.state.trial == 3
    reply = run.tell("resume", why="button checked and released")
    assert reply.ok
    run.run()
    assert run.session.state.counted == 5
    rows = played(run.config.record_path)
    assert rows[2][0].void
    np.testing.assert_array_equal(rows[2][1].feedforward, rows[3][1].feedforward)


def test_a_rig_that_refuses_to_leave_its_safe_state_keeps_the_run_halted(world):
    run = world(trials=5, faults=["emergency_stop@trial=1,size=1e6"])
    run.until_state(State.HALTED)
    run.tell("resume")
    run.until_state(State.LOADING)
    run.until_state(State.HALTED)
    assert any("still pressed" in values["text"] for values in run.topics("event"))


def test_an_operators_halt_reaches_the_rig_at_once_in_a_trial(world):
    run = world(trials=5, options=RigOptions(fast=False))
    run.until_state(State.RUNNING)
    run.tell("halt", why="smoke")
    assert run.session.cycle.state is State.HALTED
    run.session.turn()
    run.turn_rig(run.clock.now_ns())
    assert run.rig.runner.state is RigState.SAFE
    run.until(lambda: run.session.state.trial == 1)
    assert played(run.config.record_path)[0][0].void
    assert run.session.cycle.state is State.HALTED


def test_pause_waits_for_the_trial_and_resume_goes_on(world):
    run = world(trials=5)
    run.until_trial(1)
    run.until_state(State.RUNNING)
    reply = run.tell("pause")
    assert reply.ok
    run.until_state(State.PAUSED)
    paused_at = run.session.state.trial
    assert paused_at == reply.trial
    for _ in range(500):
        run.turn()
    assert run.session.state.trial == paused_at
    assert run.tell("resume").ok
    run.run()
    assert run.session.state.counted == 5


def test_freeze_holds_for_the_update_of_the_trial_under_way_and_learn_ends_it(world):
    run = world(trials=6)
    run.until_trial(2)
    run.until_state(State.RUNNING)
    assert run.tell("freeze").trial == 2
    run.until_trial(4)
    assert not run.session.state.learning
    run.until_state(State.RUNNING)
    run.tell("learn")
    run.run()
    rows = played(run.config.record_path)
    for one, two in ((2, 3), (3, 4)):
        np.testing.assert_array_equal(rows[one][1].feedforward, rows[two][1].feedforward)
    assert not np.array_equal(rows[4][1].feedforward, rows[5][1].feedforward)


def test_rollback_plays_the_feedforward_of_the_named_trial(world):
    run = world(trials=7)
    run.until_trial(3)
    run.until_state(State.RUNNING)
    reply = run.tell("rollback", to="1")
    assert reply.trial == 4
    run.run()
    rows = played(run.config.record_path)
    np.testing.assert_array_equal(rows[4][1].feedforward, rows[1][1].feedforward)
    with RecordReader(run.config.record_path) as reader:
        request = reader.requests()[0]
    assert (request.kind, request.target, request.who, request.why) == (
        "rollback",
        "1",
        "tester",
        "test",
    )
    assert request.effect_trial == 4


def test_requests_at_rest_take_effect_at_once(world):
    run = world(trials=6)
    run.until_trial(2)
    run.tell("pause")
    run.until_state(State.PAUSED)
    at = run.session.state.trial
    assert run.tell("rollback", to="0").trial == at
    run.until(lambda: not run.session.jobs.has_work)
    run.tell("resume")
    run.run()
    rows = played(run.config.record_path)
    np.testing.assert_array_equal(rows[at][1].feedforward, rows[0][1].feedforward)


def test_an_unplugged_line_voids_the_trial_and_the_run_goes_on_when_it_is_back(world):
    run = world(trials=5, options=RigOptions(fast=False))
    run.until_trial(2)
    run.until_state(State.RUNNING)
    run.unplug()
    run.until(lambda: run.session.state.trial == 3)
    run.until(lambda: run.rig.runner.state is RigState.SAFE)
    assert run.rig.runner.heartbeat(0).fault == FaultCode.WATCHDOG
    for _ in range(300):
        run.turn()
    run.plug_in()
    run.until_state(State.HALTED)
    run.tell("resume", why="cable back, axis free")
    run.run()
    assert run.session.state.counted == 5
    rows = played(run.config.record_path)
    assert rows[2][0].void
    np.testing.assert_array_equal(rows[2][1].feedforward, rows[3][1].feedforward)


def test_a_line_lost_between_trials_costs_nothing(world):
    run = world(trials=5)
    run.until_trial(2)
    run.until(lambda: run.rig.runner.state is RigState.RETURNING)
    run.unplug()
    for _ in range(200):
        run.turn()
    run.plug_in()
    run.run()
    assert run.session.state.counted == 5


def test_a_rig_that_dies_and_comes_back_is_greeted_again(world):
    run = world(trials=5, faults=["crash@trial=2,size=2"]).run()
    assert run.crashes == 1
    assert run.session.state.counted == 5
    assert run.session.state.voids == 1


def test_a_silent_rig_is_noticed_and_its_trial_void(world):
    run = world(trials=4, faults=["silence@trial=1,size=3"])
    run.until_trial(2)
    assert played(run.config.record_path)[1][0].void
    assert any("nothing was heard" in values["text"] for values in run.topics("event"))


def test_sigterm_ends_at_the_trial_boundary_and_the_next_daemon_goes_on(world):
    run = world(trials=6)
    run.until_trial(2)
    run.until_state(State.RUNNING)
    run.session.request_stop("SIGTERM")
    run.run()
    assert run.session.state.trial == 3
    assert not run.session.state.over
    again = world(trials=6).run()
    assert again.session.state.counted == 6


def test_a_second_sigterm_stops_the_trial_at_once(world):
    run = world(trials=6, options=RigOptions(fast=False))
    run.until_trial(1)
    run.until_state(State.RUNNING)
    run.session.request_stop("SIGTERM")
    run.session.request_stop("SIGTERM")
    run.run()
    assert run.session.state.trial <= 2
    assert run.rig.runner.state is RigState.SAFE


@pytest.mark.parametrize("stop_at", [0, 1, 3, 5])
def test_a_resumed_run_is_bit_identical_to_one_without_interruption(world, stop_at):
    whole = world(trials=6, record="whole.trialrecord").run()
    run = world(trials=6)
    if stop_at:
        run.until_trial(stop_at)
    run.until_state(State.RUNNING)
    run.close()
    again = world(trials=6).run()
    assert again.session.state.counted == 6
    for (_, one), (_, two) in zip(
        played(run.config.record_path), played(whole.config.record_path), strict=True
    ):
        np.testing.assert_array_equal(one.feedforward, two.feedforward)
        np.testing.assert_array_equal(one.output, two.output)


def test_a_finished_run_is_not_run_again(world):
    world(trials=3).run()
    again = world(trials=3).run()
    assert again.session.state.trial == 6
    assert again.session.finished


def test_a_changed_configuration_is_refused_with_the_difference(world):
    world(trials=3).run()
    with pytest.raises(RunRefused, match=r"law\.proportional: 0\.6 -> 0\.5"):
        world(trials=3, overrides=["law.proportional=0.5"]).run()


def test_a_rig_that_is_not_the_configured_one_is_refused_before_anything_moves(world):
    with pytest.raises(RunRefused, match=r"inputs\.0\.unit: .*'N'"):
        world(overrides=["inputs.0.unit='kN'"]).run()


def test_another_rig_on_the_link_halts_the_run(world):
    run = world(trials=6)
    run.until_trial(2)
    run.options = RigOptions(watchdog_ms=700)
    run.unplug()
    run.boot_rig()
    run.turn()
    run.plug_in()
    run.until_state(State.HALTED)
    assert run.session.state.trial >= 2


def test_a_rig_may_start_its_trials_itself(world):
    run = world(trials=4, start="rig").run()
    assert run.session.state.counted == 4
    assert all(summary.start_lateness_s == 0.0 for summary, _ in played(run.config.record_path))


def test_a_pause_disarms_a_rig_that_waits_to_start_itself(world):
    options = RigOptions(rig_starts=True, rig_start_s=1000.0, fast=False)
    run = world(trials=4, start="rig", options=options)
    run.until_state(State.ARMED)
    run.tell("pause")
    run.until_state(State.PAUSED)
    assert run.rig.runner.state is RigState.READY
    assert run.session.state.trial == 0


def test_tables_beyond_the_rigs_memory_are_streamed_while_the_trial_runs(world):
    whole = world(trials=3, record="whole.trialrecord").run()
    run = world(trials=3, options=RigOptions(table_capacity=16)).run()
    assert run.session.state.counted == 3
    for (_, one), (_, two) in zip(
        played(run.config.record_path), played(whole.config.record_path), strict=True
    ):
        np.testing.assert_array_equal(one.output, two.output)


def test_a_streamed_table_that_runs_dry_voids_the_trial_and_leaves_the_rig_safe(world):
    run = world(trials=3, options=RigOptions(table_capacity=16, fast=False))
    run.until_state(State.RUNNING)
    run.session.line.talk.bulk = lambda: None
    run.until_state(State.HALTED)
    assert run.rig.runner.state is RigState.SAFE
    run.until_trial(1)
    assert played(run.config.record_path)[0][0].finish == "underrun"


def test_double_precision_rigs_get_double_precision_tables(world):
    run = world(trials=3, options=RigOptions(sample_type="f8")).run()
    rows = played(run.config.record_path)
    assert not np.array_equal(rows[1][1].feedforward.astype("f4"), rows[1][1].feedforward)


def test_a_line_that_spoils_a_tenth_of_all_frames_only_slows_the_run(world):
    import random

    chance = random.Random(4)

    def disturb(frame):
        if chance.random() < 0.1:
            at = chance.randrange(len(frame))
            return (frame[:at] + bytes([frame[at] ^ 1]) + frame[at + 1 :],)
        return (frame,)

    clean = world(trials=4, record="clean.trialrecord").run()
    run = world(trials=4, n_samples=100)
    run.disturb = disturb
    run.run()
    assert run.session.line.talk.errors["crc"] > 0
    teaching = [t for s, t in played(run.config.record_path) if not s.void]
    for one, (_, two) in zip(teaching, played(clean.config.record_path), strict=False):
        np.testing.assert_array_equal(one.feedforward, two.feedforward)


def test_the_first_link_that_cannot_be_opened_is_an_error_at_once(world):
    run = world()
    run.line_down = True
    with pytest.raises(LinkError):
        run.turn()


def test_a_commit_that_fails_halts_the_run_with_the_rig_safe(world):
    run = world(trials=6)
    run.until_trial(2)

    def full(*_):
        raise RecordUnwritable("the disk is full")

    run.session.built.writer.commit_trial = full
    run.until(lambda: run.session.finished)
    assert "disk is full" in run.session.exit_reason
    assert run.rig.runner.state is RigState.SAFE
    assert len(played(run.config.record_path)) == 2


def test_memory_of_the_session_does_not_grow_with_trials(world):
    run = world(trials=40, n_samples=60).run()
    assert len(run.session.state.recent_norms) <= 64
    assert len(run.session.line.talk.events) < 10


def test_a_rig_may_own_the_reference_and_is_held_to_its_checksum(world):
    import zlib

    from drivers.tables import table_crc

    shape = np.sin(np.linspace(0, np.pi, 100))[:, None].astype("f4").astype(float)
    checksum = table_crc(shape.astype("<f4").tobytes())
    folder = world(record="unused.trialrecord").config.record_path.parent
    np.savez(folder / "shape.npz", position=shape[:, 0])
    owned = f"reference={{kind='rig', checksum={checksum}, path='{folder / 'shape.npz'}'}}"
    options = RigOptions(reference=shape, chunk=20)
    run = world(trials=4, options=options, overrides=[owned]).run()
    np.testing.assert_array_equal(run.session.built.intake.reference, shape)
    assert run.session.state.best_norm < run.session.state.first_norm / 3
    assert run.rig.tables.keys() == {0}
    other = owned.replace(str(checksum), str(zlib.crc32(b"another")))
    with pytest.raises(RunRefused, match=r"reference\.checksum"):
        world(record="other.trialrecord", options=options, overrides=[other]).run()


def test_a_resume_right_after_a_halt_is_not_halted_by_its_echo(world):
    run = world(trials=4)
    run.until_trial(1)
    run.until_state(State.RUNNING)
    run.tell("halt")
    assert run.tell("resume").ok
    run.run()
    assert any(summary.finish == "halted" for summary, _ in played(run.config.record_path))
    assert run.session.state.counted == 4
