"""The whole way of a trial, with the real law and limits, on a rig of one line of arithmetic."""

import json
import math
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.advance import Advancer
from trialrunner.core.errors import CoreError, SettingError, ShapeError, TransitionError
from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.guards.integrity import Integrity
from trialrunner.core.laws import LawContext, Step
from trialrunner.core.laws.pd import PdSettings
from trialrunner.core.run_state import Carry, Outcome, Request, RunState
from trialrunner.core.settings import (
    Horizon,
    InputChannel,
    LadderSettings,
    LearnSettings,
    OutputChannel,
    RunSettings,
    StopSettings,
)
from trialrunner.core.trial import Array, Level, Purpose, Trial

N = 60
REFERENCE = (1.0 - np.cos(np.linspace(0.0, 2.0 * np.pi, N)))[:, np.newaxis]
CONTEXT = LawContext(
    period_s=0.01,
    n_samples=N,
    n_inputs=1,
    n_outputs=1,
    reference=REFERENCE,
    low=np.array([-5.0]),
    high=np.array([5.0]),
    rate_per_s=np.array([math.inf]),
)


def run_settings(**changes: Any) -> RunSettings:
    values: dict[str, Any] = {
        "horizon": Horizon(n_samples=N, period_s=0.01),
        "inputs": (
            InputChannel(
                name="force", unit="N", low=-5.0, high=5.0, pin_start=False, pin_end=False
            ),
        ),
        "outputs": (OutputChannel(name="x", unit="mm", low=-9.0, high=9.0, start_tolerance=0.1),),
        "law": PdSettings(proportional=0.5),
    }
    return RunSettings(**(values | changes))


@dataclass
class Bench:
    """A rig whose output is its input plus seeded noise, an advancer, and everything that was."""

    advancer: Advancer
    state: RunState
    carry: Carry
    noise: float = 0.001
    learned: list[Array] = field(default_factory=list)
    outcomes: list[Outcome] = field(default_factory=list)

    def trial(self, **changes: Any) -> Trial:
        rng = np.random.default_rng(self.state.trial)
        output = self.carry.feedforward + self.noise * rng.standard_normal((N, 1))
        trial = Trial(
            index=self.state.trial,
            purpose=self.state.purpose,
            feedforward=self.carry.feedforward,
            reference=REFERENCE,
            output=output + changes.pop("offset", 0.0),
            auxiliary=np.zeros((N, 0)),
            limited=np.zeros((N, 1), dtype=bool),
            start_state=np.zeros(1),
        )
        return replace(trial, **changes)

    def play(self, late: bool = False, **changes: Any) -> Outcome:
        """One trial; `offset` is added to the output, other changes are fields of the trial."""
        trial = self.trial(**changes)
        self.learned.append(self.carry.learned)
        outcome = self.advancer.advance(trial, self.state, self.carry, self.recall, late)
        self.state, self.carry = outcome.state, outcome.carry
        self.outcomes.append(outcome)
        return outcome

    def recall(self, trial: int) -> Array:
        return self.learned[trial]

    def request(self, kind: str, target: str = "") -> str:
        self.state, self.carry, sentence = self.advancer.apply_request(
            Request(kind, target), self.state, self.carry, self.recall
        )
        return sentence


def bench(context: LawContext = CONTEXT, **changes: Any) -> Bench:
    advancer = Advancer(run_settings(**changes), context, "f4")
    return Bench(advancer, *advancer.begin())


VOID = {"output": np.full((N, 1), np.nan), "finish": "cut_short", "count": 0}


def assert_same(a: Outcome, b: Outcome) -> None:
    """The same bits in verdicts, state and arrays."""
    assert (a.verdicts, a.void, a.action, a.sentence, a.late) == (
        b.verdicts,
        b.void,
        b.action,
        b.sentence,
        b.late,
    )
    assert json.dumps(a.state.to_json()) == json.dumps(b.state.to_json())
    for name in ("feedforward", "clipped", "learned", "mean_error"):
        assert getattr(a.carry, name).tobytes() == getattr(b.carry, name).tobytes()
    for x, y in ((a.carry.law, b.carry.law), (a.carry.floor, b.carry.floor)):
        assert {k: v.tobytes() for k, v in x.items()} == {k: v.tobytes() for k, v in y.items()}


