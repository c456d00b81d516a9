"""Scenarios: a row of trials with their norms and verdicts, and what is decided after each.

A row's letters: . pass, w warn, f freeze, r roll back, h halt, v void, H void that halts.
"""

from dataclasses import dataclass, field, replace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from trialrunner.core.decision import Rules
from trialrunner.core.ladder import Act, Decision
from trialrunner.core.run_state import RunState
from trialrunner.core.settings import LadderSettings, StopSettings
from trialrunner.core.trial import Level, Purpose, Verdict

LEVELS = dict(
    zip(
        ".wfrhvH",
        (
            Level.PASS,
            Level.WARN,
            Level.FREEZE,
            Level.ROLL_BACK,
            Level.HALT,
            Level.WARN,
            Level.HALT,
        ),
        strict=True,
    )
)
LETTERS = {
    Purpose.BASELINE: "b",
    Purpose.LEARN: "l",
    Purpose.PROBE: "p",
    Purpose.CONFIRM: "c",
    Purpose.FLOOR: "f",
}
ACTS = {Act.LEARN: "L", Act.REPEAT: "=", Act.RECALL: "R", Act.HALT: "H", Act.FINISH: "F"}


def verdicts(letter: str) -> list[Verdict]:
    if letter == ".":
        return [Verdict("quiet", Level.PASS)]
    name = "integrity" if letter in "vH" else "watcher"
    return [
        Verdict("quiet", Level.PASS),
        Verdict(name, LEVELS[letter], f"said {letter}", 2.0, 1.0, void=letter in "vH"),
    ]


@dataclass
class Player:
    """Plays trials; stands in for the advancer where it adds what the law did."""

    rules: Rules
    state: RunState
    decisions: list[Decision] = field(default_factory=list)
    purposes: str = ""

    def play(self, letters: str, norms: float | list[float] = 1.0) -> "Player":
        values = norms if isinstance(norms, list) else [norms] * len(letters)
        for letter, norm in zip(letters, values, strict=True):
            self.purposes += LETTERS[self.state.purpose]
            decision = self.rules.decide(self.state, norm, verdicts(letter))
            self.decisions.append(decision)
            self.state = decision.state
            if decision.action is Act.LEARN:
                self.state = replace(self.state, updates=self.state.updates + 1)
        return self

    @property
    def acts(self) -> str:
        return "".join(ACTS[decision.action] for decision in self.decisions)

    @property
    def last(self) -> Decision:
        return self.decisions[-1]


def player(stop: dict[str, Any] | None = None, **ladder: Any) -> Player:
    rules = Rules(LadderSettings(**ladder), StopSettings(**(stop or {})))
    return Player(rules, rules.first_state())


@pytest.mark.parametrize(
    ("stop", "ladder", "letters", "purposes", "acts"),
    [
        pytest.param({}, {}, "...w.", "lllll", "LLLLL", id="learning, a warning does not stop it"),
        pytest.param(
            {"baseline_trials": 2}, {}, "....", "bbll", "==LL", id="baseline first, frozen"
        ),
        pytest.param(
            {"baseline_trials": 2}, {}, "v.v.v.", "bbbbll", "=====L", id="voids repeat any"
        ),
        pytest.param({}, {}, ".vvv.vvv.", "lllllllll", "L===L===L", id="three voids in a row"),
        pytest.param({}, {}, ".vvvv", "lllll", "L===H", id="four voids in a row halt"),
        pytest.param(
            {}, {}, "..f.....ww", "l" * 10, "LL======LL", id="freeze, five clean trials, on"
        ),
        pytest.param(
            {},
            {"resume_after_trials": 2},
            "..f.w.v..",
            "l" * 9,
            "LL======L",
            id="a complaint restarts the count, a void does not count",
        ),
        pytest.param({}, {}, "..r...", "lllccl", "LLR==L", id="roll back, two confirmations, on"),
        pytest.param({}, {}, "..rv..", "lllccc", "LLR===", id="a void confirmation is repeated"),
        pytest.param(
            {},
            {"confirm_trials": 0},
            "..r.r.r.r",
            "l" * 9,
            "LLRLRLRLH",
            id="three roll backs, then halt",
        ),
        pytest.param({}, {}, "..r.r", "lllcc", "LLR=H", id="roll back wanted in confirmation"),
        pytest.param({}, {}, "r.....", "llllll", "======", id="nothing learned: frozen instead"),
        pytest.param(
            {"baseline_trials": 3}, {}, "fr....", "bbblll", "======", id="frozen through baseline"
        ),
        pytest.param({}, {}, "..h", "lll", "LLH", id="halt"),
        pytest.param({}, {}, "..H", "lll", "LLH", id="a void that halts"),
        pytest.param(
            {"trials": 3, "floor_trials": 2}, {}, ".....", "lllff", "LL==F", id="by count, floor"
        ),
        pytest.param(
            {"trials": 3, "floor_trials": 0}, {}, "...", "lll", "LLF", id="by count, no floor"
        ),
        pytest.param(
            {"trials": 2, "floor_trials": 3},
            {},
            ".vv.vv..v.",
            "llllffffff",
            "L========F",
            id="voids are not counted",
        ),
        pytest.param(
            {"trials": 2, "floor_trials": 3}, {}, "..frw", "llfff", "L===F", id="floor only notes"
        ),
        pytest.param({"trials": 2}, {}, "..h", "llf", "L=H", id="halt holds in the floor too"),
        pytest.param(
            {"trials": 3, "floor_trials": 2},
            {},
            "..r..",
            "lllff",
            "LLR=F",
            id="a roll back at the last trial is followed by floor trials",
        ),
        pytest.param(
            {"trials": 3, "floor_trials": 0}, {}, "..r", "lll", "LLF", id="or by the end at once"
        ),
        pytest.param(
            {"baseline_trials": 5, "trials": 3, "floor_trials": 1},
            {},
            "....",
            "bbbf",
            "===F",
            id="the count ends a baseline too",
        ),
    ],
)
def test_scenarios(
    stop: dict[str, Any], ladder: dict[str, Any], letters: str, purposes: str, acts: str
) -> None:
    """The purpose of each trial and what becomes of the feedforward after it."""
    played = player(stop, **ladder).play(letters)
    assert (played.purposes, played.acts) == (purposes, acts)


