"""Replay: bit for bit with the same settings, honest about where others diverge."""

import hashlib
import json
import sqlite3

import click
import pytest
from click.testing import CliRunner

from drivers.messages import RigState
from trialrunner.__main__ import run_command
from trialrunner.cli.replay import command
from trialrunner.config import ConfigError
from trialrunner.exit_codes import ExitCode
from trialrunner.record import RecordReader
from trialrunner.replay import Replay, ReplayError


def replayed(path, *overrides):
    with RecordReader(path) as reader:
        replay = Replay(reader, overrides)
        return list(replay.trials()), replay


@pytest.mark.parametrize(
    "faults",
    [
        (),
        ("missed_start@trial=2", "drop@p=0.5"),
        ("gain@from=4,size=4",),
        ("noise@from=3,size=3000",),
    ],
    ids=["healthy", "voids", "gain", "noise"],
)
def test_the_same_settings_reproduce_everything_bit_for_bit(world, faults):
    run = world(trials=10, faults=faults)
    run.until(lambda: run.session.finished or run.session.state.halted)
    run.close()
    rows, replay = replayed(run.config.record_path)
    assert rows
    assert [row.differences for row in rows] == [()] * len(rows)
    assert replay.counterfactual_from is None


@pytest.mark.parametrize(
    "setting",
    [
        "learn.average_trials=2",
        "learn.forgetting=0.05",
        "stop.baseline_trials=2",
        "inputs.0.change_cap=0.05",
        "learn.limit_method='projection'",
        "learn.soft_start_trials=4",
    ],
)
def test_every_way_of_learning_is_reproduced(world, setting):
    run = world(trials=8, overrides=[setting, "inputs.0.high=0.3", "inputs.0.low=-0.3"]).run()
    rows, _ = replayed(run.config.record_path)
    assert all(row.same for row in rows)


def test_operator_requests_are_replayed_where_they_took_effect(world):
    run = world(trials=9)
    for at, verb, arguments in ((2, "freeze", {}), (4, "learn", {}), (5, "rollback", {"to": "1"})):
        run.until_trial(at)
        run.until(lambda: run.session.cycle.in_trial)
        run.tell(verb, **arguments)
    run.until_trial(7)
    run.tell("pause")
    run.until(lambda: run.session.cycle.state == "paused")
    run.tell("note", why="lunch")
    run.tell("resume")
    run.run()
    rows, _ = replayed(run.config.record_path)
    assert len(rows) == 12
    assert all(row.same for row in rows)


def test_a_restarted_run_is_replayed_as_one(world):
    run = world(trials=6)
    run.until_trial(3)
    run.close()
    again = world(trials=6).run()
    rows, _ = replayed(again.config.record_path)
    assert all(row.same for row in rows)


def test_late_updates_are_replayed_as_late(world):
    run = world(trials=6)
    run.until_trial(2)
    advancer = run.session.built.advancer
    learn = advancer.advance_judged

    def slow(judged, recall, late=False):
        """The deadline passes while the law computes."""
        if not late:
            run.session._deadline()
        return learn(judged, recall, late)

    advancer.advance_judged = slow
    run.until_trial(3)
    del advancer.advance_judged
    run.run()
    assert run.session.state.late_updates == 1
    rows, _ = replayed(run.config.record_path)
    assert all(row.same for row in rows)
    assert rows[2].recorded.action == "repeat"
    assert "too late" in rows[2].recorded.sentence


def test_another_law_parts_at_its_first_update_and_says_so(world):
    """Trial 0 is still told of; trial 1 would have played something else."""
    run = world(trials=6).run()
    rows, replay = replayed(run.config.record_path, "law.proportional=0.3")
    assert replay.counterfactual_from == 1
    assert replay.because == "trial 1 would have played something else"
    assert [row.counterfactual for row in rows] == [False, *[True] * 8]
    assert all(row.replayed.norm == row.recorded.norm for row in rows)


def test_another_guard_setting_shows_the_verdict_it_would_have_given(world):
    """And the record tells of every trial up to that verdict."""
    run = world(
        trials=10, faults=["gain@from=6,size=5"], overrides=["guards.error_growth.enabled=false"]
    ).run()
    rows, replay = replayed(run.config.record_path, "guards.error_growth.enabled=true")
    changed = [row for row in rows if row.replayed.level > row.recorded.level]
    assert changed[0].index >= 6
    assert changed[0].replayed.worst.guard == "error_growth"
    assert not changed[0].counterfactual
    assert replay.counterfactual_from == changed[0].index + 1
    assert [row.counterfactual for row in rows] == [row.index > changed[0].index for row in rows]