def test_a_run_learns_down_to_the_noise_and_measures_its_floor() -> None:
    """Twenty trials, four floor trials, the floor close to the noise that was put in."""
    rig = bench(stop=StopSettings(trials=20, floor_trials=4))
    while not rig.state.over:
        rig.play()
    assert len(rig.outcomes) == 24
    assert rig.state.first_norm > 1.0
    assert rig.state.best_norm < 0.002
    assert rig.state.floor_count == 4
    assert rig.state.floor_norm == pytest.approx(0.001, rel=0.15)
    assert rig.outcomes[-1].action == "finish"
    assert "by count" in rig.state.over


def test_the_floor_is_that_of_the_floor_trials() -> None:
    """Streaming, and equal to the plain definition over the stored errors."""
    rig = bench(stop=StopSettings(trials=3, floor_trials=6))
    errors = []
    while not rig.state.over:
        errors.append(rig.trial().error)
        rig.play()
    spread = np.std(np.array(errors[3:]), axis=0, ddof=1)
    assert rig.state.floor_norm == pytest.approx(float(np.sqrt(np.mean(spread**2))), rel=1e-12)


def test_floor_trials_repeat_the_feedforward_of_the_last_trial() -> None:
    """Not an update made from it, which nobody has seen run."""
    rig = bench(stop=StopSettings(trials=3, floor_trials=2))
    for _ in range(2):
        rig.play()
    last = rig.carry.feedforward
    while not rig.state.over:
        rig.play()
        assert rig.carry.feedforward is last


def test_the_first_feedforward_is_zero_or_the_one_given() -> None:
    """Given ones are limited and rounded to the rig's sample type."""
    advancer = bench().advancer
    state, carry = advancer.begin()
    assert (state.trial, state.purpose) == (0, Purpose.LEARN)
    assert not carry.feedforward.any()
    assert carry.mean_error.shape == (N, 1)
    _, carry = advancer.begin(np.full((N, 1), 7.1))
    assert carry.feedforward.max() == np.float32(5.0)
    _, carry = advancer.begin(np.full((N, 1), 0.1))
    assert np.array_equal(carry.feedforward, np.full((N, 1), np.float64(np.float32(0.1))))
    with pytest.raises(ShapeError):
        advancer.begin(np.zeros((N, 2)))


def test_judging_and_advancing_apart_is_the_same_as_together() -> None:
    """The verdicts can be told before the law is done, and nothing else changes."""
    rig = bench()
    rig.play()
    trial = rig.trial()
    judged = rig.advancer.judge(trial, rig.state, rig.carry)
    assert (judged.action, judged.void) == ("learn", False)
    apart = rig.advancer.advance_judged(judged, rig.recall)
    assert judged.verdicts == apart.verdicts
    assert judged.norm == apart.norm
    assert_same(apart, rig.advancer.advance(trial, rig.state, rig.carry, rig.recall))


def test_a_restart_from_json_goes_on_bit_for_bit() -> None:
    """State through JSON, arrays as stored: the next trials are the same."""
    first, second = (bench(stop=StopSettings(baseline_trials=2, trials=9)) for _ in range(2))
    while not first.state.over:
        first.play()
        second.state = RunState.from_json(json.loads(json.dumps(second.state.to_json())))
        second.play()
        assert_same(first.outcomes[-1], second.outcomes[-1])


