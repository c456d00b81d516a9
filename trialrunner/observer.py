"""What the outside sees of a run: the status mapping, telemetry and log lines.

The session tells it what happened; it never answers back.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

from trialrunner.clock import Clock
from trialrunner.core.cycle import Event, State
from trialrunner.core.run_state import Outcome, RunState
from trialrunner.core.trial import Array, Level, Trial

TRACE_POINTS = 400
"""Points of a trace in telemetry: what a screen can show; the record holds every sample."""

Publish = Callable[[str, Mapping[str, Any]], None]
"""(topic, mapping) to telemetry."""

Log = Callable[..., None]
"""(level, event, **values) to the log."""


class Observer:
    """Keeps the status and passes on what happens."""

    def __init__(
        self,
        run: str,
        record: str,
        link_url: str,
        trials: int,
        clock: Clock,
        publish: Publish,
        log: Log,
    ) -> None:
        self._clock = clock
        self._publish = publish
        self._log = log
        self._began_ns = clock.now_ns()
        self._trial_began_ns = clock.now_ns()
        self._durations: list[float] = []
        self._n_samples = 1
        self.status: dict[str, Any] = {
            "run": run,
            "state": State.IDLE.value,
            "trial": 0,
            "purpose": "learn",
            "learning": True,
            "frozen_by": "",
            "gain": 1.0,
            "norm_last": None,
            "norm_best": None,
            "best_trial": None,
            "norm_first": None,
            "floor": None,
            "voids": 0,
            "roll_backs": 0,
            "late_updates": 0,
            "guards": {},
            "link": {"url": link_url, "up": False, "errors": 0},
            "rig": {"name": "", "state": "", "fault": ""},
            "started": clock.utc(),
            "elapsed_s": 0.0,
            "trials_total": trials,
            "remaining_s": None,
            "record": record,
            "over": "",
        }

    # -- told by the session ----------------------------------------------------------------

    def built(self, rig_name: str, n_samples: int, state: RunState) -> None:
        """The rig greeted and is the configured one; where the run stands."""
        self._n_samples = n_samples
        self.status["rig"]["name"] = rig_name
        self._take_state(state)
        self.event("rig", f"{rig_name} greets and agrees")

    def transition(self, before: State, event: Event, after: State, cause: str) -> None:
        self.status["state"] = after.value
        if after is State.HALTED and before is not after:
            # The first cause; what follows from it while halted does not hide it.
            self.status["rig"]["fault"] = cause
        if before is not after and after in (State.HALTED, State.PAUSED):
            self._log("warning", f"run is {after}", cause=cause)
        self._log("debug", "cycle", before=before.value, on=event.value, after=after.value)
        self.publish_status()

    def loading(self, state: RunState) -> None:
        self._trial_began_ns = self._clock.now_ns()
        self.status["rig"]["fault"] = ""
        self._take_state(state)

    def rig(self, state: str) -> None:
        self.status["rig"]["state"] = state

    def samples(self, upto: int) -> None:
        """Progress within the trial, for telemetry that shows where it is."""
        self._publish(
            "health", {"trial": self.status["trial"], "sample": upto, "of": self._n_samples}
        )

    def outcome(self, outcome: Outcome) -> None:
        """One trial is judged and stored."""
        trial = outcome.state.trial - 1
        self._durations = [*self._durations[-19:], self._seconds_since(self._trial_began_ns)]
        worst = max((v.level for v in outcome.verdicts), default=Level.PASS)
        self.status["norm_last"] = _finite(outcome.norm)
        self.status["guards"] = {
            v.guard: {"level": v.level.word, "reason": v.reason, "value": _finite(v.value)}
            | {"limit": _finite(v.limit), "void": v.void}
            for v in outcome.verdicts
        }
        self._take_state(outcome.state)
        self._publish(
            "trial",
            {
                "trial": trial,
                "norm": _finite(outcome.norm),
                "best": _finite(outcome.state.best_norm),
                "void": outcome.void,
                "action": outcome.action,
                "verdict": worst.word,
                "sentence": outcome.sentence,
                "late": outcome.late,
            },
        )
        for verdict in outcome.verdicts:
            if verdict.level > Level.PASS or verdict.void:
                self._publish(
                    "verdict",
                    {"trial": trial, "guard": verdict.guard} | self.status["guards"][verdict.guard],
                )
        calm = worst is Level.PASS and not outcome.void
        self._log(
            "info" if calm else "warning",
            "trial",
            trial=trial,
            norm=_finite(outcome.norm),
            best=_finite(outcome.state.best_norm),
            verdict="void" if outcome.void else worst.word,
            **({} if calm else {"sentence": outcome.sentence}),
        )
        self.publish_status()

    def trace(self, trial: Trial, period_s: float) -> None:
        """A thinned picture of a trial as measured; axes (point, channel)."""
        every = max(1, math.ceil(self._n_samples / TRACE_POINTS))
        self._publish(
            "trace",
            {
                "trial": trial.index,
                "step_s": every * period_s,
                "error": _rows(trial.error[::every]),
                "feedforward": _rows(trial.feedforward[::every]),
            },
        )

    def event(self, kind: str, text: str) -> None:
        self._log("warning" if kind in ("halt", "link") else "info", text, kind=kind)
        self._publish("event", {"kind": kind, "text": text, "at": self._clock.utc()})

    def link(self, up: bool, errors: int) -> None:
        self.status["link"] = {"url": self.status["link"]["url"], "up": up, "errors": errors}

    # -- for operators ----------------------------------------------------------------------

    def publish_status(self) -> None:
        self._publish("status", self.current())

    def current(self) -> dict[str, Any]:
        """The status now; a copy that nobody changes any more."""
        self.status["elapsed_s"] = round(self._seconds_since(self._began_ns), 1)
        return {**self.status, "guards": dict(self.status["guards"])}

    def _take_state(self, state: RunState) -> None:
        mean_s = sum(self._durations) / len(self._durations) if self._durations else None
        left = max(0, self.status["trials_total"] - state.trial)
        self.status.update(
            trial=state.trial,
            purpose=state.purpose.value,
            learning=state.learning,
            frozen_by=state.frozen_by,
            gain=state.gain,
            norm_best=_finite(state.best_norm),
            best_trial=None if state.best_trial < 0 else state.best_trial,
            norm_first=_finite(state.first_norm),
            floor=_finite(state.floor_norm),
            voids=state.voids,
            roll_backs=state.roll_backs,
            late_updates=state.late_updates,
            over=state.over,
            remaining_s=None if mean_s is None else round(left * mean_s, 1),
        )

    def _seconds_since(self, then_ns: int) -> float:
        return (self._clock.now_ns() - then_ns) / 1e9


def _rows(values: Array) -> list[list[float | None]]:
    return [[_finite(value) for value in row] for row in values.tolist()]


def _finite(value: float) -> float | None:
    """JSON has no NaN and no infinity."""
    return float(value) if math.isfinite(value) else None