def test_a_tolerance_ends_the_run_after_the_floor() -> None:
    """Converged at trial 2; two floor trials; the reason is kept till the end."""
    played = player({"tolerance": 0.5, "floor_trials": 2}).play(".....", [2, 1, 0.5, 3, 0.1])
    assert (played.purposes, played.acts) == ("lllff", "LL==F")
    assert played.state.over.startswith("converged: the error norm 0.5")
    assert "2 floor trials" in played.decisions[2].sentence
    assert all(k.sentence.startswith("Converged: the") for k in played.decisions[2::2])
    assert played.state.over == played.decisions[2].state.ending
    assert played.state.best_norm == 0.5


def test_a_stall_ends_the_run() -> None:
    """The third trial without improvement is the last one."""
    played = player({"stall_trials": 3, "floor_trials": 0}).play(".....", [2, 1, 1, 1, 1])
    assert played.acts == "LLLLF"
    assert played.state.over.startswith("stalled")


def test_an_unconfirmed_roll_back_halts() -> None:
    """The old feedforward no longer gives the old error: the rig has changed."""
    played = player().play("..r.", [1.0, 1.0, 5.0, 1.6])
    assert played.acts == "LLRH"
    assert played.decisions[2].recall_trial == 0
    for part in ("1.6", "1.5", "not confirmed"):
        assert part in played.state.halted
    assert played.last.added[0].guard == "ladder"


def test_a_roll_back_at_the_last_trial_needs_no_confirmation_trials() -> None:
    """The floor trials repeat the same feedforward anyway."""
    played = player({"trials": 3, "floor_trials": 2}).play("..r")
    assert (played.last.recall_trial, played.state.confirm_left) == (0, 0)
    assert (played.state.floor_left, played.state.purpose) == (2, Purpose.FLOOR)


def test_a_void_that_halts_is_counted_as_void() -> None:
    """And not as a trial that counted."""
    state = player().play("..H").state
    assert (state.voids, state.counted) == (1, 2)


def test_roll_backs_reduce_the_gain_each_time() -> None:
    """Half, a quarter, an eighth; the count is in the state."""
    played = player(confirm_trials=0)
    gains = []
    for _ in range(3):
        played.play(".r")
        gains.append(played.state.gain)
    assert gains == [0.5, 0.25, 0.125]
    assert played.state.roll_backs == 3


def test_the_trial_that_asks_for_a_roll_back_is_not_its_target() -> None:
    """Even if its own error norm was the smallest."""
    played = player().play("..r", [2.0, 1.0, 0.5])
    assert played.last.recall_trial == 1
    assert played.state.confirm_norm == 1.5, "the level of the trials before it"