def test_a_late_update_repeats_what_was_played() -> None:
    """Verdicts and bookkeeping stand; the feedforward, the law's memory and updates do not move."""
    rig = bench()
    rig.play()
    played, trial = rig.carry.feedforward, rig.trial()
    judged = rig.advancer.judge(trial, rig.state, rig.carry)
    outcome = rig.advancer.advance_judged(judged, rig.recall, late=True)
    assert outcome.state == judged.late_state
    assert (outcome.action, outcome.late, outcome.state.late_updates) == ("repeat", True, 1)
    assert np.array_equal(outcome.carry.feedforward, played)
    assert (outcome.state.updates, outcome.state.counted) == (1, 2)
    assert "too late" in outcome.sentence


def test_only_an_update_can_be_late() -> None:
    """A void trial repeats anyway."""
    rig = bench()
    outcome = rig.play(late=True, **VOID)
    assert (outcome.late, outcome.state.late_updates) == (False, 0)


def test_a_void_trial_changes_nothing_but_the_count() -> None:
    """Feedforward, learned feedforward and law stay as they are, and the norm is unknown."""
    rig = bench()
    rig.play()
    before = rig.carry
    outcome = rig.play(**VOID)
    assert outcome.void
    assert math.isnan(outcome.norm)
    assert rig.carry is before
    assert "integrity" in outcome.sentence


def test_guards_remember_from_trial_to_trial() -> None:
    """Their memories go through the state; a guard without one leaves no entry."""
    rig = bench()
    for _ in range(6):
        rig.play()
    assert set(rig.state.memories) == {"error_growth", "saturation", "law"}
    assert len(rig.state.memories["saturation"]["shares"]) == 6


def test_an_operator_takes_over_a_guards_freeze() -> None:
    """Then only an operator ends it, and counting clean trials starts anew."""
    rig = bench()
    rig.play()
    rig.state = replace(rig.state, learning=False, frozen_by="saturation", clean_in_row=4)
    assert "frozen by saturation" in rig.request("freeze")
    assert (rig.state.frozen_by, rig.state.clean_in_row) == ("operator", 0)


def test_a_guard_that_is_off_is_not_asked() -> None:
    """It leaves no verdict at all."""
    rig = bench(guards={"divergence": Divergence(norm_limit=0.1, enabled=False)})
    outcome = rig.play()
    assert outcome.action == "learn"
    assert "divergence" not in {verdict.guard for verdict in outcome.verdicts}


def test_learning_guards_see_no_void_trial() -> None:
    """Only admission speaks about a trial that does not count."""
    names = {verdict.guard for verdict in bench().play(**VOID).verdicts}
    assert names == {"integrity", "start_state", "start_timing"}
    names = {verdict.guard for verdict in bench().play().verdicts}
    assert names >= {"integrity", "divergence", "error_growth", "saturation"}


def test_an_error_that_is_no_number_never_teaches_even_without_integrity() -> None:
    """With the guard switched off the trial is void all the same."""
    rig = bench(guards={"integrity": Integrity(enabled=False)})
    rig.play()
    before = rig.carry
    outcome = rig.play(output=np.full((N, 1), np.inf))
    assert outcome.void
    assert [verdict.guard for verdict in outcome.verdicts][-2:] == ["start_timing", "ladder"]
    assert rig.carry is before


def test_growth_rolls_back_to_the_best_and_is_confirmed() -> None:
    """A disturbance that learning did not cause: back, two frozen trials, on with half the gain."""
    rig = bench()
    for _ in range(12):
        rig.play()
    best = rig.state.best_trial
    outcome = rig.play(offset=0.1)
    assert outcome.action == "recall"
    assert f"feedforward of trial {best}" in outcome.sentence
    assert np.array_equal(rig.carry.feedforward, rig.learned[best])
    assert (rig.state.gain, rig.state.purpose) == (0.5, Purpose.CONFIRM)
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


def test_a_roll_back_that_does_not_help_halts() -> None:
    """The disturbance stays: the first confirmation trial halts and says so."""
    rig = bench()
    for _ in range(12):
        rig.play()
    rig.play(offset=0.1)
    outcome = rig.play(offset=0.1)
    assert outcome.action == "halt"
    assert "not confirmed" in rig.state.halted
    assert outcome.verdicts[-1].level is Level.HALT


