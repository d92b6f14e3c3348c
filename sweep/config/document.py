"""Reading a config: bytes -> text -> a document of plain values, safe to walk through.

Whatever the bytes are, the outcome is a document of bounded depth and size whose numbers are exact,
or a `ConfigError`.
"""

from __future__ import annotations

import json
import re
import stat
import tomllib
from decimal import Decimal, DecimalException
from pathlib import Path
from typing import Any

from sweep.config.findings import Findings, describe, key_path
from sweep.errors import ConfigError, Problem

Document = dict[str, Any]

MAX_BYTES = 16 * 1024 * 1024
"""Largest config, and largest table beside it."""

MAX_DEPTH = 8
"""Deepest nesting; the deepest legal config uses six levels."""

MAX_KEYS = 1000
"""Most keys of one section, and most sections of one kind."""

_MAX_BITS = 1000
"""Longest whole number, in bits."""

_LONG_DOTTED_KEY = re.compile(
    r"""(?<![A-Za-z0-9_\-."'])(?:(?:[A-Za-z0-9_-]++|"[^"\n]*+"|'[^'\n]*+')[ \t]*+\.[ \t]*+){12}"""
)
"""A dotted key that is longer than any config needs; tomllib's time grows with its square."""


def refuse(source: str, found: str, expected: str, remedy: str) -> ConfigError:
    """Make the error for a file that cannot be read as a config at all."""
    return ConfigError(source, [Problem("", found, expected, remedy)])


def read_bytes(path: Path, source: str) -> bytes:
    """Read a regular file of at most `MAX_BYTES`.

    Raises
    ------
    ConfigError
        When there is none, it is something else, or it is larger.
    """
    expected = f"a text file of at most {MAX_BYTES // 1024**2} MiB"
    try:
        mode = path.stat().st_mode
        if not stat.S_ISREG(mode):
            found = "a folder" if stat.S_ISDIR(mode) else "something other than a regular file"
            raise refuse(source, found, expected, "name the config file itself")
        with path.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        remedy = "check the path; `sweep new FILE` writes a starter config"
        raise refuse(source, "no such file", expected, remedy) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise refuse(
            source, f"a file that cannot be read ({reason})", expected, "check it"
        ) from error
    if len(data) > MAX_BYTES:
        remedy = "give start, stop and count instead of long lists, or put rows into a CSV"
        raise refuse(source, "a larger file", expected, remedy)
    return data


def decode(data: bytes, source: str) -> str:
    """Decode UTF-8, with or without a byte order mark.

    Raises
    ------
    ConfigError
        When the bytes are not UTF-8.
    """
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        found = f"bytes that are no text (at byte {error.start})"
        raise refuse(source, found, "UTF-8 text", "save the file as UTF-8") from error


def parse_toml(text: str, source: str) -> Document:
    """Parse TOML with exact numbers.

    Raises
    ------
    ConfigError
        When it is not TOML, nested too deeply, or holds numbers beyond double precision.
    """
    if len(text) > MAX_BYTES:
        expected = f"a text of at most {MAX_BYTES // 1024**2} MiB"
        raise refuse(source, f"{len(text)} characters", expected, "give start, stop and count")
    if _LONG_DOTTED_KEY.search(text):
        raise _too_deep(source)
    try:
        document = tomllib.loads(text, parse_float=_parse_float)
    except RecursionError:
        raise _too_deep(source) from None
    except ValueError as error:
        found = f"text that is not TOML: {str(error)[:200]}"
        remedy = "mend that place; texts need quotes, and each key may be given once"
        raise refuse(source, found, "a TOML document", remedy) from None
    _check_values(document, source)
    return document


def parse_json(text: str, source: str) -> Document:
    """Parse the canonical text of a config, which is JSON, under the same guards as TOML.

    Raises
    ------
    ConfigError
        When it is no JSON object, nested too deeply, or holds numbers beyond double precision.
    """
    try:
        document = json.loads(text, parse_float=_parse_float)
    except (ValueError, RecursionError) as error:
        found = f"text that is not JSON: {str(error)[:200]}"
        raise refuse(source, found, "the stored text of a config", "take it unaltered") from None
    if not isinstance(document, dict):
        raise refuse(source, describe(document), "a JSON object", "take the text unaltered")
    _check_values(document, source)
    return document


def canonical_document(document: Document) -> str:
    """Write a document as JSON that parses to the same numbers; the order of keys is kept.

    The order of the axes is the order of the stored dimensions, so keys are not sorted. Decimals
    become texts, which read as the same quantities.
    """
    return json.dumps(document, ensure_ascii=False, separators=(",", ":"), default=str)


def _parse_float(text: str) -> Decimal:
    try:
        return Decimal(text)
    except DecimalException:
        raise ValueError(f"{text[:40]} is not a number that double precision can hold") from None


def _too_deep(source: str) -> ConfigError:
    found = f"keys or arrays nested deeper than {MAX_DEPTH} levels"
    return refuse(source, found, "sections, keys and lists only", "remove the nesting")


def _check_values(document: Document, source: str) -> None:
    """Refuse what no later step should have to expect: deep, wide or endless things."""
    findings = Findings(source)
    level: list[tuple[tuple[str | int, ...], Any]] = [((), document)]
    for _ in range(MAX_DEPTH):
        below: list[tuple[tuple[str | int, ...], Any]] = []
        for path, value in level:
            items = value.items() if isinstance(value, dict) else enumerate(value)
            if isinstance(value, dict) and len(value) > MAX_KEYS:
                place = key_path(*path) or "the top level"
                expected = f"at most {MAX_KEYS} keys in one section"
                raise refuse(source, f"{len(value)} keys in {place}", expected, "keep fewer")
            for key, item in items:
                if isinstance(item, dict | list):
                    below.append(((*path, key), item))
                elif item is None:
                    # JSON has a null and TOML has none: no later step expects it
                    place = key_path(*path, key)
                    findings.add(place, describe(item), "a value", "leave the key out")
                elif isinstance(item, int) and item.bit_length() > _MAX_BITS:
                    remedy = "give a number of magnitude below 1e300"
                    expected = "a finite number that double precision can hold"
                    findings.add(key_path(*path, key), describe(item), expected, remedy)
        level = below
    if level:
        raise _too_deep(source)
    findings.refuse_if_any()
