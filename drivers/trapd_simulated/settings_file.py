"""The settings of a rack as a TOML or JSON file: keys are the fields of the records in `settings`."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from pathlib import Path
from types import UnionType
from typing import Any, Literal, TypeVar, Union, get_args, get_origin, get_type_hints

from trapd_simulated.errors import SettingsError
from trapd_simulated.settings import (
    DcSupplySettings,
    GaugeSettings,
    InstrumentSettings,
    PhotonCounterSettings,
    RackSettings,
    RfSourceSettings,
)

T = TypeVar("T")

KINDS: Mapping[str, type[InstrumentSettings]] = {
    one.KIND: one for one in (RfSourceSettings, DcSupplySettings, PhotonCounterSettings, GaugeSettings)
}


def load(path: Path) -> RackSettings:
    """The settings of a TOML or JSON file (by its suffix). Every mistake is one `SettingsError`."""
    try:
        text = path.read_text(encoding="utf-8")
        data = json.loads(text) if path.suffix == ".json" else tomllib.loads(text)
    except OSError as error:
        raise SettingsError(f"{path}: cannot be read ({error.strerror}); no rack was started") from error
    except ValueError as error:  # both decoders and UTF-8
        raise SettingsError(f"{path}: {error}; no rack was started") from error
    try:
        return _rack(data)
    except SettingsError as error:
        raise SettingsError(f"{path}: {error}; no rack was started") from None


def _rack(data: object) -> RackSettings:
    table = dict(_table(data, "the file"))
    if "instruments" in table:
        table["instruments"] = {
            name: _instrument(_table(one, f"instruments.{name}"), f"instruments.{name}")
            for name, one in _table(table["instruments"], "instruments").items()
        }
    return _build(RackSettings, table, "")


def _instrument(table: Mapping[str, Any], where: str) -> InstrumentSettings:
    kind = table.get("kind")
    if not isinstance(kind, str) or kind not in KINDS:
        raise SettingsError(f"{where}.kind = {kind!r}: expected one of {', '.join(KINDS)}")
    return _build(KINDS[kind], {key: value for key, value in table.items() if key != "kind"}, where)


def _build(record: type[T], table: Mapping[str, Any], where: str) -> T:
    hints = get_type_hints(record)
    known = {one.name for one in fields(record)}  # type: ignore[arg-type]
    for key in table:
        if key not in known:
            raise SettingsError(f"{_join(where, key)}: unknown; expected one of {', '.join(sorted(known))}")
    values = {key: _value(hints[key], value, _join(where, key)) for key, value in table.items()}
    try:
        return record(**values)
    except SettingsError as error:
        raise SettingsError(f"{where}: {error}" if where else str(error)) from None


def _value(hint: Any, value: Any, where: str) -> Any:
    """``value`` as the type ``hint`` asks for."""
    origin, inner = get_origin(hint), get_args(hint)
    if is_dataclass(hint) and isinstance(hint, type):
        return value if isinstance(value, hint) else _build(hint, _table(value, where), where)
    if origin is Literal and value in inner:
        return value
    if origin is tuple and isinstance(value, list):
        return tuple(_value(inner[0], one, f"{where}[{index}]") for index, one in enumerate(value))
    if origin is Mapping:
        return {_key(inner[0], key, where): _value(inner[1], one, where) for key, one in _table(value, where).items()}
    if origin in (Union, UnionType) and isinstance(value, Mapping):
        return _value(inner[0], value, where)
    if origin in (Union, UnionType) and any(isinstance(value, option) for option in inner):
        return value
    if hint is float and isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    if isinstance(hint, type) and origin is None and type(value) is hint:
        return value
    expected = ", ".join(map(repr, inner)) if origin is Literal else getattr(hint, "__name__", str(hint))
    raise SettingsError(f"{where} = {value!r}: expected {expected}")


def _key(hint: Any, key: str, where: str) -> Any:
    try:
        return hint(key)
    except ValueError:
        raise SettingsError(f"{where}: key {key!r}: expected {hint.__name__}") from None


def _table(value: Any, where: str) -> Mapping[str, Any]:
    if not isinstance(value, Mapping):
        raise SettingsError(f"{where} = {value!r}: expected a table")
    return value


def _join(where: str, key: str) -> str:
    return f"{where}.{key}" if where else key