def test_a_halted_run_takes_no_trial_until_resumed() -> None:
    """Absorbing but for an operator, who starts the counts anew."""
    rig = bench(guards={"divergence": Divergence(norm_limit=0.5)})
    assert rig.play().action == "halt"
    with pytest.raises(TransitionError, match="halted"):
        rig.play()
    rig.state = replace(rig.state, roll_backs=2, voids_in_row=4)
    assert "divergence" in rig.request("resume")
    assert (rig.state.halted, rig.state.roll_backs, rig.state.voids_in_row) == ("", 0, 0)
    assert rig.play().action == "halt", "it is judged again as before"


def test_after_a_failed_confirmation_and_resume_the_run_is_judged_anew() -> None:
    """A rig that has changed for good goes on learning from the error it now has."""
    rig = bench()
    for _ in range(12):
        rig.play()
    rig.play(offset=0.1)
    failed = rig.play(offset=0.1)
    rig.request("resume")
    assert (rig.state.best_trial, rig.state.best_norm) == (13, failed.norm)
    assert [rig.play(offset=0.1).action for _ in range(10)] == ["learn"] * 10
    assert rig.state.best_norm < 0.1 * failed.norm


def test_a_run_that_is_over_takes_no_trial_and_no_request() -> None:
    """Absorbing for good."""
    rig = bench(stop=StopSettings(trials=1, floor_trials=0))
    rig.play()
    with pytest.raises(TransitionError, match="over"):
        rig.play()
    for kind in ("freeze", "learn", "rollback", "resume"):
        with pytest.raises(CoreError, match="over"):
            rig.request(kind, "best")


def test_arrays_that_do_not_fit_together_are_refused() -> None:
    """Before numpy could broadcast them into a wrong error."""
    for changes in ({"output": np.zeros((N, 2))}, {"limited": np.zeros((1, 1), dtype=bool)}):
        with pytest.raises(ShapeError):
            bench().play(**changes)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"index": 4}, "expected trial 0"),
        ({"purpose": Purpose.FLOOR}, "learn"),
        ({"feedforward": np.ones((N, 1))}, "another feedforward"),
    ],
)
def test_a_trial_that_was_not_announced_is_refused(changes: dict[str, Any], words: str) -> None:
    """Wrong index, purpose or feedforward: an error of ours, never learned from."""
    with pytest.raises(TransitionError, match=words):
        bench().play(**changes)


def test_freeze_and_learn_by_an_operator() -> None:
    """Frozen trials repeat until learn; each answer says what was and what is."""
    rig = bench()
    rig.play()
    assert "until an operator" in rig.request("freeze")
    assert "already" in rig.request("freeze")
    assert (rig.state.learning, rig.state.frozen_by) == (False, "operator")
    played = rig.carry.feedforward
    for _ in range(8):
        assert rig.play().action == "repeat"
    assert rig.carry.feedforward is played
    assert "on again" in rig.request("learn")
    assert "already" in rig.request("learn")
    assert rig.play().action == "learn"


@pytest.mark.parametrize(("target", "trial"), [("best", 5), ("last_good", 5), ("2", 2)])
def test_an_operators_roll_back(target: str, trial: int) -> None:
    """By word or number; gain and the guards' count stay."""
    rig = bench()
    for _ in range(6):
        rig.play()
    assert f"trial {trial}" in rig.request("rollback", target)
    assert np.array_equal(rig.carry.feedforward, rig.learned[trial])
    assert (rig.state.gain, rig.state.roll_backs) == (1.0, 0)
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


def test_a_roll_back_to_a_forgotten_trial_takes_its_error_as_it_comes() -> None:
    """Its norm is no longer in the state, so confirmation has nothing to compare with."""
    rig = bench()
    for _ in range(80):
        rig.play()
    assert "no longer known" in rig.request("rollback", "3")
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


