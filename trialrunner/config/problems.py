"""What is wrong with a configuration, in words: path, line, expected, found, what to do.

What is expected is read from the JSON Schema, so that the text always agrees with what editors
are told.
"""

import difflib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from trialrunner.config.lines import Path, line_of

Schema = Mapping[str, Any]

MAX_SHOWN = 60
"""Longest found value that is printed whole."""

_PLURALS = (
    ("a whole number", "whole numbers"),
    ("a finite number", "finite numbers"),
    ("a number", "numbers"),
    ("a list", "lists"),
    ("a table", "tables"),
    ("text in quotes", "texts in quotes"),
)

_MISSING = ("missing", "missing_argument", "missing_keyword_only_argument", "union_tag_not_found")
_UNKNOWN = ("extra_forbidden", "unexpected_keyword_argument")


@dataclass(frozen=True)
class Problem:
    """One thing wrong at one place."""

    path: Path
    text: str
    meant: Path = ()
    """The missing setting that a misspelt one probably is."""


class ConfigError(Exception):
    """A configuration cannot be used; the text lists everything that is wrong with it."""

    def __init__(self, source: str, lines: Sequence[str]) -> None:
        self.source = source
        self.problems = tuple(lines)
        count = "1 problem" if len(lines) == 1 else f"{len(lines)} problems"
        super().__init__("\n  ".join([f"{source}: {count}", *lines]))


def dotted(path: Path) -> str:
    """The path as overrides name it: inputs.0.high."""
    return ".".join(str(part) for part in path)


def located(problem: Problem, lines: dict[Path, int], overridden: set[Path]) -> str:
    """A problem with its place in front."""
    where = dotted(problem.path)
    if any(problem.path[: len(path)] == path for path in overridden):
        return f"{where} (override): {problem.text}"
    line = line_of(lines, problem.path)
    place = f" (line {line})" if line is not None else ""
    return f"{where}{place}: {problem.text}" if where else problem.text


def in_words(
    errors: Iterable[Mapping[str, Any]], document: Mapping[str, Any], schema: Schema
) -> list[Problem]:
    """Problems from pydantic's errors on a document."""
    return [_problem(error, document, schema) for error in errors]


def without_echoes(problems: Iterable[Problem]) -> list[Problem]:
    """One problem for each path, and none that another one explains.

    A list suffers from its parts, and a setting is missing because it is misspelt.
    """
    problems = list(problems)
    meant = {problem.meant for problem in problems}
    first: dict[Path, Problem] = {}
    for problem in problems:
        if problem.path not in meant:
            first.setdefault(problem.path, problem)
    hurt = {path[:length] for path in first for length in range(len(path))}
    return [problem for path, problem in first.items() if path not in hurt]


def _problem(error: Mapping[str, Any], document: Mapping[str, Any], schema: Schema) -> Problem:
    kind = error["type"]
    path = _real_path(error["loc"], document, keep_last=kind in _MISSING)
    if kind == "union_tag_not_found":
        path = (*path, _tag(error))
    if kind in _MISSING:
        return Problem(path, _missing(path, document, schema))
    if kind in _UNKNOWN:
        return _unknown(path, document, schema)
    if kind == "union_tag_invalid":
        path = (*path, _tag(error))
    value = _value_at(document, path)
    if kind == "value_error":
        return Problem(path, str(error["ctx"]["error"]))
    return Problem(path, _wrong(node_at(schema, path, document), value, schema))


def _tag(error: Mapping[str, Any]) -> str:
    return str(error["ctx"]["discriminator"]).strip("'")


def _real_path(location: Sequence[str | int], document: Any, keep_last: bool) -> Path:
    """The location without the union labels that pydantic mixes into it."""
    path: Path = ()
    node = document
    for number, step in enumerate(location):
        last = number == len(location) - 1
        if isinstance(node, dict) and (step in node or (last and keep_last)):
            path, node = (*path, step), node.get(step)
        elif isinstance(node, list) and isinstance(step, int) and step < len(node):
            path, node = (*path, step), node[step]
    return path


