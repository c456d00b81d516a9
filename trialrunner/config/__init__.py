"""The configuration of a run: TOML in, one checked value out."""

from trialrunner.config.difference import config_difference
from trialrunner.config.model import Config
from trialrunner.config.problems import ConfigError
from trialrunner.config.reading import load, load_text
from trialrunner.config.schema import exported_schema

__all__ = [
    "Config",
    "ConfigError",
    "config_difference",
    "exported_schema",
    "load",
    "load_text",
]
