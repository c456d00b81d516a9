"""A record pushed once more through the same guards and laws; memory does not grow with it.

With unchanged settings every verdict, decision and feedforward must come out bit for bit. With
other settings the recorded trials say what would have been decided, up to the first decision after
which the rig would have played something else: from there on the record can no longer tell. Later
trials are then judged each by itself, as if everything before had been as recorded.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from trialrunner.advancing import make_advancer
from trialrunner.agreement import limits_in_force
from trialrunner.config import Config, load_text
from trialrunner.core.advance import Advancer
from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import Outcome, Request, RunState
from trialrunner.core.trial import Level, Verdict
from trialrunner.record import RecordedTrial, RecordReader, RequestRow
from trialrunner.record.arrays import carry_differences, same_bits

NOT_ASKED = {
    "run": "it names the run",
    "link": "a replay has no rig",
    "operator": "a replay has no operator",
    "rehearsal": "it is the mock rig's",
    "trial": "the trials were run as recorded",
    "reference": "the errors were measured against the recorded reference",
}
"""Tables of the configuration about which a record cannot be asked, and why."""

LATE = "learn.update_deadline_s"


class ReplayError(Exception):
    """The record cannot be asked that; the text says why."""


@dataclass(frozen=True)
class Side:
    """What was decided of a trial, on record or in the replay."""

    void: bool
    verdicts: tuple[Verdict, ...]
    action: str
    sentence: str
    norm: float

    @property
    def worst(self) -> Verdict | None:
        """The strongest complaint; None if every guard passed the trial."""
        complaints = [one for one in self.verdicts if one.level > Level.PASS or one.void]
        return max(complaints, key=lambda one: (one.void, one.level), default=None)

    @property
    def level(self) -> Level:
        return max((verdict.level for verdict in self.verdicts), default=Level.PASS)


@dataclass(frozen=True)
class ReplayedTrial:
    """One trial, then and now."""

    index: int
    recorded: Side
    replayed: Side | None
    """None where it could not be judged; `differences` says why."""
    differences: tuple[str, ...]
    """Everything that is not the same, also in the operator's requests before it, in words."""
    counterfactual: bool
    """In the replay the rig would have played something else before this trial or in it."""

    @property
    def same(self) -> bool:
        return not self.differences