def _value_at(document: Any, path: Path) -> Any:
    for step in path:
        document = document[step]
    return document


# --- the schema -------------------------------------------------------------------------------


def resolve(node: Schema, schema: Schema) -> Schema:
    """The node itself, references followed."""
    while "$ref" in node:
        node = schema["$defs"][node["$ref"].rsplit("/", 1)[1]]
    return node


def _variants(node: Schema, schema: Schema) -> list[Schema]:
    node = resolve(node, schema)
    inner = node.get("oneOf") or node.get("anyOf")
    if not inner:
        return [node]
    return [one for part in inner for one in _variants(part, schema)]


def _chosen(node: Schema, value: Any, schema: Schema) -> list[Schema]:
    """Variants of a node that a table of this `kind` may mean."""
    variants = _variants(node, schema)
    if not isinstance(value, dict) or "kind" not in value or len(variants) == 1:
        return variants
    fitting = [one for one in variants if value["kind"] in _kinds(one, schema)]
    return fitting or variants


def _kinds(node: Schema, schema: Schema) -> list[Any]:
    kind = resolve(node.get("properties", {}).get("kind", {}), schema)
    return list(kind.get("enum", [kind.get("const")]))


def _below(node: Schema, step: str | int, schema: Schema) -> Schema | None:
    if isinstance(step, str):
        free = node.get("additionalProperties")
        named: Schema | None = node.get("properties", {}).get(step)
        return named or (free if isinstance(free, Mapping) else None)
    prefix = node.get("prefixItems", [])
    if step < len(prefix):
        first: Schema = prefix[step]
        return first
    items = node.get("items")
    return items if isinstance(items, Mapping) else None


def node_at(schema: Schema, path: Path, document: Any) -> Schema | None:
    """Schema of a place in the document; None where the schema knows nothing."""
    node: Schema = schema
    value = document
    for step in path:
        below = [_below(one, step, schema) for one in _chosen(node, value, schema)]
        known = [one for one in below if one is not None]
        if not known:
            return None
        node = known[0] if len(known) == 1 else {"anyOf": known, **_described(known)}
        value = _child(value, step)
    return node


def _described(nodes: list[Schema]) -> dict[str, Any]:
    texts = {node["description"] for node in nodes if "description" in node}
    return {"description": texts.pop()} if len(texts) == 1 else {}


def _child(value: Any, step: str | int) -> Any:
    if isinstance(value, dict) and step in value:
        return value[step]
    if isinstance(value, list) and isinstance(step, int) and step < len(value):
        return value[step]
    return None


# --- words ------------------------------------------------------------------------------------


def expected_words(node: Schema, schema: Schema) -> str:
    """What a place may hold, in words: "a number above 0"."""
    words: list[str] = []
    for one in _variants(node, schema):
        text = _one_in_words(one, schema)
        if text and text not in words:
            words.append(text)
    return _either(words) if words else "another value"


def _one_in_words(node: Schema, schema: Schema) -> str:
    if "const" in node:
        return json.dumps(node["const"])
    if "enum" in node:
        return _either([json.dumps(one) for one in node["enum"]])
    kind = node.get("type")
    if kind == "array":
        items = node.get("items")
        of = f" of {_plural(expected_words(items, schema))}" if isinstance(items, Mapping) else ""
        return f"a list{of}{_length_words(node)}"
    names = {
        "integer": "a whole number",
        "number": "a number",
        "string": "text in quotes",
        "boolean": "true or false",
        "object": "a table",
        "null": "",
    }
    return names.get(str(kind), "") + _bound_words(node)


def _plural(words: str) -> str:
    for one, many in _PLURALS:
        words = words.replace(one, many)
    return words


def _bound_words(node: Schema) -> str:
    words = {
        "exclusiveMinimum": "above",
        "minimum": "of at least",
        "exclusiveMaximum": "below",
        "maximum": "at most",
    }
    parts = [f"{word} {node[key]:g}" for key, word in words.items() if key in node]
    if node.get("minLength") == 1:
        parts.append("that is not empty")
    if "maxLength" in node:
        parts.append(f"of at most {node['maxLength']} characters")
    if "pattern" in node:
        parts.append(f"of the form {node['pattern']}")
    return (" " + " and ".join(parts)) if parts else ""