def test_a_verdict_that_changes_no_decision_does_not_part_the_ways(world):
    """A warning more or less is shown, and the rig would have played the same."""
    run = world(trials=6, overrides=["guards.error_growth.action='warn'"]).run()
    rows, replay = replayed(
        run.config.record_path, "guards.saturation.action='warn'", "guards.saturation.share=0.0001"
    )
    assert replay.counterfactual_from is None
    assert not any(row.counterfactual for row in rows)


def test_a_replay_that_ends_earlier_says_so(world):
    """Later trials would not have been run."""
    run = world(trials=6).run()
    rows, replay = replayed(run.config.record_path, "stop.trials=3", "stop.floor_trials=0")
    assert replay.counterfactual_from == 3
    assert "finish" in replay.because
    assert rows[2].replayed.action == "finish"
    assert rows[3].counterfactual


def test_a_replay_that_would_go_on_where_the_record_ends_says_so(world):
    """The record tells of all that it has."""
    run = world(trials=4, overrides=["stop.floor_trials=0"]).run()
    rows, replay = replayed(run.config.record_path, "stop.trials=9")
    assert [row.counterfactual for row in rows] == [False] * 4
    assert replay.counterfactual_from == 4
    code, output = run_cli(run.config.record_path, "--set", "stop.trials=9")
    assert code == ExitCode.OK
    assert "ends there" in output


def test_another_start_parts_before_the_first_trial(world):
    """A run that would have begun with a baseline trial."""
    run = world(trials=3).run()
    rows, replay = replayed(run.config.record_path, "stop.baseline_trials=2")
    assert replay.counterfactual_from == 0
    assert rows[0].counterfactual
    assert replay.because == "trial 0 would have been a baseline trial"


def test_a_tighter_limit_is_asked_about_within_the_rigs_own(world):
    """The tighter of both still holds; a wider one changes nothing where the rig is the tighter."""
    run = world(trials=4).run()
    _, wider = replayed(run.config.record_path, "inputs.0.high=50.0", "inputs.0.low=-50.0")
    assert wider.counterfactual_from is None
    assert not wider.first_difference
    _, tighter = replayed(run.config.record_path, "inputs.0.high=0.01", "inputs.0.low=-0.01")
    assert tighter.counterfactual_from == 1


def test_a_request_that_would_not_have_been_possible_parts_the_ways(world):
    """Later trials are judged as recorded all the same."""
    run = world(trials=6)
    run.until_trial(2)
    run.until(lambda: run.session.cycle.in_trial)
    run.tell("rollback", to="1")
    run.run()
    with sqlite3.connect(run.config.record_path) as db:
        db.execute("UPDATE requests SET target = '99'")
    db.close()
    rows, replay = replayed(run.config.record_path)
    assert replay.first_difference.startswith("trial 3: the operator's rollback")
    assert "would not have been possible: rollback: trial 99 is unknown" in replay.because
    assert replay.counterfactual_from == 3
    assert all(row.replayed is not None for row in rows)


def test_a_run_halted_by_a_guard_and_resumed_is_reproduced(world):
    """The operator's word is part of what is replayed."""
    run = world(trials=6, faults=[f"missed_start@trial={k}" for k in (2, 3, 4, 5)])
    run.until(lambda: run.session.state.halted)
    run.until(lambda: run.rig.runner.state is RigState.SAFE)
    for _ in range(50):
        run.turn()
    run.tell("resume", why="sensor cleaned")
    run.run()
    rows, replay = replayed(run.config.record_path)
    assert [row.recorded.action for row in rows[2:7]] == ["repeat"] * 3 + ["halt", "learn"]
    assert not replay.first_difference


def test_each_daemons_own_stop_rules_are_replayed(world):
    """A run that was resumed with more trials than it began with."""
    run = world(trials=4)
    run.until_trial(2)
    run.close()
    again = world(trials=9).run()
    assert again.session.state.counted == 9
    rows, replay = replayed(again.config.record_path)
    assert len(rows) == 12
    assert not replay.first_difference


