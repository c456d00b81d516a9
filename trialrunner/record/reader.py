"""Reading a record, also while a daemon writes it; memory does not grow with its length."""

import json
import math
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, TypeVar

import numpy as np

from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Array, Level, Purpose, Trial, Verdict
from trialrunner.record import arrays, queries, verify
from trialrunner.record.errors import RecordDamaged, in_words
from trialrunner.record.rows import DaemonRow, RequestRow, Transition
from trialrunner.record.schema import COLUMNS

T = TypeVar("T")

MMAP_BYTES = 1 << 30
"""Part of the file mapped into memory: reading blobs through it is more than twice as fast."""

PAGE_ROWS = 64
"""Rows fetched at once. Between pages no transaction is open, so that a long reading does not keep
the daemon from emptying its log."""

_LEVELS = {level.word: level for level in Level}


@dataclass(frozen=True)
class TrialSummary:
    """A trial's row without its arrays."""

    entry: int
    """Number of the transaction that stored it."""
    index: int
    carry_entry: int
    """The entry that holds the feedforward played."""
    purpose: Purpose
    finish: str
    count: int
    asked_again: int
    played_ok: bool
    start_lateness_s: float
    started_utc: str
    monotonic_ns: int
    collect_s: float
    compute_s: float
    commit_s: float
    """Duration of the commit before this one."""
    void: bool
    late: bool
    norm: float
    """NaN where the trial is incomplete."""
    action: str
    sentence: str
    state_json: str

    @property
    def state(self) -> RunState:
        """The run state after the trial; parsed when asked for, because few ask."""
        return RunState.from_json(json.loads(self.state_json))


@dataclass(frozen=True)
class RecordedTrial:
    """A trial with what it led to."""

    summary: TrialSummary
    trial: Trial
    verdicts: tuple[Verdict, ...]


