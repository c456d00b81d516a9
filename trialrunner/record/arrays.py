"""Arrays as blobs: little-endian, with type, shape, unit and SHA-256; NaN lives only in here."""

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from trialrunner.core.run_state import Carry
from trialrunner.record.errors import RecordDamaged, RecordMisuse

AnyArray: TypeAlias = "np.ndarray[Any, Any]"

BITS = "bits"
"""Type name of packed booleans."""

NEXT = "next."
LAW, FLOOR = "next.law.", "next.floor."
FEEDFORWARD = "next.feedforward"

_FLOATS = {"f4": "<f4", "f8": "<f8"}


@dataclass(frozen=True)
class Blob:
    """One array as stored."""

    dtype: str
    shape: tuple[int, ...]
    data: bytes
    sha256: bytes
    units: tuple[str, ...] = ()

    def row(self) -> tuple[str, str, str, bytes, bytes]:
        """Columns dtype, shape, unit, sha256, data."""
        units = json.dumps(self.units, ensure_ascii=False)
        return self.dtype, json.dumps(self.shape), units, self.sha256, self.data


def pack(name: str, array: AnyArray, sample_type: str, units: Sequence[str] = ()) -> Blob:
    """An array in the wire's type "f4" or "f8"; booleans as bits.

    Raises RecordMisuse if that cannot hold the values exactly.
    """
    if array.dtype == np.bool_:
        data = np.packbits(array).tobytes()
        return Blob(BITS, array.shape, data, hashlib.sha256(data).digest(), tuple(units))
    if array.dtype != np.float64:
        raise RecordMisuse(f"{name}: expected float64 or booleans, found {array.dtype}")
    dtype = _FLOATS[sample_type]
    with np.errstate(over="ignore"):
        stored = np.ascontiguousarray(array, dtype=dtype)
    if stored.dtype != array.dtype and not _holds(stored, array):
        raise RecordMisuse(f"{name}: expected values that {dtype} holds exactly, found others")
    data = stored.tobytes()
    return Blob(dtype, array.shape, data, hashlib.sha256(data).digest(), tuple(units))


def _holds(stored: AnyArray, array: AnyArray) -> bool:
    """The same values; the quick comparison fails only for NaN, and then the slow one decides."""
    quick = bool((stored == array).all())
    return quick or np.array_equal(stored, array, equal_nan=True)


def unpack(name: str, row: tuple[str, str, str, bytes, bytes]) -> AnyArray:
    """The array of a stored row (dtype, shape, unit, sha256, data); floats become float64.

    Raises RecordDamaged if its bytes are not those that were written.
    """
    dtype, shape_text, _, sha256, data = row
    if hashlib.sha256(data).digest() != sha256:
        raise RecordDamaged(
            f"{name}: the stored bytes do not agree with their SHA-256; restore the record from a "
            "copy, or begin a new run"
        )
    try:
        return _decode(dtype, tuple(json.loads(shape_text)), data)
    except (ValueError, TypeError) as error:
        raise RecordDamaged(f"{name}: type, shape and bytes do not fit: {error}") from None


def _decode(dtype: str, shape: tuple[int, ...], data: bytes) -> AnyArray:
    if dtype == BITS:
        count = int(np.prod(shape))
        bits = np.unpackbits(np.frombuffer(data, np.uint8), count=count)
        return bits.astype(bool).reshape(shape)
    if dtype not in _FLOATS.values():
        raise ValueError(f"unknown type {dtype}")
    return np.frombuffer(data, dtype).reshape(shape).astype(np.float64)


def same_bits(one: AnyArray, two: AnyArray) -> bool:
    """Equal in type, shape and every bit: tells 0 from -0, and NaN is equal to itself."""
    if one is two:
        return True
    if one.dtype != two.dtype or one.shape != two.shape:
        return False
    bits = np.dtype(f"u{one.dtype.itemsize}")
    left, right = np.ascontiguousarray(one), np.ascontiguousarray(two)
    return bool(np.array_equal(left.view(bits), right.view(bits)))


def same_carry(one: Carry, two: Carry) -> bool:
    """Every array of both bit for bit."""
    return one is two or not any(True for _ in carry_differences(one, two))


def carry_differences(one: Carry, two: Carry) -> Iterable[str]:
    """Names of the arrays that are not the same bits."""
    left, right = _by_name(one), _by_name(two)
    for name in {**left, **right}:
        if name not in left or name not in right or not same_bits(left[name], right[name]):
            yield name


def _by_name(carry: Carry) -> dict[str, AnyArray]:
    arrays: dict[str, AnyArray] = {
        "feedforward": carry.feedforward,
        "clipped": carry.clipped,
        "learned": carry.learned,
        "mean_error": carry.mean_error,
    }
    arrays |= {f"law.{name}": array for name, array in carry.law.items()}
    return arrays | {f"floor.{name}": array for name, array in carry.floor.items()}


def pack_carry(
    carry: Carry, sample_type: str, inputs: Sequence[str] = (), outputs: Sequence[str] = ()
) -> dict[str, Blob]:
    """What the next trial begins with. `inputs` and `outputs` are units.

    The feedforward is exact in the wire's type, everything else float64. Not stored: a learned
    feedforward equal to the one played, a mean error of zeros, a mask without a sample.
    """
    blobs = {FEEDFORWARD: pack(FEEDFORWARD, carry.feedforward, sample_type, inputs)}
    if carry.clipped.any():
        blobs[NEXT + "clipped"] = pack(NEXT + "clipped", carry.clipped, "f8")
    if not same_bits(carry.learned, carry.feedforward):
        blobs[NEXT + "learned"] = pack(NEXT + "learned", carry.learned, "f8", inputs)
    if not same_bits(carry.mean_error, np.zeros_like(carry.mean_error)):
        blobs[NEXT + "mean_error"] = pack(NEXT + "mean_error", carry.mean_error, "f8", outputs)
    for prefix, arrays in ((LAW, carry.law), (FLOOR, carry.floor)):
        blobs |= {prefix + name: pack(prefix + name, array, "f8") for name, array in arrays.items()}
    return blobs


def unpack_carry(arrays: Mapping[str, AnyArray], n_outputs: int) -> Carry:
    """The inverse of `pack_carry` on unpacked arrays by name."""
    feedforward = arrays[FEEDFORWARD]
    n_samples = len(feedforward)
    clipped, mean_error = arrays.get(NEXT + "clipped"), arrays.get(NEXT + "mean_error")
    return Carry(
        feedforward=feedforward,
        clipped=np.zeros(feedforward.shape, dtype=bool) if clipped is None else clipped,
        learned=arrays.get(NEXT + "learned", feedforward),
        mean_error=np.zeros((n_samples, n_outputs)) if mean_error is None else mean_error,
        law=_under(LAW, arrays),
        floor=_under(FLOOR, arrays),
    )


def _under(prefix: str, arrays: Mapping[str, AnyArray]) -> dict[str, AnyArray]:
    return {name[len(prefix) :]: a for name, a in arrays.items() if name.startswith(prefix)}
