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
from trialrunner.record import arrays, queries
from trialrunner.record.errors import RecordDamaged, in_words
from trialrunner.record.rows import RequestRow, Transition

T = TypeVar("T")

MMAP_BYTES = 1 << 30
"""Part of the file mapped into memory: reading blobs through it is more than twice as fast."""

_LEVELS = {level.word: level for level in Level}


@dataclass(frozen=True)
class TrialSummary:
    """A trial's row without its arrays."""

    index: int
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
    void: bool
    late: bool
    norm: float
    """NaN where the trial is incomplete."""
    action: str
    sentence: str
    state: RunState
    """After the trial."""


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
        self._db = queries.read_only(path)
        self._db.execute(f"PRAGMA mmap_size = {MMAP_BYTES}")
        self.facts = self._ask(lambda: queries.facts(self._db))
        self.reference: Array = self._ask(lambda: queries.array(self._db, -1, "reference"))
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

    @property
    def n_trials(self) -> int:
        return int(self._one("SELECT count(*) FROM trials"))

    def first_state(self) -> RunState:
        return self._ask(lambda: queries.first_state(self._db))

    def last_state(self) -> RunState:
        return self._ask(lambda: queries.last_state(self._db))

    def carry_before(self, trial: int) -> Carry:
        """Arrays with which a trial began, or will begin."""
        n_outputs = self.reference.shape[1]
        return self._ask(lambda: queries.carry_before(self._db, trial, n_outputs))

    def recall(self, trial: int) -> Array:
        """The learned feedforward with which a trial was run, (n_samples, n_inputs)."""
        return self._ask(lambda: queries.learned_before(self._db, trial))

    def summaries(self) -> Iterator[TrialSummary]:
        """Every trial's row in order, without arrays."""
        query = f"SELECT {_COLUMNS} FROM trials ORDER BY trial"
        return (_summary(row) for row in self._rows(query))

    def trials(self) -> Iterator[RecordedTrial]:
        """Every trial in order, one in memory at a time."""
        return (self._load(summary) for summary in self.summaries())

    def trial(self, index: int) -> RecordedTrial:
        query = f"SELECT {_COLUMNS} FROM trials WHERE trial = ?"
        rows = list(self._rows(query, (index,)))
        if not rows:
            raise KeyError(f"trial {index} is not in {self.path}")
        return self._load(_summary(rows[0]))

    def verdicts(self, index: int) -> tuple[Verdict, ...]:
        query = (
            "SELECT guard, level, reason, value, bound, void FROM verdicts WHERE trial = ? "
            "ORDER BY place"
        )
        return tuple(
            Verdict(guard, _LEVELS[level], reason, _number(value), _number(bound), bool(void))
            for guard, level, reason, value, bound, void in self._rows(query, (index,))
        )

    def requests(self) -> list[RequestRow]:
        query = (
            "SELECT id, kind, target, who, why, asked_utc, effect_trial, changes_state, ok, answer "
            "FROM requests ORDER BY place"
        )
        return [
            RequestRow(id_, kind, target, who, why, utc, trial, bool(changes), bool(ok), answer)
            for id_, kind, target, who, why, utc, trial, changes, ok, answer in self._rows(query)
        ]

    def transitions(self) -> Iterator[Transition]:
        query = "SELECT utc, trial, before, event, after, cause FROM transitions ORDER BY place"
        return (Transition(*row) for row in self._rows(query))

    def verify(self) -> list[str]:
        """Everything that is not as written: SQLite's own check, each array's sum, the chain."""
        found = [
            f"SQLite: {text}" for (text,) in self._rows("PRAGMA integrity_check") if text != "ok"
        ]
        query = f"SELECT trial, name, {_BLOB} FROM arrays"
        for trial, name, *row in self._rows(query):
            try:
                arrays.unpack(f"trial {trial}, {name}", tuple(row))
            except (RecordDamaged, ValueError) as error:
                found.append(str(error))
        return found + self._broken_links()

    def chain_head(self) -> str:
        """Hex of the last link: whoever keeps it can tell a record that was cut or rewritten."""
        return self._ask(lambda: queries.last_chain(self._db)).hex()

    def _broken_links(self) -> list[str]:
        before, found = b"", []
        for *row, chain in self._rows(f"SELECT {_COLUMNS}, chain FROM trials ORDER BY trial"):
            index = row[0]
            sums = dict(
                self._rows(
                    "SELECT name, sha256 FROM arrays WHERE trial = ? AND name NOT GLOB ?",
                    (index, arrays.NEXT + "*"),
                )
            )
            played = queries.digest(self._db, index - 1)
            if queries.chain_of(before, tuple(row), played, sums) != chain:
                found.append(f"trial {index}: its row or arrays do not agree with the hash chain")
            before = chain
        return found

    def _load(self, summary: TrialSummary) -> RecordedTrial:
        index = summary.index
        stored = self._ask(lambda: queries.arrays_of(self._db, index))
        carry = self.carry_before(index)
        n_samples, n_inputs = carry.feedforward.shape
        trial = Trial(
            index=index,
            purpose=summary.purpose,
            feedforward=carry.feedforward,
            reference=self.reference,
            output=stored["output"],
            auxiliary=stored.get("auxiliary", np.zeros((n_samples, 0))),
            limited=stored.get("limited", np.zeros((n_samples, n_inputs), dtype=bool)),
            start_state=stored["start_state"],
            start_lateness_s=summary.start_lateness_s,
            finish=summary.finish,
            count=summary.count,
            played_ok=summary.played_ok,
            asked_again=summary.asked_again,
        )
        return RecordedTrial(summary, trial, self.verdicts(index))

    def _rows(self, query: str, values: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
        cursor = self._ask(lambda: self._db.execute(query, values))
        while (row := self._ask(cursor.fetchone)) is not None:
            yield row

    def _one(self, query: str) -> Any:
        return next(self._rows(query))[0]

    def _ask(self, question: Callable[[], T]) -> T:
        try:
            return question()
        except (sqlite3.Error, OSError) as error:
            raise in_words(self.path, error) from None


_COLUMNS = (
    "trial, purpose, finish, count, asked_again, played_ok, start_lateness_s, started_utc, "
    "monotonic_ns, collect_s, compute_s, void, late, norm, action, sentence, state"
)
_BLOB = "dtype, shape, unit, sha256, data"


def _summary(row: tuple[Any, ...]) -> TrialSummary:
    (index, purpose, finish, count, asked, played, *timing, void, late, norm) = row[:14]
    action, sentence, state = row[14:]
    lateness_s, started_utc, monotonic_ns, collect_s, compute_s = timing
    return TrialSummary(
        index=index,
        purpose=Purpose(purpose),
        finish=finish,
        count=count,
        asked_again=asked,
        played_ok=bool(played),
        start_lateness_s=lateness_s,
        started_utc=started_utc,
        monotonic_ns=monotonic_ns,
        collect_s=collect_s,
        compute_s=compute_s,
        void=bool(void),
        late=bool(late),
        norm=_number(norm),
        action=action,
        sentence=sentence,
        state=RunState.from_json(json.loads(state)),
    )


def _number(value: float | None) -> float:
    return math.nan if value is None else value
