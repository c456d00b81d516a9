"""Gathers the samples of one trial: any order, duplicates harmless, gaps named."""

import numpy as np
from numpy.typing import NDArray

from drivers.messages import Finished, FinishReason, Samples
from drivers.tables import missing_spans, table_crc
from trialrunner.conversation.events import Collected


class Collector:
    """One trial of n_samples rows of n_channels in the rig's sample type ("f4" or "f8")."""

    def __init__(self, trial: int, n_samples: int, n_channels: int, sample_type: str) -> None:
        self.trial = trial
        self._n_samples = n_samples
        self._dtype = np.dtype(f"<{sample_type}")
        self._rows = np.full((n_samples, n_channels), np.nan, dtype=self._dtype)
        self._here = np.zeros(n_samples, dtype=bool)
        self._row_bytes = n_channels * self._dtype.itemsize
        self.finished: Finished | None = None
        self.asked_again = 0

    def take(self, block: Samples) -> tuple[int, int] | None:
        """Store a block; the span of it that is new, or None."""
        count, rest = divmod(len(block.data), self._row_bytes)
        end = block.first + count
        if block.trial != self.trial or rest or count == 0 or end > self._n_samples:
            return None
        if self._here[block.first : end].all():
            return None
        rows = np.frombuffer(block.data, dtype=self._dtype).reshape(count, -1)
        self._rows[block.first : end] = rows
        self._here[block.first : end] = True
        return block.first, count

    def rows(self, first: int, end: int) -> NDArray[np.float64]:
        """Samples `first` to `end - 1` as they are now; NaN where nothing has arrived."""
        return self._rows[first:end].astype(np.float64)

    def missing(self) -> tuple[tuple[int, int], ...]:
        """Gaps below the rig's own count, at most MAX_RANGES of them."""
        assert self.finished is not None
        return missing_spans(self._here[: min(self.finished.count, self._n_samples)])

    def checksum_agrees(self) -> bool:
        """The rig's CRC-32C over the samples it took is that of what arrived."""
        assert self.finished is not None
        count = min(self.finished.count, self._n_samples)
        return table_crc(self._rows[:count].tobytes()) == self.finished.sample_crc

    def forget(self) -> None:
        """Take everything as missing: the checksum says that some block is wrong."""
        self._here[:] = False

    def result(self, whole: bool) -> Collected:
        """What there is; what did not arrive is NaN, and so is all of it under a wrong checksum."""
        samples: NDArray[np.float64] = self._rows.astype(np.float64)
        samples[~self._here] = np.nan
        done = self.finished
        if done is None:
            return Collected(
                self.trial, samples, FinishReason.CUT_SHORT, 0, 0, (), 0, self.asked_again, False
            )
        return Collected(
            self.trial,
            samples,
            _reason(done.reason),
            done.count,
            done.start_tick,
            done.start_state,
            done.feedforward_crc,
            self.asked_again,
            whole,
        )


def _reason(code: int) -> FinishReason:
    try:
        return FinishReason(code)
    except ValueError:
        return FinishReason.FAULT
