"""Brings one table to the rig: whole and verified before the start, or streamed under credit."""

from collections.abc import Callable
from dataclasses import dataclass

from drivers.messages import (
    Credit,
    Message,
    Refused,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
)
from drivers.tables import table_crc
from trialrunner.conversation.commander import Commander


@dataclass(frozen=True)
class TableData:
    """A table as bytes: row-major samples in the rig's sample type."""

    name: Table
    data: bytes
    n_samples: int
    n_channels: int
    crc: int

    @classmethod
    def of(cls, name: Table, data: bytes, n_samples: int, n_channels: int) -> "TableData":
        return cls(name, data, n_samples, n_channels, table_crc(data))

    @property
    def row_bytes(self) -> int:
        return len(self.data) // self.n_samples


class TableSender:
    """One table on its way. `on_ready` and `on_failed(code, text)` are called once per `send`."""

    def __init__(
        self,
        commander: Commander,
        block_bytes: int,
        max_rounds: int,
        on_ready: Callable[[], None],
        on_failed: Callable[[int, str], None],
    ) -> None:
        self._commander = commander
        self._block_bytes = block_bytes
        self._max_rounds = max_rounds
        self._on_ready = on_ready
        self._on_failed = on_failed
        self._table: TableData | None = None
        self._revision = 0
        self._spans: list[tuple[int, int]] = []
        self._closing = False
        self._streamed = False
        self._upto = 0
        self._fill = 0
        self._next = 0
        self._round = 0
        self._last_credit = (-1, -1)
        self._announced = False

    def send(self, table: TableData, capacity: int) -> None:
        """Announce a table; it is streamed where it is longer than the rig's memory."""
        self._table = table
        self._revision = (self._revision + 1) % 256
        self._streamed = table.n_samples > capacity
        self._fill = min(capacity, table.n_samples)
        self._spans, self._closing, self._announced = [], False, False
        self._next = self._upto = self._round = 0
        self._last_credit = (-1, -1)
        opening = TableOpen(
            table.name,
            self._revision,
            table.n_samples,
            table.n_channels,
            table.crc,
            self._streamed,
        )
        self._commander.ask(opening, self._on_state)

    def stop(self) -> None:
        """No more blocks of this table."""
        self._table = None
        self._spans = []

    def next_block(self) -> TableBlock | None:
        """The next block that may be sent now; asks the rig to check when all are out."""
        if self._table is None:
            return None
        if self._streamed:
            return self._streamed_block()
        if self._spans:
            first, count = self._spans.pop()
            step = max(1, self._block_bytes // self._table.row_bytes)
            if count > step:
                self._spans.append((first + step, count - step))
            return self._block(first, min(step, count))
        if self._closing:
            self._closing = False
            self._commander.ask(TableClose(self._table.name, self._revision), self._on_state)
        return None

    def on_credit(self, credit: Credit) -> None:
        """The rig has samples below `have` and takes samples below `upto`."""
        if self._table is None or not self._streamed or credit.revision != self._revision:
            return
        if credit.have < self._next and (credit.have, credit.upto) == self._last_credit:
            # The same report twice while blocks are out: one was lost; go back to the gap.
            self._next = credit.have
            self._last_credit = (-1, -1)
        else:
            self._last_credit = (credit.have, credit.upto)
        self._upto = max(self._upto, min(credit.upto, self._table.n_samples))
        if not self._announced and credit.have >= self._fill:
            self._announced = True
            self._on_ready()

    def _streamed_block(self) -> TableBlock | None:
        assert self._table is not None
        step = max(1, self._block_bytes // self._table.row_bytes)
        count = min(step, self._upto - self._next)
        if count <= 0:
            return None
        block = self._block(self._next, count)
        self._next += count
        return block

    def _block(self, first: int, count: int) -> TableBlock:
        assert self._table is not None
        row = self._table.row_bytes
        data = self._table.data[first * row : (first + count) * row]
        return TableBlock(self._table.name, self._revision, first, data)

    def _on_state(self, answer: Message) -> None:
        if self._table is None:
            return
        if isinstance(answer, Refused):
            self._fail(answer.code, answer.text)
        elif not isinstance(answer, TableState):
            self._fail(0, f"the rig answered a table with {type(answer).__name__}")
        elif answer.verified:
            self._announced = True
            self._on_ready()
        elif not self._streamed:
            self._send_missing(answer)

    def _send_missing(self, state: TableState) -> None:
        assert self._table is not None
        if self._round > self._max_rounds:
            self._fail(0, f"the table did not arrive whole in {self._max_rounds} rounds")
            return
        whole = ((0, self._table.n_samples),)
        missing = state.missing if self._round and state.missing else whole
        self._spans = [s for s in reversed(missing) if s[0] + s[1] <= self._table.n_samples]
        self._round += 1
        self._closing = True

    def _fail(self, code: int, text: str) -> None:
        self.stop()
        self._on_failed(code, text)
