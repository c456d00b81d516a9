"""Configuration files against the formats they claim to be: TOML, JSON Schema, UCUM, CSV, XDG.

Sources beside each check; all from memory, none is open on this page.
"""

import copy
import csv
import json
import re
import signal
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from trialrunner.channel_file import Column, read_channels
from trialrunner.config import ConfigError, exported_schema, load_text
from trialrunner.exit_codes import ExitCode
from trialrunner.runtime_dir import state_dir

CONFIGS = sorted((Path(__file__).parents[2] / "config").glob("*.toml"))
SCHEMA = exported_schema()


# --- JSON Schema, draft 2020-12, core and validation vocabularies (json-schema.org, from memory) --


TYPES: dict[str, Any] = {
    "object": dict,
    "array": list,
    "string": str,
    "boolean": bool,
    "integer": int,
    "number": (int, float),
}


def invalid(value: Any, node: dict[str, Any], where: str = "$") -> Iterator[str]:
    """Places that break the schema: a second, independent reading of the keywords used here."""
    if "$ref" in node:
        target: Any = SCHEMA
        for part in node["$ref"].removeprefix("#/").split("/"):
            target = target[part]
        yield from invalid(value, target, where)
    for word in ("anyOf", "oneOf"):
        if word in node:
            fits = sum(not list(invalid(value, one, where)) for one in node[word])
            if fits == 0 or (word == "oneOf" and fits > 1):
                yield f"{where}: {word} fits {fits}"
    if "type" in node:
        fits_type = isinstance(value, TYPES[node["type"]])
        if isinstance(value, bool) and node["type"] != "boolean":
            fits_type = False
        if not fits_type:
            yield f"{where}: type"
            return
    if "const" in node and value != node["const"]:
        yield f"{where}: const"
    if "enum" in node and value not in node["enum"]:
        yield f"{where}: enum"
    yield from _bounds(value, node, where)
    yield from _parts(value, node, where)


def _bounds(value: Any, node: dict[str, Any], where: str) -> Iterator[str]:
    tests: dict[str, Any] = {
        "minimum": lambda limit: value >= limit,
        "maximum": lambda limit: value <= limit,
        "exclusiveMinimum": lambda limit: value > limit,
        "exclusiveMaximum": lambda limit: value < limit,
        "minLength": lambda limit: len(value) >= limit,
        "maxLength": lambda limit: len(value) <= limit,
        "pattern": lambda limit: re.search(limit, value),
        "minItems": lambda limit: len(value) >= limit,
        "maxItems": lambda limit: len(value) <= limit,
    }
    for word, fits in tests.items():
        if word in node and not fits(node[word]):
            yield f"{where}: {word}"


def _parts(value: Any, node: dict[str, Any], where: str) -> Iterator[str]:
    if isinstance(value, list):
        prefix = node.get("prefixItems", [])
        for index, item in enumerate(value):
            one = prefix[index] if index < len(prefix) else node.get("items", {})
            yield from invalid(item, one if isinstance(one, dict) else {}, f"{where}[{index}]")
    if isinstance(value, dict):
        known = node.get("properties", {})
        yield from (
            f"{where}: lacks {name}" for name in node.get("required", ()) if name not in value
        )
        rest = node.get("additionalProperties", True)
        for key, item in value.items():
            if key in known:
                yield from invalid(item, known[key], f"{where}.{key}")
            elif rest is False:
                yield f"{where}: unknown {key}"
            elif isinstance(rest, dict):
                yield from invalid(item, rest, f"{where}.{key}")


KNOWN_WORDS = {
    "$defs", "$ref", "$schema", "additionalProperties", "anyOf", "const", "default", "description",
    "enum", "exclusiveMaximum", "exclusiveMinimum", "items", "maxItems", "maxLength", "maximum",
    "minItems", "minLength", "minimum", "oneOf", "pattern", "prefixItems", "properties", "required",
    "title", "type", "x-infinite-allowed",
}  # fmt: skip


