"""What both sides compute of a table or a trial's samples; pure."""

import numpy as np
from crc32c import crc32c
from numpy.typing import NDArray

from drivers.limits import MAX_RANGES


def table_crc(data: bytes) -> int:
    """CRC-32C over all bytes of a table."""
    crc: int = crc32c(data)
    return crc


def missing_spans(here: NDArray[np.bool_], most: int = MAX_RANGES) -> tuple[tuple[int, int], ...]:
    """(first, count) of the first `most` runs of samples that are not here."""
    edges = np.flatnonzero(np.diff(np.concatenate(([True], here, [True])).astype(np.int8)))
    starts, ends = edges[0::2][:most], edges[1::2][:most]
    return tuple((int(a), int(b - a)) for a, b in zip(starts, ends, strict=True))
