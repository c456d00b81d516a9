"""One trial of the mock rig: plant and faults, sample by sample; pure."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from random import Random

import numpy as np

from drivers.messages import FinishReason, Samples
from drivers.tables import table_crc
from mock_rig.faults import FaultScript
from mock_rig.plant import Disturbance, Plant


def disturbance(faults: dict[str, float], n_outputs: int) -> Disturbance:
    """What the faults of a trial change in the plant."""
    offset = (faults["offset"], *([0.0] * (n_outputs - 1))) if "offset" in faults else ()
    return Disturbance(
        gain=faults.get("gain", 1.0) * faults.get("wrong_sign", 1.0),
        extra_delay=int(faults.get("delay", 0)),
        friction=faults.get("friction", 1.0),
        resonance=faults.get("resonance", 0.0),
        load_limit=faults.get("load", 1.0),
        noise=faults.get("noise", 1.0),
        offset=offset,
    )


@dataclass
class Sensor:
    """Spoils the first output as the faults say."""

    faults: dict[str, float]
    n_samples: int
    span: float
    trials: int
    hit: int
    chance: Random
    held: float = math.nan

    def read(self, index: int, value: float) -> float:
        faults = self.faults
        if "drift" in faults:
            value += faults["drift"] * self.span * self.trials
        if "spike" in faults and index == self.hit:
            value += faults["spike"] * self.span
        burst = faults.get("noise_burst", 0.0)
        if burst and self.hit <= index < self.hit + max(1, self.n_samples // 10):
            value += burst * self.span * self.chance.gauss(0.0, 1.0)
        if "nan" in faults and self.hit <= index < self.hit + faults["nan"]:
            value = math.nan
        if "stuck" in faults and index >= faults["stuck"] * self.n_samples:
            self.held = value if math.isnan(self.held) else self.held
            return self.held
        return value


class Trial:
    """Armed at construction; `advance` takes the next sample."""

    def __init__(
        self,
        plant: Plant,
        number: int,
        n_samples: int,
        reference0: Sequence[float],
        script: FaultScript,
        sample_type: str,
    ) -> None:
        self.number = number
        self.n_samples = n_samples
        self.faults = script.at(number)
        self.count = 0
        self.start_tick = 0
        self.reason = FinishReason.COMPLETE
        self.feedforward_crc = 0
        """Of what was played, known at the end."""
        self._plant = plant
        n_outputs = len(plant.outputs)
        effect = disturbance(self.faults, n_outputs)
        self.start_state = tuple(plant.begin(number, list(reference0), effect))
        self._dtype = np.dtype(f"<{sample_type}")
        self._rows = np.zeros((n_samples, n_outputs + len(plant.auxiliary)), self._dtype)
        self._sent = 0
        span = plant.outputs[0].high - plant.outputs[0].low
        trials = script.since(number, "drift")
        chance = script.source(number)
        hit = chance.randrange(n_samples // 4, max(n_samples // 4 + 1, 3 * n_samples // 4))
        self._sensor = Sensor(self.faults, n_samples, span, trials, hit, chance)
        share = self.faults.get("cut_short", 1.0)
        self.length = n_samples if share >= 1 else max(1, int(share * n_samples))

    @property
    def row_bytes(self) -> int:
        n_bytes: int = self._rows.shape[1] * self._dtype.itemsize
        return n_bytes

    @property
    def over(self) -> bool:
        return self.count >= self.length

    def advance(self, feedforward: Sequence[float], reference: Sequence[float]) -> None:
        """Take one sample, then let the plant move for one period."""
        outputs, auxiliary = self._plant.step(feedforward, reference)
        outputs[0] = self._sensor.read(self.count, outputs[0])
        self._rows[self.count] = (*outputs, *auxiliary)
        self.count += 1
        if self.over and self.length < self.n_samples:
            self.reason = FinishReason.CUT_SHORT

    def blocks(self, block_bytes: int, everything: bool) -> list[Samples]:
        """Blocks that are full, or all that was not handed out yet."""
        step = max(1, block_bytes // self.row_bytes)
        found = []
        while self.count - self._sent >= (1 if everything else step):
            end = min(self._sent + step, self.count)
            found.append(self._block(self._sent, end))
            self._sent = end
        return found

    def again(self, spans: Sequence[tuple[int, int]], block_bytes: int) -> Iterator[Samples]:
        """Blocks for spans that were asked for, one by one."""
        step = max(1, block_bytes // self.row_bytes)
        for first, count in spans:
            end = min(first + count, self.count)
            for k in range(first, end, step):
                yield self._block(k, min(k + step, end))

    def crc(self) -> int:
        return table_crc(self._rows[: self.count].tobytes())

    def _block(self, first: int, end: int) -> Samples:
        return Samples(self.number, first, self._rows[first:end].tobytes())
