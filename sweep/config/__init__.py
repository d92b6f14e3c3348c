"""TOML -> `Config`: every mistake at once, each with its path, value and allowed range."""

from sweep.config.load import config_from_document, load_config, parse_config
from sweep.config.model import Case, Config, Design, Range, Requirement
from sweep.config.starters import STARTERS, starter_text
from sweep.config.stored import (
    cases_from_json,
    cases_to_json,
    designs_from_json,
    designs_to_json,
)

__all__ = [
    "STARTERS",
    "Case",
    "Config",
    "Design",
    "Range",
    "Requirement",
    "cases_from_json",
    "cases_to_json",
    "config_from_document",
    "designs_from_json",
    "designs_to_json",
    "load_config",
    "parse_config",
    "starter_text",
]