def _length_words(node: Schema) -> str:
    least, most = node.get("minItems"), node.get("maxItems")
    if least is not None and least == most:
        return f", {least} of them"
    if least is not None and most is not None:
        return f", {least} to {most} of them"
    if least:
        return f", at least {least} of them"
    return ""


def _either(words: Sequence[str]) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} or {words[-1]}"


def shown(value: Any) -> str:
    """A found value as TOML would have it, shortened."""
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list) and any(isinstance(item, dict) for item in value):
        return "a list of tables"
    if isinstance(value, float):
        return repr(value)
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= MAX_SHOWN else text[:MAX_SHOWN] + "..."


def _missing(path: Path, document: Any, schema: Schema) -> str:
    node = node_at(schema, path, document)
    expected = expected_words(node, schema) if node is not None else "a value"
    if len(path) == 1:
        plural = node is not None and resolve(node, schema).get("type") == "array"
        header = f"[[{path[0]}]]" if plural else f"[{path[0]}]"
        return f"missing; expected {expected}; add {header}{_purpose(node)}"
    return f"missing; expected {expected}; add it to [{dotted(path[:-1])}]{_purpose(node)}"


def _purpose(node: Schema | None) -> str:
    text = (node or {}).get("description", "")
    return f" ({' '.join(text.split()).rstrip('.')})" if text else ""


def _unknown(path: Path, document: Any, schema: Schema) -> Problem:
    *above, name = path
    parent = node_at(schema, tuple(above), document)
    table = _value_at(document, tuple(above))
    known = [
        key for one in _chosen(parent or {}, table, schema) for key in one.get("properties", {})
    ]
    near = _nearest(str(name), known)
    if near:
        return Problem(path, f"unknown key; did you mean {near!r}?", meant=(*above, near))
    homes = _homes(str(name), schema)
    if homes:
        return Problem(path, f"unknown key here; it belongs to {_either(homes)}")
    return Problem(path, f"unknown key; expected one of {', '.join(known)}")


def _nearest(name: str, known: Sequence[str]) -> str:
    """The known key that a misspelt or shortened one probably is; empty if none is near."""
    near = difflib.get_close_matches(name, known, n=1, cutoff=0.6)
    near += [key for key in known if key.startswith(name)]
    return near[0] if near else ""


def _homes(name: str, schema: Schema) -> list[str]:
    """Tables of the top level that know this key."""
    return [
        f"[{table}]"
        for table, node in schema["properties"].items()
        if any(name in one.get("properties", {}) for one in _variants(node, schema))
    ]


def _wrong(node: Schema | None, value: Any, schema: Schema) -> str:
    if node is None:
        return f"not understood: {shown(value)}"
    expected = expected_words(node, schema)
    return f"expected {expected}, found {shown(value)}{_hint(node, value, schema)}"


def _hint(node: Schema, value: Any, schema: Schema) -> str:
    kinds = {str(one.get("type")) for one in _variants(node, schema)}
    choices = [c for one in _variants(node, schema) for c in one.get("enum", [])]
    if isinstance(value, str) and kinds & {"number", "integer"} and _is_number(value):
        return "; write it without quotes"
    if isinstance(value, str) and choices:
        near = difflib.get_close_matches(value, [str(one) for one in choices], n=1)
        return f"; did you mean {json.dumps(near[0])}?" if near else ""
    if isinstance(value, float) and value.is_integer() and "integer" in kinds:
        return f"; write {int(value)}"
    if isinstance(value, dict) and "array" in kinds:
        return "; write its header with double brackets, [[...]]"
    if isinstance(value, list) and value and isinstance(value[0], dict) and "object" in kinds:
        return "; write its header with single brackets, [...]"
    return _purpose(node)


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
