"""The cycle of a run as one literal table: (state, event) -> next state and actions.

Only transitions live here. The session performs the actions and decides nothing; guards and
ladder decide what a trial is worth, and reach the table as one of the events `advanced`, `over`
and `halt`. HALTED absorbs everything but an operator's `resume`.
"""

from dataclasses import dataclass, replace
from enum import StrEnum

from trialrunner.core.errors import TransitionError


class State(StrEnum):
    IDLE = "idle"
    """Before the first greeting, and after the run is over."""
    LOADING = "loading"
    """Tables go out; the rig comes back to its start and is armed."""
    ARMED = "armed"
    RUNNING = "running"
    SETTLING = "settling"
    """The trial is over; what did not arrive is asked for again."""
    UPDATING = "updating"
    """Guards judge, the law computes, the trial is committed."""
    PAUSED = "paused"
    HALTED = "halted"


class Event(StrEnum):
    GREETED = "greeted"
    ARMED = "armed"
    DISARMED = "disarmed"
    STARTED = "started"
    MISSED = "missed"
    """The rig did not start, or would not arm; the trial is void."""
    FINISHED = "finished"
    COLLECTED = "collected"
    ADVANCED = "advanced"
    LATE = "late"
    """The update missed its deadline; the last feedforward is sent again."""
    OVER = "over"
    PAUSE = "pause"
    RESUME = "resume"
    HALT = "halt"
    """By an operator, a guard, or the daemon itself after an error."""
    FAULT = "fault"
    LOST = "lost"
    """The link broke or the rig fell silent."""
    END = "end"
    """An operator or SIGTERM ends the run at the next trial boundary."""
    ABORT = "abort"
    """The grace after END ran out: end at once."""


class Action(StrEnum):
    LOAD = "load"
    """Send the tables, wait for the rig, arm."""
    ORDER_START = "order start"
    DISARM = "disarm"
    PROCESS = "process"
    """Hand the collected trial to the update job."""
    PROCESS_VOID = "process void"
    """The same for a trial of which nothing (more) will arrive; nothing if none is in flight."""
    HALT_RIG = "halt rig"
    CLEAR_RIG = "clear rig"
    """A person said resume: ask the rig to leave its safe state."""
    RECONNECT = "reconnect"
    FINISH = "finish"
    """Say goodbye to the rig and leave the loop."""


_S, _E, _A = State, Event, Action

TABLE: dict[tuple[State, Event], tuple[State, tuple[Action, ...]]] = {
    (_S.IDLE, _E.GREETED): (_S.LOADING, (_A.LOAD,)),
    (_S.IDLE, _E.LOST): (_S.IDLE, (_A.RECONNECT,)),
    (_S.IDLE, _E.END): (_S.IDLE, (_A.FINISH,)),
    (_S.LOADING, _E.GREETED): (_S.LOADING, (_A.LOAD,)),
    (_S.LOADING, _E.ARMED): (_S.ARMED, (_A.ORDER_START,)),
    # A rig that starts itself may be quicker than its own answer to the arming.
    (_S.LOADING, _E.STARTED): (_S.RUNNING, ()),
    (_S.LOADING, _E.FINISHED): (_S.SETTLING, ()),
    (_S.LOADING, _E.MISSED): (_S.UPDATING, (_A.PROCESS_VOID,)),
    (_S.LOADING, _E.LOST): (_S.LOADING, (_A.RECONNECT,)),
    (_S.LOADING, _E.PAUSE): (_S.LOADING, (_A.DISARM,)),
    (_S.LOADING, _E.DISARMED): (_S.PAUSED, ()),
    (_S.LOADING, _E.END): (_S.LOADING, (_A.DISARM,)),
    (_S.ARMED, _E.STARTED): (_S.RUNNING, ()),
    (_S.ARMED, _E.FINISHED): (_S.SETTLING, ()),
    (_S.ARMED, _E.MISSED): (_S.UPDATING, (_A.DISARM, _A.PROCESS_VOID)),
    (_S.ARMED, _E.LOST): (_S.UPDATING, (_A.PROCESS_VOID, _A.RECONNECT)),
    (_S.ARMED, _E.PAUSE): (_S.ARMED, (_A.DISARM,)),
    (_S.ARMED, _E.DISARMED): (_S.PAUSED, ()),
    (_S.ARMED, _E.END): (_S.ARMED, (_A.DISARM,)),
    (_S.RUNNING, _E.FINISHED): (_S.SETTLING, ()),
    (_S.RUNNING, _E.LOST): (_S.UPDATING, (_A.PROCESS_VOID, _A.RECONNECT)),
    (_S.SETTLING, _E.COLLECTED): (_S.UPDATING, (_A.PROCESS,)),
    (_S.SETTLING, _E.LOST): (_S.UPDATING, (_A.PROCESS_VOID, _A.RECONNECT)),
    (_S.UPDATING, _E.ADVANCED): (_S.LOADING, (_A.LOAD,)),
    (_S.UPDATING, _E.LATE): (_S.LOADING, (_A.LOAD,)),
    (_S.UPDATING, _E.OVER): (_S.IDLE, (_A.FINISH,)),
    (_S.UPDATING, _E.LOST): (_S.UPDATING, (_A.RECONNECT,)),
    (_S.PAUSED, _E.RESUME): (_S.LOADING, (_A.LOAD,)),
    (_S.PAUSED, _E.LOST): (_S.PAUSED, (_A.RECONNECT,)),
    (_S.PAUSED, _E.END): (_S.IDLE, (_A.FINISH,)),
    (_S.HALTED, _E.RESUME): (_S.LOADING, (_A.CLEAR_RIG, _A.LOAD)),
    (_S.HALTED, _E.COLLECTED): (_S.HALTED, (_A.PROCESS,)),
    (_S.HALTED, _E.LOST): (_S.HALTED, (_A.PROCESS_VOID, _A.RECONNECT)),
    (_S.HALTED, _E.END): (_S.IDLE, (_A.FINISH,)),
}
"""Every transition but the three that are the same in all states: HALT, FAULT and ABORT."""