@pytest.mark.parametrize(
    ("played", "target", "words"),
    [
        (0, "best", "nothing has been learned"),
        (3, "7", "trial 7 is unknown; trials 0 to 2"),
        (3, "worst", "found 'worst'"),
        (3, "-1", "found '-1'"),
        (3, "²", "trial number"),
    ],
)
def test_a_roll_back_that_cannot_be(played: int, target: str, words: str) -> None:
    """Plain text, and nothing has changed."""
    rig = bench()
    for _ in range(played):
        rig.play()
    before = rig.state, rig.carry
    with pytest.raises(CoreError, match=words):
        rig.request("rollback", target)
    assert (rig.state, rig.carry) == before


def test_the_floor_trials_are_not_disturbed() -> None:
    """Neither roll back nor learn is taken while the floor is measured."""
    rig = bench(stop=StopSettings(trials=2))
    rig.play()
    rig.play()
    for kind, target in (("rollback", "0"), ("learn", "")):
        with pytest.raises(CoreError, match="floor trials"):
            rig.request(kind, target)


def test_unknown_requests_and_guards_are_refused_by_name() -> None:
    """With what would have been known."""
    with pytest.raises(CoreError, match=r"dance.*freeze, learn, resume, rollback"):
        bench().request("dance")
    with pytest.raises(SettingError, match=r"integrity.*found sentinel"):
        bench(guards={"sentinel": Integrity()})
    with pytest.raises(SettingError, match="peak_limits"):
        bench(guards={"divergence": Divergence(peak_limits={"y": 1.0})})


def test_averaging_repeats_until_the_mean_is_taken() -> None:
    """Three trials make one update; the two before it are recorded as learn without an update."""
    rig = bench(learn=LearnSettings(average_trials=3))
    updates = []
    for _ in range(6):
        rig.play()
        updates.append((rig.state.updates, rig.state.averaged))
    assert updates == [(0, 1), (0, 2), (1, 0), (1, 1), (1, 2), (2, 0)]


def test_a_roll_back_forgets_a_mean_half_taken() -> None:
    """It belonged to another feedforward."""
    rig = bench(learn=LearnSettings(average_trials=2))
    for _ in range(5):
        rig.play()
    assert rig.state.averaged == 1
    rig.request("rollback", "0")
    assert rig.state.averaged == 0
    assert not rig.carry.mean_error.any()
    assert rig.carry.law == {}


@dataclass(frozen=True)
class ProbingSettings:
    """A law that plays its own experiment after each learning trial."""

    kind: str = "probing"

    def build(self, context: LawContext) -> "Probing":
        return Probing()


class Probing:
    def update(self, trial: Trial, gain: float, memory: Any, arrays: Any) -> Step:
        if trial.purpose is Purpose.PROBE:
            step = arrays["base"] + gain * 0.5 * arrays["error"]
            return Step(step, memory={"probes": memory["probes"]})
        probes = int(memory.get("probes", 0)) + 1
        kept = {"base": trial.feedforward, "error": trial.error}
        return Step(trial.feedforward + 1.0, Purpose.PROBE, {"probes": probes}, kept)


def probing(**changes: Any) -> Bench:
    return bench(law=ProbingSettings(), **changes)


def test_probe_trials_are_played_and_learned_from() -> None:
    """Learn, probe, learn, probe: the learned feedforward moves on after each probe only."""
    rig = probing()
    purposes = []
    for _ in range(12):
        purposes.append(rig.state.purpose)
        rig.play()
    assert purposes == [Purpose.LEARN, Purpose.PROBE] * 6
    assert rig.state.best_norm < 0.1 * rig.state.first_norm
    assert rig.state.best_trial == 10, "probes are never best"


def test_a_void_probe_is_played_again() -> None:
    """With the same experiment."""
    rig = probing()
    rig.play()
    probe = rig.carry.feedforward
    rig.play(**VOID)
    assert rig.state.purpose is Purpose.PROBE
    assert rig.carry.feedforward is probe


