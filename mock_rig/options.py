"""What may be chosen of a mock rig."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class RigOptions:
    fast: bool = True
    """Jump ahead instead of waiting."""
    rig_starts: bool = False
    """Offer to start armed trials itself, as a sensor or a PLC would."""
    rig_start_s: float = 0.05
    """How long after arming it then starts."""
    sample_type: str = "f4"
    table_capacity: int = 200_000
    max_samples: int = 2_000_000
    samples_kept: bool = True
    watchdog_ms: int = 1000
    versions: tuple[int, ...] = (1,)
    reference: NDArray[np.float64] | None = None
    """(n_samples, n_outputs): the rig owns the reference; None: the daemon sends it."""
    seed: int = 0
    chunk: int = 100
    """Samples made in one go while time jumps; frames are served in between."""