_IN_TRIAL = frozenset({_S.ARMED, _S.RUNNING, _S.SETTLING})

_ANY: dict[Event, tuple[State, tuple[Action, ...]]] = {
    _E.HALT: (_S.HALTED, (_A.HALT_RIG,)),
    _E.FAULT: (_S.HALTED, (_A.HALT_RIG,)),
    _E.ABORT: (_S.IDLE, (_A.HALT_RIG, _A.PROCESS_VOID, _A.FINISH)),
}

_REMEMBERED = frozenset({_E.PAUSE, _E.END})
"""Requests kept as a wish until the trial boundary."""

_IGNORED_WHEN_HALTED = frozenset(_E) - {_E.RESUME, _E.LOST, _E.COLLECTED, _E.END, _E.ABORT}
_STALE = frozenset({_E.ARMED, _E.DISARMED, _E.STARTED, _E.FINISHED, _E.MISSED, _E.COLLECTED})
"""Reports from the rig that may arrive after the daemon has moved on; they change nothing."""


@dataclass(frozen=True)
class Cycle:
    """Where the run is, and which operator wishes wait for the trial boundary."""

    state: State = State.IDLE
    pause_wanted: bool = False
    end_wanted: bool = False

    @property
    def in_trial(self) -> bool:
        """The rig may be moving under our feedforward."""
        return self.state in _IN_TRIAL


def step(cycle: Cycle, event: Event) -> tuple[Cycle, tuple[Action, ...]]:
    """The cycle after an event and what has to be done.

    Raises TransitionError for an event that cannot happen in this state; reports of the rig that
    come too late are no error and change nothing.
    """
    if event in _ANY and not (cycle.state is State.HALTED and event is not Event.ABORT):
        state, actions = _ANY[event]
        return Cycle(state), actions
    if cycle.state is State.HALTED and event in _IGNORED_WHEN_HALTED:
        return cycle, ()
    cycle = _remember(cycle, event)
    found = TABLE.get((cycle.state, event))
    if found is None:
        if event in _STALE or event in _REMEMBERED or event in (Event.GREETED, Event.RESUME):
            return cycle, ()
        raise TransitionError(f"the cycle is {cycle.state} and cannot take the event {event}")
    return _at_boundary(cycle, *found)


def _remember(cycle: Cycle, event: Event) -> Cycle:
    if event is Event.PAUSE:
        return replace(cycle, pause_wanted=True)
    if event is Event.RESUME:
        return replace(cycle, pause_wanted=False)
    if event is Event.END:
        return replace(cycle, end_wanted=True)
    return cycle


def _at_boundary(
    cycle: Cycle, state: State, actions: tuple[Action, ...]
) -> tuple[Cycle, tuple[Action, ...]]:
    """Wishes take effect where the next trial would be loaded."""
    boundary = Action.LOAD in actions or state is State.PAUSED
    if boundary and cycle.end_wanted:
        return Cycle(State.IDLE), (Action.FINISH,)
    if boundary and cycle.pause_wanted:
        return replace(cycle, state=State.PAUSED, pause_wanted=False), ()
    return replace(cycle, state=state), actions
