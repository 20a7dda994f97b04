"""A TOML table read strictly: each key is taken once with its type, and what nobody took is an error."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from trapd_drivers.errors import ProfileError

_MISSING: Any = object()


class Table:
    """One table of a file. Every mistake is a `ProfileError` naming file, key, found and expected."""

    def __init__(self, data: Mapping[str, Any], file: str, path: str = "") -> None:
        self._data = data
        self._file = file
        self._path = path
        self._taken: set[str] = set()

    @classmethod
    def read(cls, file: Path) -> Table:
        try:
            return cls(tomllib.loads(file.read_text(encoding="utf-8")), str(file))
        except OSError as error:
            raise ProfileError(f"{file}: cannot be read ({error.strerror}); nothing was opened") from error
        except ValueError as error:  # TOML and UTF-8 alike
            raise ProfileError(f"{file}: not TOML ({error}); nothing was opened") from error

    def __contains__(self, key: str) -> bool:
        return key in self._data

    def error(self, key: str, expected: str) -> ProfileError:
        found = f" = {self._data[key]!r}" if key in self._data else ": missing"
        return ProfileError(f"{self._file}: {self._name(key)}{found}; expected {expected}; nothing was opened")

    def text(self, key: str, default: str = _MISSING) -> str:
        value = self._take(key, default, "a string")
        if not isinstance(value, str):
            raise self.error(key, "a string")
        return value

    def choice(self, key: str, choices: tuple[str, ...], default: str = _MISSING) -> str:
        value = self.text(key, default)
        if value not in choices:
            raise self.error(key, f"one of {', '.join(choices)}")
        return value

    def number(
        self, key: str, default: float = _MISSING, *, at_least: float = -math.inf, above: float = -math.inf
    ) -> float:
        value = self._take(key, default, "a number")
        if not _is_number(value) or not at_least <= value or not above < value:
            bound = f" of at least {at_least:g}" if at_least > -math.inf else ""
            raise self.error(key, f"a number{bound}" + (f" above {above:g}" if above > -math.inf else ""))
        return float(value)

    def numbers(self, key: str, default: tuple[float, ...] = _MISSING) -> tuple[float, ...]:
        value = self._take(key, default, "a list of numbers")
        if not isinstance(value, list | tuple) or not all(_is_number(one) for one in value):
            raise self.error(key, "a list of numbers")
        return tuple(float(one) for one in value)

    def integers(self, key: str, default: tuple[int, ...] = _MISSING) -> tuple[int, ...]:
        value = self._take(key, default, "a list of whole numbers")
        if not isinstance(value, list | tuple) or not all(_is_number(one) and isinstance(one, int) for one in value):
            raise self.error(key, "a list of whole numbers")
        return tuple(value)

    def texts(self, key: str, default: tuple[str, ...]) -> tuple[str, ...]:
        value = self._take(key, default, "a list of strings")
        if not isinstance(value, list | tuple) or not value or not all(isinstance(one, str) for one in value):
            raise self.error(key, "a list of strings")
        return tuple(value)

    def flag(self, key: str, default: bool) -> bool:
        value = self._take(key, default, "true or false")
        if not isinstance(value, bool):
            raise self.error(key, "true or false")
        return value

    def table(self, key: str, *, required: bool = False) -> Table:
        """The table of that key; an empty one when it is missing and not required."""
        value = self._take(key, _MISSING if required else {}, "a table")
        if not isinstance(value, dict):
            raise self.error(key, "a table")
        return Table(value, self._file, self._name(key))

    def merged(self, changes: Table) -> Table:
        """This table with the keys of ``changes`` in place of its own."""
        return Table({**self._data, **changes._data}, self._file, changes._path)

    def names(self) -> tuple[str, ...]:
        return tuple(self._data)

    def is_text(self, key: str) -> bool:
        return isinstance(self._data.get(key), str)

    def finish(self) -> None:
        """Refuse the keys that nobody took."""
        for key in self._data:
            if key not in self._taken:
                known = ", ".join(sorted(self._taken))
                raise ProfileError(
                    f"{self._file}: {self._name(key)}: unknown key; expected one of {known}; nothing was opened"
                )

    def _take(self, key: str, default: Any, expected: str) -> Any:
        self._taken.add(key)
        value = self._data.get(key, default)
        if value is _MISSING:
            raise self.error(key, expected)
        return value

    def _name(self, key: str) -> str:
        return f"{self._path}.{key}" if self._path else key


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
