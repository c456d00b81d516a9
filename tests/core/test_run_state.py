"""The run state goes into JSON and comes back the same, bit for bit."""

import json
import math
import struct
from dataclasses import fields
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Purpose

TEXTS = st.one_of(
    st.text(max_size=8),
    st.sampled_from(["float:nan", "float:inf", "float:-inf", "text:", "text:float:nan", "float:x"]),
)
VALUES = st.one_of(
    st.floats(),
    st.integers(min_value=-(2**40), max_value=2**40),
    TEXTS,
    st.lists(st.floats(), max_size=4),
)
MEMORIES = st.dictionaries(TEXTS, st.dictionaries(TEXTS, VALUES, max_size=3), max_size=3)


def of_field(name: str, kind: Any) -> st.SearchStrategy[Any]:
    if name == "memories":
        return MEMORIES
    if name == "recent_norms":
        return st.lists(st.floats(), max_size=5).map(tuple)
    if name == "recent_trials":
        return st.lists(st.integers(0, 10**6), max_size=5).map(tuple)
    by_type = {
        int: st.integers(-1, 10**9),
        float: st.floats(),
        str: TEXTS,
        bool: st.booleans(),
        Purpose: st.sampled_from(list(Purpose)),
    }
    return by_type[kind]


STATES = st.builds(RunState, **{f.name: of_field(f.name, f.type) for f in fields(RunState)})


def bits(value: Any) -> Any:
    """Floats as their bytes, so that NaN equals NaN and -0.0 differs from 0.0."""
    if isinstance(value, float):
        return "nan" if math.isnan(value) else struct.pack("<d", value)
    if isinstance(value, dict):
        return {key: bits(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [type(value).__name__, *(bits(item) for item in value)]
    return (type(value).__name__, value)


@given(STATES)
def test_json_round_trip_is_exact(state: RunState) -> None:
    """Every float by its bits, every text by its letters, through JSON that allows no NaN."""
    text = json.dumps(state.to_json(), allow_nan=False)
    assert bits(vars(RunState.from_json(json.loads(text)))) == bits(vars(state))


def test_a_state_of_an_older_version_is_read_with_defaults() -> None:
    """Fields that were added later take their defaults, fields that are gone are left out."""
    written = RunState(trial=7, purpose=Purpose.CONFIRM).to_json()
    del written["recent_trials"], written["halted"]
    written["gone"] = 1
    read = RunState.from_json(written)
    assert (read.trial, read.purpose, read.halted) == (7, Purpose.CONFIRM, "")


def test_the_first_carry_plays_nothing() -> None:
    """Zeros of the right shapes, nothing cut, no floor yet."""
    carry = Carry.zeros(5, 2, 3)
    assert carry.feedforward.shape == carry.clipped.shape == (5, 2)
    assert carry.mean_error.shape == (5, 3)
    assert not carry.feedforward.any()
    assert not carry.clipped.any()
    assert carry.floor == {}