class Replay:
    """One pass over a record. What the attributes tell holds after `trials` has come to its end."""

    def __init__(self, reader: RecordReader, overrides: Sequence[str] = ()) -> None:
        """`overrides` are KEY=VALUE. Raises ConfigError, ReplayError, and CoreError."""
        self._reader = reader
        self._overrides = tuple(overrides)
        _require_askable(overrides)
        self.counterfactual_from: int | None = None
        """The first trial of which the record can no longer tell; None if it tells of all."""
        self.because = ""
        """What the replay would have done otherwise."""
        self.n_trials = 0
        self.n_different = 0
        self.first_difference = ""
        self._advancer = self._make_advancer(reader.facts.config_text)
        self._noted: list[str] = []
        self._begin()

    def _make_advancer(self, config_text: str) -> Advancer:
        self._config_text = config_text
        facts = self._reader.facts
        then = load_text(config_text, source=f"configuration in {self._reader.path}")
        now = load_text(config_text, self._overrides, f"configuration in {self._reader.path}")
        _require_same_channels(then, now)
        self._from_file = now.run.initial_feedforward is not None
        limits = limits_in_force(now, facts.channels())
        names = facts.auxiliary_names()
        settings, reference = now.run_settings(), self._reader.reference
        return make_advancer(settings, limits, reference, facts.sample_type, names)

    def _begin(self) -> None:
        """Before trial 0. A configured first feedforward is taken from the record: its file may
        have changed, and it was limited already."""
        self._then, carry = self._reader.first_state(), self._reader.carry_at(0)
        assert carry is not None
        self._then_carry = carry
        self._now, fresh = self._advancer.begin(carry.feedforward if self._from_file else None)
        as_recorded = self._from_file and (
            not self._overrides or same_bits(fresh.feedforward, carry.feedforward)
        )
        self._now_carry = carry if as_recorded else fresh
        self._compare_states("at the start", 0)

    def trials(self) -> Iterator[ReplayedTrial]:
        """Every recorded trial against its replay, one in memory. Raises RecordError on damage."""
        for entry, kind in self._reader.entries():
            if kind == "daemon":
                self._take_up(entry)
            elif kind == "request":
                self._apply(entry, self._reader.request_at(entry))
            elif kind == "trial":
                row = self._replay(self._reader.trial_at(entry))
                self.n_trials += 1
                self.n_different += not row.same
                if not row.same and not self.first_difference:
                    self.first_difference = f"trial {row.index}: {row.differences[0]}"
                yield row
        if self._noted and not self.first_difference:
            self.first_difference = f"after the last trial: {self._noted[0]}"
        self.n_different += bool(self._noted)

    # -- what a record is made of -----------------------------------------------------------

    def _take_up(self, entry: int) -> None:
        """From here on a daemon ran with its own stop rules."""
        daemon = self._reader.daemon_at(entry)
        if daemon.event == "start" and daemon.config_text != self._config_text:
            self._advancer = self._make_advancer(daemon.config_text)

    def _apply(self, entry: int, row: RequestRow) -> None:
        if not row.changes_state:
            return
        said = f"the operator's {row.kind} (request {row.id})"
        trial = row.effect_trial
        self._then = self._reader.state_at(entry)
        self._then_carry = self._reader.carry_at(entry) or self._then_carry
        if self.counterfactual_from is not None:
            return
        try:
            self._now, self._now_carry, _ = self._advancer.apply_request(
                Request(row.kind, row.target), self._now, self._now_carry, self._reader.recall
            )
        except CoreError as error:
            self._noted.append(f"{said} would not have been possible: {error}")
            self._diverge(trial, self._noted[-1])
            return
        self._compare_states(said, trial)

    def _replay(self, recorded: RecordedTrial) -> ReplayedTrial:
        index, noted = recorded.summary.index, self._noted
        self._noted = []
        self._require_played(recorded)
        counterfactual = self.counterfactual_from is not None
        try:
            outcome = self._judge_alone(recorded) if counterfactual else self._advance(recorded)
        except CoreError as error:
            self._diverge(index, f"trial {index} could not be replayed: {error}")
            side, differences = None, [f"could not be replayed: {error}"]
        else:
            side = outcome
            differences = list(_decisions(_recorded_side(recorded), side))
        self._then = recorded.summary.state
        self._then_carry = self._reader.carry_at(recorded.summary.entry) or self._then_carry
        if not counterfactual and self.counterfactual_from is None:
            self._compare_actions(index, recorded, side)
            self._compare_states("afterwards", index + 1)
            differences += self._noted
            self._noted = []
        return ReplayedTrial(
            index, _recorded_side(recorded), side, (*noted, *differences), counterfactual
        )

    def _advance(self, recorded: RecordedTrial) -> Side:
        outcome = self._advancer.advance(
            recorded.trial,
            self._now,
            self._now_carry,
            self._reader.recall,
            recorded.summary.late,
        )
        self._now, self._now_carry = outcome.state, outcome.carry
        return _side_of(outcome)

    def _judge_alone(self, recorded: RecordedTrial) -> Side:
        """What would be said of this trial, had everything before it been as recorded."""
        judged = self._advancer.judge(recorded.trial, self._then, self._then_carry)
        sentence = judged.decision.sentence
        return Side(judged.void, judged.verdicts, judged.action, sentence, judged.norm)

    # -- where the ways part ----------------------------------------------------------------

    def _require_played(self, recorded: RecordedTrial) -> None:
        """Notice if the replay would not have played this trial."""
        trial, now = recorded.trial, self._now
        if self.counterfactual_from is not None:
            return
        if now.halted or now.over:
            word = "halted" if now.halted else "over"
            self._diverge(trial.index, f"the run would have been {word}: {now.halted or now.over}")
        elif now.purpose is not trial.purpose:
            self._diverge(trial.index, f"trial {trial.index} would have been a {now.purpose} trial")
        elif not same_bits(self._now_carry.feedforward, trial.feedforward):
            self._diverge(trial.index, f"trial {trial.index} would have played something else")

    def _compare_actions(self, index: int, recorded: RecordedTrial, side: Side | None) -> None:
        """After a trial: another action parts the ways even where the next feedforward agrees."""
        then = recorded.summary
        if side is None or self.counterfactual_from is not None:
            return
        if side.action != then.action:
            because = f"after trial {index}, {side.action} instead of {then.action}"
            self._diverge(index + 1, because)

    def _compare_states(self, said: str, following: int) -> None:
        """Note where state and arrays differ; another feedforward parts the ways."""
        names = list(carry_differences(self._then_carry, self._now_carry))
        if names:
            self._noted.append(f"{said}, other arrays: {', '.join(names)}")
        fields = _state_differences(self._then, self._now)
        if fields:
            self._noted.append(f"{said}, another run state: {', '.join(fields)}")
        if "feedforward" in names:
            self._diverge(following, f"trial {following} would have played something else")

    def _diverge(self, trial: int, because: str) -> None:
        if self.counterfactual_from is None:
            self.counterfactual_from, self.because = trial, because


