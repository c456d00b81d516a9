"""The hash chain: each entry's link covers the link before it and every row of the entry.

A changed, missing or added row breaks the chain from there on; whoever keeps the last link can
also tell a record whose end was cut off.
"""

import hashlib
import json
from collections.abc import Iterable
from typing import Any

from trialrunner.record.schema import COLUMNS

Row = tuple[Any, ...]

HASHED = {
    table: tuple(column for column in columns if column != "data")
    for table, columns in COLUMNS.items()
}
"""Columns in the chain: all but the arrays' bytes, for which their SHA-256 stands."""

_ENCODER = json.JSONEncoder(default=bytes.hex)


def canonical(row: Iterable[Any]) -> Row:
    """Values as SQLite hands them back: no booleans, no negative zero, no NaN."""
    return tuple(_canonical(value) for value in row)


def _canonical(value: Any) -> Any:
    if isinstance(value, bool):
        return int(value)
    if isinstance(value, float):
        return None if value != value else float(value) + 0.0
    return value


def link(before: bytes, head: Row, rows: Iterable[tuple[str, Row]]) -> bytes:
    """SHA-256 over the link before, the entry's own columns, and its rows.

    `head` is (entry, kind, state); `rows` are (table, hashed columns) in the order of COLUMNS and
    within a table in the order of insertion. Each is one line of JSON, bytes as hexadecimal.
    """
    total = hashlib.sha256(before)
    for name, row in (("entries", head), *rows):
        total.update(_ENCODER.encode([name, *row]).encode() + b"\n")
    return total.digest()
