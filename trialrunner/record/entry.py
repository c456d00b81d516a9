"""One transaction on its way into a record: rows, and the link of the chain over them."""

import json
import sqlite3
from collections.abc import Iterator, Mapping
from typing import Any

from trialrunner.core.run_state import RunState
from trialrunner.record.arrays import Blob
from trialrunner.record.chain import HASHED, Row, canonical, link
from trialrunner.record.schema import COLUMNS


class Entry:
    """Rows of one entry. Insert all, then `finish`."""

    def __init__(self, db: sqlite3.Connection, number: int, kind: str) -> None:
        self.number = number
        self._db = db
        self._kind = kind
        self._hashed: dict[str, list[Row]] = {table: [] for table in COLUMNS}

    def insert(self, table: str, *values: Any) -> None:
        """A row in the order of COLUMNS."""
        row, columns = canonical(values), COLUMNS[table]
        marks = ", ".join("?" * len(columns))
        self._db.execute(f"INSERT INTO {table} ({', '.join(columns)}) VALUES ({marks})", row)
        self._hashed[table].append(row[: len(HASHED[table])])

    def insert_arrays(self, blobs: Mapping[str, Blob]) -> None:
        for name, blob in blobs.items():
            self.insert("arrays", self.number, name, *blob.row())

    def finish(self, before: bytes, state: RunState | None) -> bytes:
        """Write the entry itself, with the run state that it leaves; returns its link."""
        text = None if state is None else state_json(state)
        head = (self.number, self._kind, text)
        chain = link(before, head, self._rows())
        self._db.execute("INSERT INTO entries VALUES (?, ?, ?, ?)", (*head, chain))
        return chain

    def _rows(self) -> Iterator[tuple[str, Row]]:
        return ((table, row) for table, rows in self._hashed.items() for row in rows)


def state_json(state: RunState) -> str:
    return json.dumps(state.to_json(), allow_nan=False, separators=(",", ":"))