def test_a_configured_first_feedforward_is_taken_from_the_record(world, tmp_path):
    """Its file may be gone by now."""
    import numpy as np

    file = tmp_path / "start.npz"
    wish = 0.05 * np.sin(np.linspace(0, 2 * np.pi, 100))
    np.savez(file, force=wish)
    run = world(trials=3, overrides=[f"run.initial_feedforward='{file}'"])
    run.run()
    file.unlink()
    _, replay = replayed(run.config.record_path)
    assert not replay.first_difference
    with RecordReader(run.config.record_path) as reader:
        assert reader.trial(0).trial.feedforward.any()
    _, tighter = replayed(run.config.record_path, "inputs.0.high=0.01")
    assert tighter.counterfactual_from == 0


def test_settings_that_cannot_be_are_refused(world):
    """In the words of the configuration."""
    run = world(trials=2).run()
    with pytest.raises(ConfigError, match="no_such_guard"):
        replayed(run.config.record_path, "guards.no_such_guard.ratio=2")


@pytest.mark.parametrize(
    "override",
    [
        "trial.n_samples=50",
        "link.silence_s=2.0",
        "run.name='other'",
        "reference.waypoints=[[0.0], [2.0], [0.0]]",
        "inputs.0.unit='kN'",
        "outputs.0.name='other'",
        "learn.update_deadline_s=1.0",
    ],
)
def test_what_a_record_cannot_answer_is_a_usage_error(world, override):
    """Said before anything is replayed."""
    run = world(trials=2).run()
    with pytest.raises(ReplayError, match="a record cannot answer that"):
        replayed(run.config.record_path, override)
    arguments = [str(run.config.record_path), "--set", override]
    with pytest.raises(click.UsageError, match="a record cannot answer that"):
        command.main(arguments, standalone_mode=False)


@pytest.mark.parametrize(
    ("tampering", "words"),
    [
        ("UPDATE trials SET norm = norm * 1.0000001 WHERE trial = 1", "trial 1: error norm"),
        ("UPDATE trials SET action = 'repeat' WHERE trial = 1", "trial 1: action"),
        ("UPDATE trials SET sentence = 'x' WHERE trial = 2", "trial 2: sentence"),
        (
            "UPDATE verdicts SET level = 'warn' WHERE entry = 4 AND place = 1",
            "trial 2: start_state",
        ),
        (
            "UPDATE verdicts SET value = 7.0 WHERE entry = 4 AND place = 1",
            "trial 2: start_state: pass (7.0, limit 0.0) -> pass",
        ),
        ("UPDATE verdicts SET bound = 7.0 WHERE entry = 4 AND place = 1", "trial 2: start_state"),
        ("UPDATE verdicts SET void = 1 WHERE entry = 4 AND place = 1", "trial 2: start_state"),
        ("DELETE FROM verdicts WHERE entry = 4 AND place = 1", "trial 2: start_state"),
        (
            "UPDATE entries SET state = replace(state, '\"updates\":2', '\"updates\":3') "
            "WHERE entry = 3",
            "trial 1: afterwards, another run state: updates 3 -> 2",
        ),
        ("UPDATE trials SET late = 1 WHERE trial = 1", "trial 1: action: learn -> repeat"),
    ],
)
def test_one_altered_value_anywhere_is_named(world, tampering, words):
    """Verdict, norm, decision, state, lateness: the first difference says what and where."""
    run = world(trials=3).run()
    with sqlite3.connect(run.config.record_path) as db:
        assert db.execute(tampering).rowcount == 1
    db.close()
    _, replay = replayed(run.config.record_path)
    assert replay.first_difference.startswith(words)
    code, output = run_cli(run.config.record_path)
    assert code == ExitCode.DIFFERENT
    assert "Not reproduced" in output


def test_one_altered_bit_of_a_feedforward_is_named(world):
    """With a checksum to match, so that only the replay can tell."""
    run = world(trials=3).run()
    where = "name = 'next.feedforward' AND entry = 3"
    with sqlite3.connect(run.config.record_path) as db:
        (data,) = db.execute(f"SELECT data FROM arrays WHERE {where}").fetchone()
        altered = bytearray(data)
        altered[200] ^= 1
        digest = hashlib.sha256(altered).digest()
        db.execute(f"UPDATE arrays SET data = ?, sha256 = ? WHERE {where}", (altered, digest))
    db.close()
    rows, replay = replayed(run.config.record_path)
    assert replay.first_difference.startswith("trial 1: afterwards, other arrays: feedforward")
    assert replay.counterfactual_from == 2
    assert rows[0].same


def run_cli(*arguments):
    result = CliRunner().invoke(command, [str(one) for one in arguments], standalone_mode=False)
    assert result.exception is None, result.exception
    return result.return_value, result.output


