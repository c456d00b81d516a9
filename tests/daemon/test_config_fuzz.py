"""Whatever stands in a configuration, the answer is a configuration or a ConfigError."""

import copy
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.config import ConfigError, load_text
from trialrunner.config.toml_text import write_toml

GOOD = tomllib.loads(
    (Path(__file__).parents[2] / "config" / "bead_gantry.toml").read_text(encoding="utf-8")
)


def places(value: Any, path: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """Every key and list element of the document."""
    items: Any = ()
    if isinstance(value, dict):
        items = value.items()
    elif isinstance(value, list):
        items = enumerate(value)
    for key, item in items:
        yield (*path, key)
        yield from places(item, (*path, key))


PLACES = sorted(places(GOOD), key=str)
NAMES = sorted({str(path[-1]) for path in PLACES} | {"kind", "x", "enabled", "limit_s", "a.b"})
SCALARS = (
    st.sampled_from([0, -1, 1, 2**70, 0.0, -0.0, 1e-320, 1e300, float("inf"), float("nan")])
    | st.booleans()
    | st.floats()
    | st.sampled_from(["", "rig", "file", "0.5", "é" * 150, "ipc://", "serial://", "\x7f", "../a"])
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(NAMES), inner, max_size=3)
    ),
    max_leaves=6,
)


def problems_of(document: dict[str, Any]) -> tuple[str, ...]:
    """What a ConfigError says; nothing for a good document. Any other exception fails the test."""
    try:
        load_text(write_toml(document))
    except ConfigError as error:
        found = error.problems
    else:
        return ()
    assert found
    return found


@settings(max_examples=250, deadline=None)
@given(st.lists(st.tuples(st.sampled_from(PLACES), VALUES), min_size=1, max_size=3))
def test_a_configuration_with_anything_in_it_is_accepted_or_refused_in_words(
    edits: list[tuple[tuple[str | int, ...], Any]],
) -> None:
    """No other exception, no empty sentence, and a place in front of each problem."""
    document = copy.deepcopy(GOOD)
    for path, value in edits:
        node: Any = document
        try:
            for step in path[:-1]:
                node = node[step]
            if isinstance(node, list) or isinstance(path[-1], str):
                node[path[-1]] = value
        except (KeyError, IndexError, TypeError):
            continue
    for problem in problems_of(document):
        place, colon, words = problem.partition(": ")
        assert place
        assert colon
        assert words.strip()


@settings(max_examples=150, deadline=None)
@given(st.sampled_from(PLACES), st.booleans())
def test_a_configuration_with_a_piece_missing_is_accepted_or_refused_in_words(
    path: tuple[str | int, ...], rename: bool
) -> None:
    """Any key or element gone, or under another name."""
    document = copy.deepcopy(GOOD)
    node: Any = document
    for step in path[:-1]:
        node = node[step]
    value = node.pop(path[-1])
    if rename and isinstance(node, dict):
        node[f"{path[-1]}_"] = value
    problems_of(document)
