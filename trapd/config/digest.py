"""A `Config` as plain data for the record: what was in force, in SI, and the file's own text."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from pathlib import PurePath
from typing import Any, cast

from trapd.config.records import Config


def as_data(config: Config) -> dict[str, Any]:
    """Mappings with text keys, lists, texts, finite numbers, None, nothing else; the records' field names as keys."""
    return cast("dict[str, Any]", _plain(config))


def _plain(value: object) -> object:
    if is_dataclass(value):
        return {field.name: _plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, tuple):
        return [_plain(item) for item in value]
    return str(value) if isinstance(value, PurePath) else value