def test_the_command_says_reproduced_and_exits_zero(world):
    run = world(trials=3).run()
    code, output = run_cli(run.config.record_path, "--verify")
    assert code == ExitCode.OK
    assert "Reproduced: 6 trials, bit for bit" in output


def test_the_command_exits_non_zero_and_names_the_first_difference(world):
    run = world(trials=3).run()
    with sqlite3.connect(run.config.record_path) as db:
        db.execute("UPDATE trials SET norm = norm * 1.0000001 WHERE trial = 1")
    db.close()
    code, output = run_cli(run.config.record_path)
    assert code == ExitCode.DIFFERENT
    assert "trial 1: error norm" in output
    code, output = run_cli(run.config.record_path, "--verify")
    assert code == ExitCode.RECORD


def test_the_command_prints_json_for_scripts(world):
    """Rows and the finding in one object, without NaN."""
    run = world(trials=3, faults=["nan@trial=1"]).run()

    def refuse(word):
        raise AssertionError(f"{word} is no JSON")

    arguments = (run.config.record_path, "--json", "--all", "--set", "law.proportional=0.2")
    code, output = run_cli(*arguments)
    result = json.loads(output, parse_constant=refuse)
    assert code == ExitCode.OK
    assert result["counterfactual_from"] == 1
    assert result["trials"] == len(result["rows"]) == 7
    assert not result["reproduced"]
    first, second = result["rows"][:2]
    assert (first["trial"], first["counterfactual"]) == (0, False)
    assert second["recorded"]["void"]
    assert second["recorded"]["norm"] is None
    assert second["replayed"]["verdicts"][0]["guard"] == "integrity"
    assert len(result["chain"]) == 64


def test_json_without_a_row_is_json(world):
    """A record that is reproduced has nothing to show."""
    run = world(trials=2).run()
    code, output = run_cli(run.config.record_path, "--json", "--verify")
    result = json.loads(output)
    assert code == ExitCode.OK
    assert result["rows"] == []
    assert result["reproduced"]
    assert result["verified"]
    assert result["first_difference"] is None


def test_what_the_record_cannot_tell_stands_in_brackets(world):
    """Also where colours do not show; the sentence says from where on and why."""
    run = world(
        trials=10, faults=["gain@from=6,size=5"], overrides=["guards.error_growth.enabled=false"]
    ).run()
    asked = ("--set", "guards.error_growth.enabled=true", "--all")
    code, output = run_cli(run.config.record_path, *asked)
    assert code == ExitCode.OK
    lines = output.splitlines()
    start = next(line for line in lines if "the record can no longer tell" in line).split()[2]
    told = [line for line in lines if line.split()[:1] == [str(int(start) - 1)]]
    beyond = [line for line in lines if line.split()[:1] == [start]]
    assert "(" not in told[0].split("by error_growth")[0]
    assert "(" in beyond[0]


def test_a_long_list_of_differences_is_cut_short(world, monkeypatch):
    """With the number of those left out."""
    run = world(trials=6).run()
    monkeypatch.setattr("trialrunner.replay_view.MAX_ROWS", 2)
    with sqlite3.connect(run.config.record_path) as db:
        db.execute("UPDATE trials SET sentence = 'x'")
    db.close()
    code, output = run_cli(run.config.record_path)
    assert code == ExitCode.DIFFERENT
    assert "7 more such trials" in output
    assert "9 of 9 trials differ" in output


def test_damage_is_told_by_place_and_by_exit_code(world, capsys):
    """Before anything is replayed."""
    run = world(trials=2).run()
    with sqlite3.connect(run.config.record_path) as db:
        db.execute("UPDATE arrays SET data = zeroblob(length(data)) WHERE name = 'output'")
    db.close()
    code, output = run_cli(run.config.record_path, "--verify")
    assert code == ExitCode.RECORD
    assert "trial 0, output: the stored bytes do not agree" in output
    assert run_command(["replay", str(run.config.record_path)]) == ExitCode.RECORD
    assert "restore the record from a copy" in capsys.readouterr().err
    assert run_command(["replay", "no-such-record"]) == ExitCode.RECORD


def test_a_record_that_a_daemon_still_writes_is_replayed_as_far_as_it_goes(world):
    """Nothing waits, nothing is locked."""
    run = world(trials=6)
    run.until_trial(3)
    rows, replay = replayed(run.config.record_path)
    assert len(rows) == 3
    assert not replay.first_difference
    run.run()
    assert run.session.state.counted == 6
