"""TOML in and out of plain values: a writer, and KEY=VALUE overrides.

The standard library reads TOML and does not write it.
"""

import json
import math
import re
import tomllib
from collections.abc import Sequence
from typing import Any

from trialrunner.config.lines import Path

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_LOOKS_QUOTED = ('"', "'", "[", "{")


def write_toml(document: dict[str, Any]) -> str:
    """TOML text of a document; `tomllib.loads` of it gives the document back, bit for bit."""
    lines: list[str] = []
    _write_table(lines, document, ())
    return "\n".join(lines).strip("\n") + "\n"


def _write_table(lines: list[str], table: dict[str, Any], path: tuple[str, ...]) -> None:
    below = {key: value for key, value in table.items() if _is_table(value) or _is_tables(value)}
    lines += [f"{_key(key)} = {_value(value)}" for key, value in table.items() if key not in below]
    for key, value in below.items():
        header = ".".join(_key(part) for part in (*path, key))
        if _is_table(value):
            lines += ["", f"[{header}]"]
            _write_table(lines, value, (*path, key))
            continue
        for row in value:
            lines += ["", f"[[{header}]]"]
            _write_table(lines, row, (*path, key))


def _is_table(value: Any) -> bool:
    return isinstance(value, dict)


def _is_tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(isinstance(row, dict) for row in value)


def _key(key: str) -> str:
    return key if _BARE_KEY.fullmatch(key) else _text(key)


def _text(value: str) -> str:
    # JSON escapes all that TOML wants escaped, except the delete character.
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else str(value)
    if isinstance(value, list):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    if isinstance(value, dict):
        items = (f"{_key(key)} = {_value(item)}" for key, item in value.items())
        return "{" + ", ".join(items) + "}"
    return str(value)


class OverrideError(ValueError):
    """An override is not KEY=VALUE, or names a place that cannot exist."""


def apply_overrides(document: dict[str, Any], overrides: Sequence[str]) -> set[Path]:
    """Write dotted KEY=VALUE overrides into a document; returns the paths that were set.

    The value is TOML (`trial.n_samples=500`, `inputs.0.high=2.5`, `law.kp=[0.4, 0.4]`). A value
    that is not TOML is taken as text, so that a URL needs no quotes inside the shell's.
    Raises OverrideError.
    """
    return {_apply(document, override) for override in overrides}


def _apply(document: dict[str, Any], override: str) -> Path:
    name, equals, text = override.partition("=")
    keys = [part.strip() for part in name.split(".")]
    if not equals or not all(keys):
        raise OverrideError(f"{override!r}: expected KEY=VALUE such as trial.n_samples=500")
    path: Path = ()
    node: Any = document
    for key in keys[:-1]:
        step = _step(node, key, override)
        node = node.setdefault(step, {}) if isinstance(node, dict) else node[step]
        path = (*path, step)
    last = _step(node, keys[-1], override)
    node[last] = _read_value(text.strip(), override)
    return (*path, last)


def _step(node: Any, key: str, override: str) -> str | int:
    if isinstance(node, dict):
        return key
    if not isinstance(node, list):
        raise OverrideError(f"{override!r}: {key!r} lies inside a value, not inside a table")
    if not key.isdecimal() or int(key) >= len(node):
        raise OverrideError(
            f"{override!r}: expected an index of 0 to {len(node) - 1} in place of {key!r}"
        )
    return int(key)


def _read_value(text: str, override: str) -> Any:
    try:
        read = tomllib.loads(f"value = {text}")
    except tomllib.TOMLDecodeError as error:
        if not text or text.startswith(_LOOKS_QUOTED):
            raise OverrideError(f"{override!r}: the value is not TOML: {error}") from None
        return text
    if list(read) != ["value"]:
        raise OverrideError(f"{override!r}: expected one value")
    return read["value"]