def nodes(node: Any) -> Iterator[dict[str, Any]]:
    """Every schema inside a schema."""
    yield node
    for word in ("$defs", "properties"):
        for one in node.get(word, {}).values():
            yield from nodes(one)
    for word in ("anyOf", "oneOf", "prefixItems"):
        for one in node.get(word, ()):
            yield from nodes(one)
    for word in ("items", "additionalProperties"):
        if isinstance(node.get(word), dict):
            yield from nodes(node[word])


def test_the_schema_uses_only_words_of_its_dialect() -> None:
    """And one extension beginning with x-, which validators pass over."""
    assert SCHEMA["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    for node in nodes(SCHEMA):
        assert set(node) <= KNOWN_WORDS, set(node) - KNOWN_WORDS
        assert node.get("type", "object") in TYPES
        assert set(node.get("required", ())) <= set(node.get("properties", {}))
        if "properties" in node:
            assert node["additionalProperties"] is False
        if "default" in node:
            assert list(invalid(node["default"], node)) == []


def test_the_schema_is_strict_json() -> None:
    """RFC 8259 knows no NaN and no Infinity."""
    json.dumps(SCHEMA, allow_nan=False)


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.name)
def test_the_shipped_files_are_toml_and_fit_the_schema(path: Path) -> None:
    """Read by the standard library, judged by the schema alone."""
    assert list(invalid(tomllib.loads(path.read_text(encoding="utf-8")), SCHEMA)) == []


MUTATIONS: list[tuple[tuple[str | int, ...], Any]] = [
    (("trial", "n_samples"), 0),
    (("trial", "n_samples"), 10.5),
    (("trial", "n_samples"), True),
    (("trial", "start"), "later"),
    (("trial", "extra"), 1),
    (("inputs", 0, "name"), ""),
    (("inputs", 0, "rate_limit_per_s"), -1.0),
    (("inputs", 0, "pin_start"), 1),
    (("inputs",), []),
    (("outputs", 0, "scale"), "1"),
    (("reference", "kind"), "spline"),
    (("reference", "dwell_s"), [-1.0]),
    (("run", "name"), "../up"),
    (("run", "name"), "x" * 65),
    (("ladder",), {"roll_back_to": -1}),
    (("ladder",), {"roll_back_to": "worst"}),
    (("guards",), {"nobody": {}}),
    (("guards",), {"divergence": {"peak_limits": {"x": 0.0}}}),
    (("filter",), []),
    (("stop",), 5),
]


@pytest.mark.parametrize(("path", "value"), MUTATIONS)
def test_schema_and_daemon_refuse_the_same(path: tuple[str | int, ...], value: Any) -> None:
    """An editor that shows no error and a daemon that refuses would be worse than no schema."""
    from trialrunner.config.toml_text import write_toml

    document = tomllib.loads(CONFIGS[0].read_text(encoding="utf-8"))
    changed = copy.deepcopy(document)
    node: Any = changed
    for step in path[:-1]:
        node = node[step]
    node[path[-1]] = value
    assert list(invalid(changed, SCHEMA)) != []
    with pytest.raises(ConfigError):
        load_text(write_toml(changed))


# --- TOML 1.0.0 (toml.io, from memory) ----------------------------------------------------------


@pytest.mark.parametrize(
    ("written", "value"),
    [
        ("1e3", 1000.0),
        ("+0.5", 0.5),
        ("1_000.0", 1000.0),
        ("6.626e-34", 6.626e-34),
    ],
)
def test_numbers_may_be_written_in_every_way_that_toml_allows(written: str, value: float) -> None:
    """Exponents, signs and underscores; a whole number is a number too."""
    text = CONFIGS[0].read_text(encoding="utf-8")
    config = load_text(text, [f"outputs.0.scale={written}"])
    assert config.outputs[0].scale == value


@pytest.mark.parametrize("written", [".5", "5.", "01", "1__0", "0x", "1,5"])
def test_a_number_that_toml_does_not_know_is_refused(written: str) -> None:
    """A leading or bare point, a leading zero, a decimal comma."""
    with pytest.raises(ConfigError):
        load_text(CONFIGS[0].read_text(encoding="utf-8"), [f"outputs.0.scale={written}"])


# --- UCUM (ucum.org, table of units, case-sensitive codes; from memory) ---------------------------

