"""Values that TOML can hold and a configuration cannot: NaN, misplaced infinities, dates."""

import datetime
import math
from collections.abc import Iterator, Mapping
from typing import Any

from trialrunner.config.lines import Path
from trialrunner.config.problems import Problem, Schema, expected_words, node_at
from trialrunner.config.schema import INFINITE

_MOMENTS = (datetime.date, datetime.time)


def impossible_values(document: Mapping[str, Any], schema: Schema) -> Iterator[Problem]:
    """A problem for each value that no setting can have."""
    for path, value in _leaves(document, ()):
        if isinstance(value, float) and not math.isfinite(value):
            if math.isnan(value) or not _may_be_infinite(path, document, schema):
                yield Problem(path, f"expected {_expected(path, document, schema)}, found {value}")
        elif isinstance(value, _MOMENTS):
            yield Problem(
                path, f"expected {_expected(path, document, schema)}, found the date {value}"
            )


def _leaves(value: Any, path: Path) -> Iterator[tuple[Path, Any]]:
    if isinstance(value, Mapping):
        for key, item in value.items():
            yield from _leaves(item, (*path, key))
    elif isinstance(value, list):
        for index, item in enumerate(value):
            yield from _leaves(item, (*path, index))
    else:
        yield path, value


def _expected(path: Path, document: Mapping[str, Any], schema: Schema) -> str:
    node = node_at(schema, path, document)
    if node is None:
        return "another value"
    words = expected_words(node, schema)
    return words.replace("a number", "a finite number", 1)


def _may_be_infinite(path: Path, document: Mapping[str, Any], schema: Schema) -> bool:
    """True where no limit makes sense: guards, whose limits may be off, and infinite defaults.

    Unknown keys are left to other checks.
    """
    if path[0] == "guards":
        return True
    nodes = [node_at(schema, path[:length], document) for length in range(1, len(path) + 1)]
    return any(node is None or node.get(INFINITE, False) for node in nodes)
