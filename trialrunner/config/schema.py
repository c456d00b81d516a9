"""The JSON Schema of a configuration, for editors and for the texts of errors."""

import copy
import math
from functools import cache
from typing import Any

from pydantic import TypeAdapter

from trialrunner.config.model import Config
from trialrunner.config.tables import LinkTable
from trialrunner.conversation.timing import LinkTiming

DIALECT = "https://json-schema.org/draft/2020-12/schema"

INFINITE = "x-infinite-allowed"
"""Marks settings that may be TOML's `inf`, meaning no limit; JSON has no such number."""

SHARED = {
    "enabled": "False switches this guard off.",
    "action": "What the guard asks for when it fires, a step of the verdict ladder.",
    "kind": "Which of its kind.",
}
"""Texts of settings that every guard or law has, where it gives none of its own."""


def exported_schema() -> dict[str, Any]:
    """A fresh copy of the schema, fit for `json.dumps(..., allow_nan=False)`."""
    return copy.deepcopy(json_schema())


@cache
def json_schema() -> dict[str, Any]:
    """The schema, shared: not to be changed by the caller."""
    schema = Config.model_json_schema()
    _describe_inherited(schema["$defs"])
    for node in (schema, *schema["$defs"].values()):
        for name, setting in node.get("properties", {}).items():
            _drop_null(setting)
            _describe(name, setting, schema["$defs"])
            _tidy(setting)
            setting.pop("title", None)
            setting.pop("discriminator", None)
        _tidy(node)
    return {"$schema": DIALECT, **schema, "title": "trialrunner configuration"}


def _describe_inherited(definitions: dict[str, Any]) -> None:
    """Pydantic reads the strings under attributes of a class, not of its bases."""
    own = TypeAdapter(LinkTiming).json_schema()["properties"]
    definitions[LinkTable.__name__]["properties"].update(own)


def _drop_null(setting: dict[str, Any]) -> None:
    """TOML has no null: what may be None in Python is left out in the file."""
    if {"type": "null"} not in setting.get("anyOf", ()):
        return
    setting["anyOf"].remove({"type": "null"})
    setting.pop("default", None)
    if len(setting["anyOf"]) == 1:
        setting.update(setting.pop("anyOf")[0])


def _describe(name: str, setting: dict[str, Any], definitions: dict[str, Any]) -> None:
    if "description" in setting:
        return
    if "$ref" in setting:
        setting["description"] = definitions[setting["$ref"].rsplit("/", 1)[1]]["description"]
    else:
        # growth_action is an action too.
        text = SHARED.get(name.rpartition("_")[2])
        if text:
            setting["description"] = text


def _tidy(node: dict[str, Any]) -> None:
    if "description" in node:
        node["description"] = " ".join(node["description"].split())
    default = node.get("default")
    if isinstance(default, float) and math.isinf(default):
        del node["default"]
        node[INFINITE] = True
        node["description"] = f"{node.get('description', '')} No limit if left out.".strip()
