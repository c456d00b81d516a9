"""Field kinds of a message: each checks one decoded MessagePack value and hands it on.

A kind raises ValueError with a short text; `messages.decode` adds the message and field name.
"""

import math
from collections.abc import Callable, Sequence
from typing import Any

Kind = Callable[[Any], Any]


def unsigned(bits: int) -> Kind:
    """An integer of 0 to 2**bits - 1; a bool is not an integer here."""
    top = (1 << bits) - 1

    def check(value: Any) -> int:
        if not isinstance(value, int) or isinstance(value, bool) or not 0 <= value <= top:
            raise ValueError(f"expected an integer of 0 to {top}, found {value!r:.40}")
        return int(value)

    return check


def boolean(value: Any) -> bool:
    if type(value) is not bool:
        raise ValueError(f"expected true or false, found {value!r:.40}")
    return value


def number(value: Any) -> float:
    """A finite float; an integer is taken too, because some packers shorten 1.0 to 1."""
    if type(value) not in (int, float) or not math.isfinite(value):
        raise ValueError(f"expected a finite number, found {value!r:.40}")
    return float(value)


def bound(value: Any) -> float:
    """A float that may be infinite (no limit) but not NaN."""
    if type(value) not in (int, float) or math.isnan(value):
        raise ValueError(f"expected a number or an infinity, found {value!r:.40}")
    return float(value)


def text(max_bytes: int) -> Kind:
    def check(value: Any) -> str:
        if type(value) is not str or len(value.encode()) > max_bytes or not value.isprintable():
            raise ValueError(f"expected printable text of at most {max_bytes} bytes")
        return value

    return check


def one_of(*words: str) -> Kind:
    def check(value: Any) -> str:
        if value not in words or type(value) is not str:
            raise ValueError(f"expected one of {', '.join(words)}, found {value!r:.40}")
        return value

    return check


def blob(value: Any) -> bytes:
    if type(value) is not bytes:
        raise ValueError(f"expected bytes, found {type(value).__name__}")
    return value


def listing(kind: Kind, max_items: int) -> Kind:
    """A list of one kind; decoded to a tuple so that messages stay immutable."""

    def check(value: Any) -> tuple[Any, ...]:
        if type(value) not in (list, tuple) or len(value) > max_items:
            raise ValueError(f"expected a list of at most {max_items} items")
        return tuple(kind(item) for item in value)

    return check


def span(value: Any) -> tuple[int, int]:
    """[first, count] of a run of samples."""
    if type(value) not in (list, tuple) or len(value) != 2:
        raise ValueError("expected [first, count]")
    first, count = (unsigned(32)(item) for item in value)
    return first, count


def check_all(kinds: Sequence[tuple[str, Kind]], values: Sequence[Any]) -> list[Any]:
    """Check values against (name, kind) pairs; raises ValueError naming the field."""
    if len(values) != len(kinds):
        raise ValueError(f"expected {len(kinds)} fields, found {len(values)}")
    checked = []
    for (name, kind), value in zip(kinds, values, strict=True):
        try:
            checked.append(kind(value))
        except ValueError as error:
            raise ValueError(f"{name}: {error}") from None
    return checked
