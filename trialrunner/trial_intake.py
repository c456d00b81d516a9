"""Wire to core: greeting to what the law may know, collected samples to a Trial. Pure."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from drivers.messages import FinishReason, Table
from trialrunner.conversation.events import Collected, Greeted
from trialrunner.conversation.table_sender import TableData
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Array, Mask, Trial


@dataclass(frozen=True)
class Intake:
    """Shapes of the run as greeted."""

    greeted: Greeted
    reference: Array
    """(n_samples, n_outputs), after rounding to the rig's sample type."""

    @property
    def dtype(self) -> "np.dtype[np.floating]":
        return np.dtype(f"<{self.greeted.greeting.sample_type}")

    @property
    def period_s(self) -> float:
        return self.greeted.greeting.period_ticks / self.greeted.greeting.tick_hz

    def to_table(self, name: Table, values: Array) -> TableData:
        """Row-major bytes in the rig's sample type; exact for values rounded before."""
        data = np.ascontiguousarray(values, dtype=self.dtype).tobytes()
        return TableData.of(name, data, *values.shape)

    @cached_property
    def _reference_table(self) -> TableData:
        """The same for every trial."""
        return self.to_table(Table.REFERENCE, self.reference)

    def tables(self, feedforward: Array) -> list[TableData]:
        """Feedforward, and the reference where the daemon owns it."""
        tables = [self.to_table(Table.FEEDFORWARD, feedforward)]
        if self.greeted.greeting.reference_owner == "daemon":
            tables.append(self._reference_table)
        return tables

    def trial(
        self,
        state: RunState,
        carry: Carry,
        got: Collected | None,
        crc: int,
        ordered_tick: int | None,
    ) -> Trial:
        """The trial as measured; all NaN where nothing was collected.

        `crc` is that of the feedforward table sent; `ordered_tick` is None where the rig starts.
        """
        n_samples, n_outputs = self.reference.shape
        width = n_outputs + len(self.greeted.auxiliary)
        samples = np.full((n_samples, width), np.nan) if got is None else got.samples
        start = () if got is None else got.start_state
        lateness = 0.0
        if got is not None and ordered_tick is not None and got.start_tick:
            lateness = (got.start_tick - ordered_tick) / self.greeted.greeting.tick_hz
        auxiliary = samples[:, n_outputs:]
        return Trial(
            index=state.trial,
            purpose=state.purpose,
            feedforward=carry.feedforward,
            reference=self.reference,
            output=samples[:, :n_outputs],
            auxiliary=auxiliary,
            limited=self._limited(auxiliary),
            start_state=np.array(start if len(start) == n_outputs else [np.nan] * n_outputs),
            start_lateness_s=lateness,
            finish=_finish_word(got),
            count=0 if got is None else got.count,
            played_ok=got is not None and got.feedforward_crc == crc,
            asked_again=0 if got is None else got.asked_again,
        )

    def _limited(self, auxiliary: Array) -> Mask:
        """One column an input. Each "limited" channel speaks for its input, one alone for all."""
        n_inputs = len(self.greeted.inputs)
        flags = [i for i, c in enumerate(self.greeted.auxiliary) if c.meaning == "limited"]
        mask = np.zeros((len(auxiliary), n_inputs), dtype=bool)
        if not flags:
            return mask
        hit = np.nan_to_num(auxiliary[:, flags]) != 0
        mask[:] = hit if len(flags) == n_inputs else hit.any(axis=1, keepdims=True)
        return mask


def _finish_word(got: Collected | None) -> str:
    if got is None:
        return "lost"
    if got.reason is FinishReason.COMPLETE and not got.whole:
        return "incomplete"
    return got.reason.name.lower()