def test_what_an_operator_froze_stays_as_it_is() -> None:
    """A roll back is only noted then; a halt is still a halt."""
    played = player().play("...")
    played.state = replace(played.state, learning=False, frozen_by="operator")
    played.play("rr")
    assert played.acts == "LLL=="
    assert "frozen by operator until" in played.last.sentence
    assert "said r" in played.last.sentence
    played.play("h")
    assert played.last.action is Act.HALT


def test_a_freeze_in_a_baseline_trial_is_told() -> None:
    """The trial is repeated anyway, so the sentence must say that learning is off as well."""
    played = player({"baseline_trials": 2}).play("f")
    assert "baseline trial" in played.last.sentence
    assert "Learning is frozen by watcher" in played.last.sentence


def test_one_floor_trial_tells_no_floor() -> None:
    """A spread needs two."""
    played = player({"trials": 1, "floor_trials": 1}).play("..")
    assert "tells no repeatability floor" in played.last.sentence
    two = RunState(
        trial=9, purpose=Purpose.FLOOR, floor_left=1, floor_count=2, floor_norm=0.25, ending="done"
    )
    decision = played.rules.decide(two, 1.0, verdicts("."))
    assert "repeatability floor 0.25 from 2 trials" in decision.sentence
    assert decision.state.over == "done"


def test_a_frozen_probe_gives_way_to_learning_trials() -> None:
    """The experiment is not repeated while learning is off."""
    rules = Rules(LadderSettings(), StopSettings())
    state = RunState(trial=5, purpose=Purpose.PROBE, updates=3)
    for letter, learning in (("f", True), (".", False)):
        decision = rules.decide(replace(state, learning=learning), 1.0, verdicts(letter))
        assert decision.action is Act.REPEAT
        assert decision.state.purpose is Purpose.LEARN
    assert rules.decide(state, 1.0, verdicts(".")).action is Act.LEARN
    void = rules.decide(state, 1.0, verdicts("v"))
    assert (void.action, void.state.purpose) == (Act.REPEAT, Purpose.PROBE)


def test_every_sentence_says_which_trial_and_why() -> None:
    """Number of the trial, the guard's reason, and the numbers of the ladder."""
    played = player().play(".wf.vr", [2.0, 1.0, 1.0, 1.0, 1.0, 3.0])
    for k, (decision, parts) in enumerate(
        zip(
            played.decisions,
            [
                ("Learned", "2", "best 2 (trial 0)"),
                ("best 1 (trial 1)", "watcher: said w"),
                ("frozen by watcher (0 of 5", "watcher: said f"),
                ("frozen by watcher (1 of 5",),
                ("void 1 in a row, at most 3", "integrity: said v"),
                ("feedforward of trial 1", "watcher: said r"),
            ],
            strict=True,
        )
    ):
        for part in (f"rial {k}", *parts):
            assert part in decision.sentence
        assert decision.sentence.endswith(".")


ROWS = st.lists(
    st.tuples(st.sampled_from("....wfrhvvH"), st.floats(0.1, 10.0)), min_size=1, max_size=60
)


@given(
    rows=ROWS,
    most=st.integers(0, 3),
    confirm=st.integers(0, 2),
    voids=st.integers(1, 3),
    trials=st.integers(1, 40),
    baseline=st.integers(0, 3),
    floor=st.integers(0, 3),
)
def test_the_caps_hold_whatever_happens(
    rows: list[tuple[str, float]],
    most: int,
    confirm: int,
    voids: int,
    trials: int,
    baseline: int,
    floor: int,
) -> None:
    """Roll backs, voids in a row, the count and the purposes stay inside their bounds."""
    stop = {"trials": trials, "baseline_trials": baseline, "floor_trials": floor}
    played = player(
        stop, max_roll_backs=most, confirm_trials=confirm, max_voids_in_row=voids, confirm_ratio=9.0
    )
    for letter, norm in rows:
        before = played.state
        if before.over or before.halted:
            break
        played.play(letter, norm)
        state, act = played.state, played.last.action
        assert state.trial == before.trial + 1
        assert state.roll_backs <= most
        assert state.voids_in_row <= voids + 1
        assert state.counted <= trials
        assert (act is Act.HALT) is bool(state.halted)
        assert (act is Act.FINISH) is bool(state.over)
        assert state.halted or state.voids_in_row <= voids
        assert min(state.baseline_left, state.confirm_left, state.gain) >= 0
        if letter in "vH":
            assert act in (Act.REPEAT, Act.HALT)
            assert state.counted == before.counted
        if act is Act.LEARN:
            assert before.learning
            assert before.purpose is Purpose.LEARN
