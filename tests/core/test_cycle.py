"""The cycle's table: every row, the absorbing halt, and wishes that wait for the boundary."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from trialrunner.core.cycle import TABLE, Action, Cycle, Event, State, step
from trialrunner.core.errors import TransitionError


def run(events, cycle=None):
    cycle = cycle or Cycle()
    done = []
    for event in events:
        cycle, actions = step(cycle, event)
        done.extend(actions)
    return cycle, done


ONE_TRIAL = [Event.ARMED, Event.STARTED, Event.FINISHED, Event.COLLECTED, Event.ADVANCED]


def test_a_trial_goes_round_and_loads_the_next_one():
    cycle, done = run([Event.GREETED, *ONE_TRIAL])
    assert cycle.state is State.LOADING
    assert done == [Action.LOAD, Action.ORDER_START, Action.PROCESS, Action.LOAD]


@pytest.mark.parametrize("state", [s for s in State if s is not State.HALTED])
@pytest.mark.parametrize("event", [Event.HALT, Event.FAULT])
def test_halt_and_fault_stop_from_every_state(state, event):
    cycle, done = step(Cycle(state), event)
    assert cycle.state is State.HALTED
    assert Action.HALT_RIG in done


@given(
    st.lists(st.sampled_from([e for e in Event if e not in (Event.RESUME, Event.END, Event.ABORT)]))
)
def test_halted_is_left_by_nothing_that_a_machine_can_say(events):
    cycle, done = run(events, Cycle(State.HALTED))
    assert cycle.state is State.HALTED
    assert Action.LOAD not in done
    assert Action.ORDER_START not in done


def test_resume_clears_the_rig_and_loads_the_same_trial_again():
    cycle, done = step(Cycle(State.HALTED), Event.RESUME)
    assert cycle.state is State.LOADING
    assert done == (Action.CLEAR_RIG, Action.LOAD)


def test_a_pause_during_a_trial_waits_for_its_boundary():
    cycle, done = run([Event.GREETED, Event.ARMED, Event.STARTED, Event.PAUSE, Event.FINISHED])
    assert cycle.state is State.SETTLING
    cycle, done = run([Event.COLLECTED, Event.ADVANCED], cycle)
    assert cycle.state is State.PAUSED
    assert Action.LOAD not in done
    cycle, _ = run([Event.RESUME], cycle)
    assert cycle == Cycle(State.LOADING)


def test_a_pause_while_armed_disarms_and_holds():
    cycle, done = run([Event.GREETED, Event.ARMED, Event.PAUSE, Event.DISARMED])
    assert cycle.state is State.PAUSED
    assert Action.DISARM in done


def test_a_pause_that_comes_as_the_trial_starts_lets_it_run_and_holds_afterwards():
    events = [Event.GREETED, Event.ARMED, Event.PAUSE, Event.STARTED, *ONE_TRIAL[2:]]
    cycle, _ = run(events)
    assert cycle.state is State.PAUSED


def test_resume_takes_a_pause_back_before_the_boundary():
    events = [Event.GREETED, Event.ARMED, Event.STARTED, Event.PAUSE]
    cycle, _ = run([*events, Event.RESUME, *ONE_TRIAL[2:]])
    assert cycle.state is State.LOADING


def test_end_finishes_at_the_boundary_and_abort_at_once():
    cycle, done = run([Event.GREETED, Event.ARMED, Event.STARTED, Event.END, *ONE_TRIAL[2:]])
    assert cycle.state is State.IDLE
    assert done[-1] is Action.FINISH
    cycle, done = run([Event.GREETED, Event.ARMED, Event.STARTED, Event.ABORT])
    assert cycle.state is State.IDLE
    assert done[-3:] == [Action.HALT_RIG, Action.PROCESS_VOID, Action.FINISH]


@pytest.mark.parametrize("state", [State.ARMED, State.RUNNING, State.SETTLING])
def test_a_link_lost_in_a_trial_voids_it_and_reconnects(state):
    cycle, done = step(Cycle(state), Event.LOST)
    assert cycle.state is State.UPDATING
    assert done == (Action.PROCESS_VOID, Action.RECONNECT)


@pytest.mark.parametrize("state", list(State))
def test_a_lost_link_is_legal_in_every_state(state):
    _, done = step(Cycle(state), Event.LOST)
    assert Action.RECONNECT in done


def test_late_reports_of_the_rig_change_nothing():
    for event in (Event.STARTED, Event.FINISHED, Event.COLLECTED, Event.ARMED):
        cycle, done = step(Cycle(State.PAUSED), event)
        assert (cycle, done) == (Cycle(State.PAUSED), ())


def test_an_impossible_event_is_an_error_that_names_state_and_event():
    with pytest.raises(TransitionError, match=r"cycle is idle .* event over"):
        step(Cycle(State.IDLE), Event.OVER)


def test_every_state_is_reached_and_left_by_some_row():
    assert {state for state, _ in TABLE} == set(State)
    reached = {state for state, _ in TABLE.values()}
    assert reached | {State.HALTED} == set(State)


@given(st.lists(st.sampled_from(list(Event)), max_size=40))
def test_no_sequence_orders_a_start_without_loading_first(events):
    cycle, loaded = Cycle(), False
    for event in events:
        try:
            cycle, done = step(cycle, event)
        except TransitionError:
            continue
        loaded = loaded or Action.LOAD in done
        assert loaded or Action.ORDER_START not in done
