"""From a TOML file to a checked configuration, with everything that is wrong said at once."""

import json
import tomllib
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from trialrunner.config.cross_checks import file_problems, fit_problems, warnings
from trialrunner.config.lines import find_lines, line_of
from trialrunner.config.model import Config
from trialrunner.config.problems import ConfigError, Problem, in_words, located, without_echoes
from trialrunner.config.schema import json_schema
from trialrunner.config.toml_text import OverrideError, apply_overrides, write_toml
from trialrunner.config.values import impossible_values

MAX_CONFIG_BYTES = 1_000_000
"""A configuration is written by people; references of any size belong into their own file."""


def load(path: str | Path, overrides: Sequence[str] = ()) -> Config:
    """The configuration in a TOML file, its reference and feedforward files read as well.

    `overrides` are dotted KEY=VALUE texts with TOML values. Raises ConfigError.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            raw = file.read(MAX_CONFIG_BYTES + 1)
        if len(raw) > MAX_CONFIG_BYTES:
            raise ConfigError(str(path), [f"larger than {MAX_CONFIG_BYTES} bytes"])
        text = raw.decode("utf-8-sig")
    except OSError as error:
        raise ConfigError(str(path), [f"cannot be read: {error.strerror or error}"]) from None
    except UnicodeDecodeError as error:
        text = f"expected UTF-8 text, found byte 0x{raw[error.start]:02x} at position {error.start}"
        raise ConfigError(str(path), [text]) from None
    return _read(text, overrides, str(path), path.parent, with_files=True)


def load_text(text: str, overrides: Sequence[str] = (), source: str = "configuration") -> Config:
    """The configuration in a TOML text, such as a record holds; no other file is read.

    `source` names the text in errors. Raises ConfigError.
    """
    return _read(text, overrides, source, Path(), with_files=False)


def _read(
    text: str, overrides: Sequence[str], source: str, folder: Path, *, with_files: bool
) -> Config:
    try:
        document = tomllib.loads(text)
        overridden = apply_overrides(document, overrides)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(source, [f"not TOML: {error}"]) from None
    except OverrideError as error:
        raise ConfigError(source, [str(error)]) from None
    lines = find_lines(text)

    def refuse(problems: Iterable[Problem]) -> None:
        found = sorted(without_echoes(problems), key=lambda p: line_of(lines, p.path) or 0)
        if found:
            raise ConfigError(source, [located(one, lines, overridden) for one in found])

    config = _validate(document, refuse)
    config._text = write_toml(document) if overridden else text
    config._folder = folder
    refuse(fit_problems(config))
    refuse(file_problems(config, with_files=with_files))
    config._warnings = tuple(located(warning, lines, overridden) for warning in warnings(config))
    return config


def _validate(document: dict[str, Any], refuse: Callable[[Iterable[Problem]], None]) -> Config:
    schema = json_schema()
    odd = list(impossible_values(document, schema))
    try:
        # JSON mode, because there pydantic's strict mode takes a list for a tuple. A date, which
        # JSON lacks, is among the odd values already.
        config = Config.model_validate_json(json.dumps(document, default=str))
    except ValidationError as error:
        refuse([*odd, *in_words(error.errors(), document, schema)])
        raise
    refuse(odd)
    return config
