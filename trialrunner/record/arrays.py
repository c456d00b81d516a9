"""Arrays as blobs: little-endian, with type, shape and SHA-256; NaN lives only in here."""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from trialrunner.core.run_state import Carry
from trialrunner.record.errors import RecordDamaged

BITS = "bits"
"""Type name of packed booleans."""

NEXT = "next."
LAW, FLOOR = "next.law.", "next.floor."


@dataclass(frozen=True)
class Blob:
    """One array as stored."""

    dtype: str
    shape: tuple[int, ...]
    data: bytes
    sha256: bytes
    unit: str = ""

    def row(self) -> tuple[str, str, str, bytes, bytes]:
        """Columns dtype, shape, unit, sha256, data."""
        return self.dtype, json.dumps(self.shape), self.unit, self.sha256, self.data


def pack(array: "np.ndarray[Any, Any]", dtype: str, unit: str = "") -> Blob:
    """Raises ValueError if the type cannot hold the values exactly."""
    if dtype == BITS:
        data = np.packbits(array).tobytes()
    else:
        stored = np.ascontiguousarray(array, dtype=f"<{dtype}")
        if stored.dtype.itemsize < array.dtype.itemsize and not np.array_equal(
            stored, array, equal_nan=True
        ):
            raise ValueError(f"values do not fit the type {dtype} exactly")
        data = stored.tobytes()
    return Blob(dtype, array.shape, data, hashlib.sha256(data).digest(), unit)


def unpack(name: str, row: tuple[str, str, str, bytes, bytes]) -> "np.ndarray[Any, Any]":
    """The array of a stored row (dtype, shape, unit, sha256, data); floats become float64.

    Raises RecordDamaged if its bytes are not those that were written.
    """
    dtype, shape_text, _, sha256, data = row
    if hashlib.sha256(data).digest() != sha256:
        raise RecordDamaged(f"{name}: the stored bytes do not agree with their SHA-256")
    shape = tuple(json.loads(shape_text))
    if dtype == BITS:
        count = int(np.prod(shape))
        bits = np.unpackbits(np.frombuffer(data, np.uint8), count=count)
        return bits.astype(bool).reshape(shape)
    return np.frombuffer(data, f"<{dtype}").reshape(shape).astype(np.float64)


def pack_carry(carry: Carry, sample_type: str) -> dict[str, Blob]:
    """What goes with a trial so that the next one can begin: equal and empty arrays once or not.

    A feedforward is exact in the wire's type; other arrays are float64.
    """
    blobs = {NEXT + "feedforward": pack(carry.feedforward, sample_type)}
    if carry.clipped.any():
        blobs[NEXT + "clipped"] = pack(carry.clipped, BITS)
    if not np.array_equal(carry.learned, carry.feedforward):
        blobs[NEXT + "learned"] = pack(carry.learned, "f8")
    if carry.mean_error.any():
        blobs[NEXT + "mean_error"] = pack(carry.mean_error, "f8")
    for prefix, arrays in ((LAW, carry.law), (FLOOR, carry.floor)):
        blobs |= {prefix + name: _pack_any(array) for name, array in arrays.items()}
    return blobs


def _pack_any(array: "np.ndarray[Any, Any]") -> Blob:
    return pack(array, BITS if array.dtype == np.bool_ else "f8")


def unpack_carry(arrays: Mapping[str, "np.ndarray[Any, Any]"], n_outputs: int) -> Carry:
    """The inverse of `pack_carry` on unpacked arrays by name."""
    feedforward = arrays[NEXT + "feedforward"]
    n_samples = len(feedforward)
    return Carry(
        feedforward=feedforward,
        clipped=arrays.get(NEXT + "clipped", np.zeros(feedforward.shape, dtype=bool)),
        learned=arrays.get(NEXT + "learned", feedforward),
        mean_error=arrays.get(NEXT + "mean_error", np.zeros((n_samples, n_outputs))),
        law=_under(LAW, arrays),
        floor=_under(FLOOR, arrays),
    )


def _under(prefix: str, arrays: Mapping[str, Any]) -> dict[str, Any]:
    return {name[len(prefix) :]: a for name, a in arrays.items() if name.startswith(prefix)}