UCUM_ATOMS = {
    "m", "s", "g", "rad", "K", "C", "cd", "sr", "mol", "Hz", "N", "Pa", "J", "W", "A", "V", "F",
    "Ohm", "S", "Wb", "Cel", "T", "H", "lm", "lx", "Bq", "L", "l", "t", "bar", "deg", "min", "h",
    "d", "eV",
}  # fmt: skip
UCUM_ALONE = {"1", "%", "deg", "min", "h", "d", "[degF]", "[in_i]", "[psi]"}
UCUM_PREFIXES = (
    "",
    "Y",
    "Z",
    "E",
    "P",
    "T",
    "G",
    "M",
    "k",
    "h",
    "da",
    "d",
    "c",
    "m",
    "u",
    "n",
    "p",
)


def is_ucum(code: str) -> bool:
    """A product or quotient of prefixed atoms with whole exponents: N.m, mm/s2, kN."""
    return all(
        part in UCUM_ALONE
        or any(
            re.fullmatch(re.escape(prefix + atom) + r"(-?\d)?", part)
            for prefix in UCUM_PREFIXES
            for atom in UCUM_ATOMS
        )
        for part in re.split(r"[./]", code.removeprefix("/"))
    )


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.name)
def test_the_units_of_shipped_files_are_ucum_codes(path: Path) -> None:
    """So that no reader has to guess: Cel is a degree Celsius, C a coulomb."""
    document = tomllib.loads(path.read_text(encoding="utf-8"))
    for channel in (*document["inputs"], *document["outputs"]):
        assert is_ucum(channel["unit"]), channel["unit"]


@pytest.mark.parametrize(
    ("code", "right"),
    [
        *((code, True) for code in ("N.m", "mm/s2", "Cel", "%", "1", "uV", "N.m/rad")),
        *((code, False) for code in ("Nm", "newton", "degC", "°C", "sec", "")),
    ],
)
def test_the_unit_check_tells_codes_from_habits(code: str, right: bool) -> None:
    """Otherwise it could not fail."""
    assert is_ucum(code) is right


# --- CSV (RFC 4180, section 2, from memory), NPZ (numpy's own writer) -----------------------------


def test_csv_as_the_standard_library_and_rfc_4180_write_it(tmp_path: Path) -> None:
    """CRLF, quoted fields, a comma and a doubled quote inside quotes; numbers to the last bit."""
    values = np.random.default_rng(7).standard_normal((50, 2)) * [1e-12, 1e9]
    path = tmp_path / "table.csv"
    with path.open("w", newline="") as file:
        writer = csv.writer(file, quoting=csv.QUOTE_ALL)
        writer.writerow(["x[mm]", 'a "quoted", name', "y[rad]"])
        writer.writerows([repr(float(x)), "a, b", repr(float(y))] for x, y in values)
    assert b"\r\n" in path.read_bytes()
    found = read_channels(path, [Column("x", "mm"), Column("y", "rad")], 50)
    assert np.array_equal(found, values)


@pytest.mark.parametrize("save", [np.savez, np.savez_compressed])
def test_npz_as_numpy_writes_it(tmp_path: Path, save: Any) -> None:
    """Compressed or not."""
    values = np.random.default_rng(8).standard_normal(50)
    save(tmp_path / "table.npz", x=values)
    found = read_channels(tmp_path / "table.npz", [Column("x", "mm")], 50)
    assert np.array_equal(found[:, 0], values)


# --- the system's conventions -------------------------------------------------------------------


def test_an_interrupted_command_ends_as_shells_count_it() -> None:
    """128 plus the signal's number (POSIX shells, common practice)."""
    assert ExitCode.INTERRUPTED == 128 + signal.SIGINT


def test_state_is_kept_where_the_xdg_base_directory_specification_says(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """$XDG_STATE_HOME, or ~/.local/state (specification version 0.8, from memory)."""
    monkeypatch.setenv("XDG_STATE_HOME", "/srv/state")
    assert state_dir() == Path("/srv/state/trialrunner")
    monkeypatch.delenv("XDG_STATE_HOME")
    monkeypatch.setenv("HOME", "/home/someone")
    assert state_dir() == Path("/home/someone/.local/state/trialrunner")