def _require_askable(overrides: Sequence[str]) -> None:
    for override in overrides:
        key = override.partition("=")[0].strip()
        table = key.partition(".")[0]
        if table in NOT_ASKED:
            raise ReplayError(f"{key}: a record cannot answer that: {NOT_ASKED[table]}")
        if key == LATE:
            raise ReplayError(f"{key}: a record cannot answer that: updates are late as recorded")


def _require_same_channels(then: Config, now: Config) -> None:
    for table in ("inputs", "outputs"):
        old = [(one.name, one.unit) for one in getattr(then, table)]
        new = [(one.name, one.unit) for one in getattr(now, table)]
        if old != new:
            raise ReplayError(f"{table}: a record cannot answer that: its channels are {old}")


def _recorded_side(recorded: RecordedTrial) -> Side:
    summary = recorded.summary
    return Side(summary.void, recorded.verdicts, summary.action, summary.sentence, summary.norm)


def _side_of(outcome: Outcome) -> Side:
    return Side(outcome.void, outcome.verdicts, outcome.action, outcome.sentence, outcome.norm)


def _decisions(then: Side, now: Side) -> Iterator[str]:
    """Differences between two sides in words, the weightiest first."""
    by_guard = {verdict.guard: verdict for verdict in then.verdicts}
    for verdict in now.verdicts:
        before = by_guard.pop(verdict.guard, None)
        if before is None:
            yield f"{verdict.guard}: not on record -> {_words(verdict)}"
        elif not _same_verdict(before, verdict):
            yield f"{verdict.guard}: {_words(before)} -> {_words(verdict)}"
    for before in by_guard.values():
        yield f"{before.guard}: {_words(before)} -> nothing"
    if not _same_number(then.norm, now.norm):
        yield f"error norm: {then.norm!r} -> {now.norm!r}"
    for name in ("void", "action", "sentence"):
        if getattr(then, name) != getattr(now, name):
            yield f"{name}: {getattr(then, name)} -> {getattr(now, name)}"


def _words(verdict: Verdict) -> str:
    """A verdict with its number in full: two that differ in the last bit must look so."""
    word = "void" if verdict.void else verdict.level.word
    if not verdict.reason and verdict.value == verdict.limit == 0.0:
        return word
    reason = f": {verdict.reason}" if verdict.reason else ""
    return f"{word} ({verdict.value!r}, limit {verdict.limit!r}{reason})"


def _same_verdict(then: Verdict, now: Verdict) -> bool:
    texts = (then.guard, then.level, then.reason, then.void)
    numbers = _same_number(then.value, now.value) and _same_number(then.limit, now.limit)
    return numbers and texts == (now.guard, now.level, now.reason, now.void)


def _same_number(then: float, now: float) -> bool:
    return then == now or (then != then and now != now)


def _state_differences(then: RunState, now: RunState) -> list[str]:
    old, new = then.to_json(), now.to_json()
    return [f"{key} {old[key]!r} -> {new[key]!r}" for key in old if old[key] != new[key]]
