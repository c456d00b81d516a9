"""The whole daemon against the mock rig, in one thread on a hand-moved clock."""

import numpy as np


def test_a_run_learns_down_to_its_floor_and_ends(world):
    run = world(trials=8).run()
    state = run.session.state
    assert state.over
    assert state.counted == 8
    assert state.best_norm < state.first_norm / 20
    assert state.floor_norm < state.first_norm / 100
    assert np.isfinite(state.floor_norm)
