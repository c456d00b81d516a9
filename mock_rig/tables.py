"""Tables that the daemon sends: stored whole and verified, or streamed under credit; pure."""

from dataclasses import dataclass

import numpy as np
from crc32c import crc32c
from numpy.typing import NDArray

from drivers.messages import Credit, TableBlock, TableOpen
from drivers.tables import missing_spans, table_crc

LIMIT_SLACK = 1e-6
"""Relative slack of the rig's own limit check: rounding of the wire's sample type."""


@dataclass(frozen=True)
class RowLimits:
    """What one table's samples must keep to; arrays of one number a channel."""

    low: NDArray[np.float64]
    high: NDArray[np.float64]
    step: NDArray[np.float64]
    """Largest change from one sample to the next."""

    def broken(self, rows: NDArray[np.floating], before: NDArray[np.floating] | None = None) -> str:
        """What breaks them, in words, empty if nothing does; `before` is the sample before."""
        values = rows.astype(np.float64)
        if not np.isfinite(values).all():
            return "a sample is not a number"
        slack = LIMIT_SLACK * np.maximum(np.abs(self.low), np.abs(self.high))
        if ((values < self.low - slack) | (values > self.high + slack)).any():
            return "a sample lies outside the declared range"
        if before is not None:
            values = np.vstack([before, values])
        if (np.abs(np.diff(values, axis=0)) > self.step * (1 + LIMIT_SLACK) + slack).any():
            return "samples change faster than the declared rate"
        return ""


class StoredTable:
    """One named table. A streamed one holds `capacity` samples and forgets what was played."""

    def __init__(
        self, opened: TableOpen, sample_type: str, capacity: int, limits: RowLimits
    ) -> None:
        self.opened = opened
        self.verified = False
        self.trouble = ""
        """What breaks the limits, in words."""
        self._limits = limits
        self._dtype = np.dtype(f"<{sample_type}")
        self._capacity = capacity
        size = min(opened.n_samples, capacity) if opened.streamed else opened.n_samples
        self._rows = np.zeros((size, opened.n_channels), self._dtype)
        self._here = np.zeros(0 if opened.streamed else size, dtype=bool)
        self._have = 0
        self._played = 0
        self._credited = 0
        self._crc = 0
        self.gap_told = False

    @property
    def row_bytes(self) -> int:
        return self.opened.n_channels * self._dtype.itemsize

    def take(self, block: TableBlock) -> bool:
        """Store a block; false if it does not fit where it says."""
        count, rest = divmod(len(block.data), self.row_bytes)
        if rest or not count or block.first + count > self.opened.n_samples:
            return False
        rows = np.frombuffer(block.data, self._dtype).reshape(count, -1)
        if self.opened.streamed:
            return self._take_next(block.first, rows)
        # Where a sample is already here, the first arrival holds: a verified table never changes.
        fresh = ~self._here[block.first : block.first + count]
        self._rows[block.first : block.first + count][fresh] = rows[fresh]
        self._here[block.first : block.first + count] = True
        return True

    def _take_next(self, first: int, rows: NDArray[np.floating]) -> bool:
        """In order only, and only into free room."""
        if first != self._have or first + len(rows) > self._played + self._capacity:
            return False
        before = self._rows[(first - 1) % len(self._rows)] if first else None
        self.trouble = self.trouble or self._limits.broken(rows, before)
        places = np.arange(first, first + len(rows)) % len(self._rows)
        self._rows[places] = rows
        self._have += len(rows)
        self.gap_told = False
        return True

    def close(self) -> None:
        """Check whether it is whole, of the announced checksum, and within the limits."""
        if self.verified or not self._here.all():
            return
        if table_crc(self._rows.tobytes()) != self.opened.crc:
            self._here[:] = False
            return
        self.trouble = self._limits.broken(self._rows)
        self.verified = not self.trouble

    def missing(self) -> tuple[tuple[int, int], ...]:
        return () if self.verified or not self._here.any() else missing_spans(self._here)

    def credit(self) -> Credit:
        upto = min(self._played + self._capacity, self.opened.n_samples)
        self._credited = upto
        return Credit(self.opened.table, self.opened.revision, self._have, upto)

    @property
    def credit_due(self) -> bool:
        """A quarter of the memory has become free since the last credit."""
        upto = min(self._played + self._capacity, self.opened.n_samples)
        enough = max(1, self._capacity // 4)
        return upto - self._credited >= enough or (
            upto > self._credited and upto == self.opened.n_samples
        )

    @property
    def ready(self) -> bool:
        """Enough is here to arm."""
        if not self.opened.streamed:
            return self.verified
        return self._have >= min(self._capacity, self.opened.n_samples)

    @property
    def used(self) -> bool:
        """A streamed table of which something was played: it cannot be played again."""
        return self.opened.streamed and self._played > 0

    def misses(self, first: int) -> bool:
        """A block from there on tells of a gap in a streamed table."""
        return self.opened.streamed and self._have < first < self.opened.n_samples

    @property
    def hungry(self) -> bool:
        """A streamed table that is not yet in to its end."""
        return self.opened.streamed and self._have < self.opened.n_samples

    def row(self, index: int) -> list[float] | None:
        """The sample to play now, None if it is not here: an underrun."""
        if self.opened.streamed and index >= self._have:
            return None
        row = self._rows[index % len(self._rows)]
        if self.opened.streamed and index == self._played:
            # Once a sample: it is looked up again if the other table ran dry at it.
            self._crc = crc32c(row.tobytes(), self._crc)
            self._played = index + 1
        values: list[float] = row.tolist()
        return values

    def row_zero(self) -> list[float]:
        """The first sample, without playing it."""
        values: list[float] = self._rows[0].tolist()
        return values

    def played_crc(self, count: int) -> int:
        """CRC-32C over the samples that were played."""
        if self.opened.streamed:
            return self._crc
        if count >= self.opened.n_samples:
            return self.opened.crc
        return table_crc(self._rows[:count].tobytes())