class RecordReader:
    """One record, read-only. Raises RecordError on opening and on damaged bytes."""

    def __init__(self, path: Path) -> None:
        self.path = path
        queries.require_ours(path)
        self._db = self._ask(lambda: queries.read_only(path))
        try:
            self._db.execute(f"PRAGMA mmap_size = {MMAP_BYTES}")
            self.facts = self._ask(lambda: queries.facts(self._db))
            self.reference: Array = self._ask(lambda: queries.array(self._db, 0, "reference"))
        except BaseException:
            self._db.close()
            raise
        self.reference.flags.writeable = False

    def __enter__(self) -> "RecordReader":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        self._db.close()

    # -- the run ----------------------------------------------------------------------------

    @property
    def n_trials(self) -> int:
        return int(self._all("SELECT count(*) FROM trials")[0][0])

    def first_state(self) -> RunState:
        return self._ask(lambda: queries.state_after(self._db, 0))

    def last_state(self) -> RunState:
        """After the last trial and the requests that followed it."""
        entry, _ = self._ask(lambda: queries.last_entry(self._db))
        return self.state_at(entry)

    def norms(self) -> tuple[Array, Array]:
        """Index and error norm, each (n_trials,), of every trial; NaN where it is incomplete."""
        rows = self._all("SELECT trial, norm FROM trials ORDER BY trial")
        table = np.array(rows, dtype=np.float64).reshape(-1, 2)
        return table[:, 0], table[:, 1]

    def requests(self) -> list[RequestRow]:
        """What operators asked for, in the order in which it was stored."""
        query = f"SELECT {_columns('requests', 1)} FROM requests ORDER BY entry"
        return [_request(row) for row in self._all(query)]

    def find_request(self, request_id: str) -> str | None:
        """The answer given to a request of that id, as JSON."""
        rows = self._all("SELECT answer FROM requests WHERE id = ?", (request_id,))
        return str(rows[0][0]) if rows else None

    def daemons(self) -> list[DaemonRow]:
        """Each time that a daemon took the record up or laid it down."""
        query = f"SELECT {_columns('daemons', 1)} FROM daemons ORDER BY entry"
        return [DaemonRow(*row) for row in self._all(query)]

    def transitions(self) -> Iterator[Transition]:
        """Every step of the cycle in order."""
        columns = _columns("transitions", 2)
        query = f"SELECT entry, {columns} FROM transitions WHERE entry = ? ORDER BY place"
        for entry, _ in self.entries():
            for row in self._all(query, (entry,)):
                yield Transition(*row[1:])

    def verify(self) -> list[str]:
        """Everything that is not as written: SQLite's own check, each array's sum, the chain."""
        return self._ask(lambda: list(verify.problems(self._db)))

    def chain_head(self) -> str:
        """Hex of the last link: whoever keeps it can tell a record that was cut or rewritten."""
        return self._ask(lambda: queries.last_entry(self._db))[1].hex()

    # -- trials -----------------------------------------------------------------------------

    def summaries(self) -> Iterator[TrialSummary]:
        """Every trial's row in order, without arrays."""
        query = f"{_SUMMARY} WHERE trial > ? ORDER BY trial LIMIT {PAGE_ROWS}"
        return (_summary(row) for row in self._paged(query, key=1))

    def trials(self) -> Iterator[RecordedTrial]:
        """Every trial in order, one in memory at a time."""
        return (self._load(summary) for summary in self.summaries())

    def trial(self, index: int) -> RecordedTrial:
        """Raises KeyError for a trial that is not in the record."""
        return self._load(self._summary_where("trial", index))

    def verdicts(self, index: int) -> tuple[Verdict, ...]:
        query = (
            "SELECT guard, level, reason, value, bound, verdicts.void FROM verdicts "
            "JOIN trials USING (entry) WHERE trial = ? ORDER BY place"
        )
        return tuple(
            Verdict(guard, _LEVELS[level], reason, _number(value), _number(bound), bool(void))
            for guard, level, reason, value, bound, void in self._all(query, (index,))
        )

    def state_after(self, index: int) -> RunState:
        """The run state that a trial left."""
        return self._summary_where("trial", index).state

    def carry_before(self, trial: int) -> Carry:
        """Arrays with which a trial began; those for the trial to come if it is not recorded."""
        entry = self._ask(lambda: queries.carry_entry(self._db, trial))
        carry = self.carry_at(entry)
        assert carry is not None
        return carry

    def recall(self, trial: int) -> Array:
        """The learned feedforward with which a trial was run, (n_samples, n_inputs).

        Raises CoreError for a trial that is not in the record.
        """
        return self._ask(lambda: queries.learned_before(self._db, trial))

    # -- entries ----------------------------------------------------------------------------

    def entries(self) -> Iterator[tuple[int, str]]:
        """Number and kind (run, daemon, trial, request) of every transaction in order."""
        query = f"SELECT entry, kind FROM entries WHERE entry > ? ORDER BY entry LIMIT {PAGE_ROWS}"
        return ((int(entry), str(kind)) for entry, kind in self._paged(query, key=0))

    def trial_at(self, entry: int) -> RecordedTrial:
        return self._load(self._summary_where("trials.entry", entry))

    def request_at(self, entry: int) -> RequestRow:
        query = f"SELECT {_columns('requests', 1)} FROM requests WHERE entry = ?"
        return _request(self._all(query, (entry,))[0])

    def daemon_at(self, entry: int) -> DaemonRow:
        query = f"SELECT {_columns('daemons', 1)} FROM daemons WHERE entry = ?"
        return DaemonRow(*self._all(query, (entry,))[0])

    def state_at(self, entry: int) -> RunState:
        """The run state after an entry."""
        return self._ask(lambda: queries.state_after(self._db, entry))

    def carry_at(self, entry: int) -> Carry | None:
        """The arrays that an entry left for the next trial; None where it changed none."""
        n_outputs = self.reference.shape[1]
        return self._ask(lambda: queries.carry_of(self._db, entry, n_outputs))

    # -- helpers ----------------------------------------------------------------------------

    def _summary_where(self, column: str, value: int) -> TrialSummary:
        rows = self._all(f"{_SUMMARY} WHERE {column} = ?", (value,))
        if not rows:
            raise KeyError(f"{self.path}: no trial has the {column} {value}")
        return _summary(rows[0])

    def _load(self, summary: TrialSummary) -> RecordedTrial:
        stored = self._ask(lambda: queries.arrays_of(self._db, summary.entry, left_for_next=False))
        feedforward = self._ask(
            lambda: queries.array(self._db, summary.carry_entry, arrays.FEEDFORWARD)
        )
        for name in ("output", "start_state"):
            if name not in stored:
                raise RecordDamaged(f"trial {summary.index}: the array {name} is missing")
        limited, auxiliary = stored.get("limited"), stored.get("auxiliary")
        trial = Trial(
            index=summary.index,
            purpose=summary.purpose,
            feedforward=feedforward,
            reference=self.reference,
            output=stored["output"],
            auxiliary=np.zeros((len(feedforward), 0)) if auxiliary is None else auxiliary,
            limited=np.zeros(feedforward.shape, dtype=bool) if limited is None else limited,
            start_state=stored["start_state"],
            start_lateness_s=summary.start_lateness_s,
            finish=summary.finish,
            count=summary.count,
            played_ok=summary.played_ok,
            asked_again=summary.asked_again,
        )
        return RecordedTrial(summary, trial, self.verdicts(summary.index))

    def _paged(self, query: str, key: int) -> Iterator[tuple[Any, ...]]:
        """Rows of a query on `column > ?` with a limit; `key` is that column's place in a row."""
        after = -1
        while rows := self._all(query, (after,)):
            yield from rows
            after = rows[-1][key]

    def _all(self, query: str, values: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
        return self._ask(lambda: self._db.execute(query, values).fetchall())

    def _ask(self, question: Callable[[], T]) -> T:
        try:
            return question()
        except (sqlite3.Error, OSError) as error:
            raise in_words(self.path, error) from None


def _columns(table: str, skipped: int) -> str:
    return ", ".join(COLUMNS[table][skipped:])


_SUMMARY = (
    f"SELECT trials.{', '.join(COLUMNS['trials'])}, state FROM trials JOIN entries USING (entry)"
)


def _summary(row: tuple[Any, ...]) -> TrialSummary:
    values = dict(zip(COLUMNS["trials"], row, strict=False))
    values["index"] = values.pop("trial")
    values["purpose"] = Purpose(values["purpose"])
    for name in ("played_ok", "void", "late"):
        values[name] = bool(values[name])
    for name in ("start_lateness_s", "collect_s", "compute_s", "commit_s", "norm"):
        values[name] = _number(values[name])
    return TrialSummary(**values, state_json=row[-1])


def _request(row: tuple[Any, ...]) -> RequestRow:
    values = dict(zip(COLUMNS["requests"][1:], row, strict=True))
    values |= {name: bool(values[name]) for name in ("changes_state", "ok")}
    return RequestRow(**values)


def _number(value: float | None) -> float:
    return math.nan if value is None else value