def test_a_freeze_during_a_probe_returns_to_the_learned_feedforward() -> None:
    """And the law starts anew when learning goes on."""
    rig = probing()
    for _ in range(3):
        rig.play()
    learned = rig.carry.learned
    rig.request("freeze")
    assert rig.play().action == "repeat"
    assert rig.carry.feedforward is learned
    assert rig.state.purpose is Purpose.LEARN
    assert "law" not in rig.state.memories
    rig.request("learn")
    assert rig.play().state.purpose is Purpose.PROBE


@pytest.mark.parametrize("floor_trials", [0, 2])
def test_a_run_that_ends_on_a_probe_ends_with_the_learned_feedforward(floor_trials: int) -> None:
    """The experiment is no result."""
    rig = probing(stop=StopSettings(trials=4, floor_trials=floor_trials))
    for _ in range(3):
        rig.play()
    learned = rig.carry.learned
    rig.play()
    assert rig.carry.feedforward is learned
    assert bool(rig.state.over) is (floor_trials == 0)


def test_a_probe_that_halts_is_not_played_again() -> None:
    """After resume the learned feedforward is played."""
    rig = probing(guards={"divergence": Divergence(peak_limits={"x": 4.0})})
    rig.play()
    learned = rig.carry.learned
    assert rig.play(offset=9.0 - 1.0 - 0.1).action == "halt"
    rig.request("resume")
    assert rig.state.purpose is Purpose.LEARN
    assert rig.carry.feedforward is learned


@settings(max_examples=60, deadline=None)
@given(
    plan=st.lists(
        st.sampled_from(
            ["ok", "ok", "ok", "off", "far", "void", "late", "freeze", "learn", "rollback"]
        ),
        max_size=40,
    ),
    probes=st.booleans(),
)
def test_void_and_frozen_trials_never_change_the_feedforward(plan: list[str], probes: bool) -> None:
    """Whatever happens in whatever order; and a roll back restores bits, and voids never teach."""
    rig = (probing if probes else bench)(
        ladder=LadderSettings(max_voids_in_row=50, max_roll_backs=2, confirm_ratio=1e9)
    )
    for what in plan:
        if rig.state.halted:
            break
        before, carry = rig.state, rig.carry
        if what in ("freeze", "learn"):
            rig.request(what)
            continue
        if what == "rollback":
            if before.updates:
                rig.request("rollback", "best")
            continue
        offset = {"off": 0.3, "far": 3.0}.get(what, 0.0)
        changes = VOID if what == "void" else {"offset": offset}
        outcome = rig.play(late=what == "late", **changes)
        played = carry.feedforward
        if what == "void":
            assert outcome.void
            assert rig.carry is carry
        if outcome.action in ("repeat", "halt") and before.purpose is not Purpose.PROBE:
            assert rig.carry.feedforward is played
            assert rig.carry.learned is carry.learned
        if not before.learning and outcome.action != "recall":
            assert rig.carry.learned is carry.learned
            expected = played if outcome.void else carry.learned
            assert np.array_equal(rig.carry.feedforward, expected)
        if outcome.action == "learn":
            assert before.learning
            assert not outcome.void
        if outcome.action == "recall":
            assert any(rig.carry.feedforward is old for old in rig.learned)
        assert rig.state.roll_backs <= 2


def test_a_recalled_feedforward_of_the_wrong_shape_is_refused() -> None:
    """A record that does not belong to this run is an error, not a crash later."""
    rig = bench()
    for _ in range(3):
        rig.play()
    rig.learned[1] = np.zeros((N, 2))
    with pytest.raises(ShapeError, match="recalled feedforward"):
        rig.request("rollback", "1")


def test_the_soft_start_is_not_called_saturation() -> None:
    """While the allowed feedforward rises the guard sees the rig's reports only."""
    rig = bench(learn=LearnSettings(soft_start_trials=4, soft_start_fraction=0.01))
    for _ in range(10):
        outcome = rig.play()
        assert all(v.level is Level.PASS for v in outcome.verdicts if v.guard == "saturation")
    assert rig.state.best_norm < 0.01 * rig.state.first_norm
