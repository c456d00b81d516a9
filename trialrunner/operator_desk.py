"""Operator requests at the daemon: what each verb means now, when it takes effect, the answer."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, Protocol

from trialrunner.core.cycle import Cycle, Event, State
from trialrunner.core.run_state import Request, RunState
from trialrunner.operator_messages import OperatorAnswer, OperatorRequest
from trialrunner.record import RequestRow
from trialrunner.run_parts import Built

AT_REST = frozenset({State.IDLE, State.PAUSED, State.HALTED})
"""States between trials, in which a request can change the run state at once."""


UNDER_WAY = frozenset({State.RUNNING, State.SETTLING, State.UPDATING})


@dataclass(frozen=True)
class Ruling:
    """What the desk decided about one request."""

    ok: bool
    text: str
    trial: int
    """Index of the trial at which the request took or will take effect."""
    event: Event | None = None
    request: Request | None = None
    """A change of the run state, to be applied between trials."""


class Situation(Protocol):
    """What the desk needs to know of the session."""

    cycle: Cycle

    @property
    def state(self) -> RunState: ...

    @property
    def built(self) -> Built | None: ...

    def link_is_up(self) -> bool: ...


def rule(request: OperatorRequest, now: Situation) -> Ruling:
    """Decide on a request; pure. One that could not be carried out is refused here and now."""
    ruling = _rule(request, now)
    if ruling.request is None or not ruling.ok:
        return ruling
    if now.built is None:
        return Ruling(False, "the rig has not greeted yet", now.state.trial)
    # The trial under way will have been run by the time that a boundary request takes effect.
    state = replace(now.state, trial=ruling.trial)
    refusal = now.built.advancer.refusal(ruling.request, state)
    return Ruling(False, refusal, now.state.trial) if refusal else ruling


def _rule(request: OperatorRequest, now: Situation) -> Ruling:
    boundary = now.state.trial + (now.cycle.state not in AT_REST)
    # A trial that has not started need not be waited for.
    stop = now.state.trial + (now.cycle.state in UNDER_WAY)
    if now.state.over and request.verb not in ("status", "note", "halt", "end"):
        return Ruling(False, f"the run is over: {now.state.over}", now.state.trial)
    match request.verb:
        case "status" | "note":
            return Ruling(True, "", now.state.trial)
        case "pause":
            return _pause(now, stop)
        case "resume":
            return _resume(now)
        case "freeze" | "learn":
            text = "learning stops" if request.verb == "freeze" else "learning goes on"
            text = f"{text} with the update after trial {now.state.trial}"
            return Ruling(True, text, now.state.trial, request=Request(request.verb))
        case "rollback":
            target = str(request.arguments.get("to", "best"))
            text = f"trial {boundary} plays the feedforward of {_name(target)}"
            return Ruling(True, text, boundary, request=Request("rollback", target))
        case "halt":
            text = "the rig is being brought to its safe state; only resume leaves it"
            return Ruling(True, text, now.state.trial, event=Event.HALT)
        case "end":
            return Ruling(True, f"the run ends before trial {stop}", stop, event=Event.END)
    return Ruling(False, f"unknown verb {request.verb}", now.state.trial)


def _pause(now: Situation, boundary: int) -> Ruling:
    if now.cycle.state is State.HALTED:
        return Ruling(False, "the run is halted already; resume leaves that", now.state.trial)
    if now.cycle.state is State.PAUSED:
        return Ruling(True, "the run was paused already", now.state.trial)
    return Ruling(True, f"paused before trial {boundary}", boundary, event=Event.PAUSE)


def _resume(now: Situation) -> Ruling:
    if now.cycle.state not in (State.PAUSED, State.HALTED) and not now.cycle.pause_wanted:
        text = f"nothing to resume: the cycle is {now.cycle.state}"
        return Ruling(False, text, now.state.trial)
    if not now.link_is_up():
        return Ruling(False, "the link to the rig is down; mend it first", now.state.trial)
    # A run that a guard halted says so in its state, and the request ends that, on record.
    request = Request("resume") if now.state.halted else None
    text = f"goes on with trial {now.state.trial}"
    return Ruling(True, text, now.state.trial, Event.RESUME, request)


def _name(target: str) -> str:
    return f"trial {target}" if target.isdigit() else f"the {target.replace('_', ' ')} trial"


def answer(
    request: OperatorRequest, ruling: Ruling, utc: str, data: Mapping[str, Any]
) -> OperatorAnswer:
    return OperatorAnswer(
        id=request.id,
        ok=ruling.ok,
        text=ruling.text,
        trial=ruling.trial,
        at=utc,
        data=dict(data),
    )


def row(request: OperatorRequest, ruling: Ruling, reply: OperatorAnswer) -> RequestRow:
    """The line of the record that says who asked for what, why, and what came of it."""
    target = "" if ruling.request is None else ruling.request.target
    return RequestRow(
        id=request.id,
        kind=request.verb,
        target=target,
        who=request.who,
        why=request.why,
        asked_utc=reply.at,
        effect_trial=ruling.trial,
        changes_state=ruling.request is not None,
        ok=ruling.ok,
        answer=reply.to_json(),
    )
