"""A TOML table read strictly: each key is taken once with its type, and what nobody took is an error."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable, Mapping
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
        self._parts: list[Table] = []

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
        value: str = self._take(key, default, "a string", lambda found: isinstance(found, str))
        return value

    def choice(self, key: str, choices: tuple[str, ...], default: str = _MISSING) -> str:
        value: str = self._take(key, default, f"one of {', '.join(choices)}", lambda found: found in choices)
        return value

    def number(
        self, key: str, default: float = _MISSING, *, at_least: float = -math.inf, above: float = -math.inf
    ) -> float:
        bounds = f" of at least {at_least:g}" if at_least > -math.inf else ""
        bounds += f" above {above:g}" if above > -math.inf else ""
        return float(
            self._take(key, default, f"a number{bounds}", lambda it: _is_number(it) and at_least <= it and above < it)
        )

    def numbers(self, key: str, default: tuple[float, ...]) -> tuple[float, ...]:
        return tuple(float(one) for one in self._take(key, default, "a list of numbers", _each(_is_number)))

    def integers(self, key: str, default: tuple[int, ...] = _MISSING) -> tuple[int, ...]:
        return tuple(self._take(key, default, "a list of whole numbers", _each(lambda one: type(one) is int)))

    def words(self, key: str, default: tuple[str, ...]) -> frozenset[str]:
        """A list of strings, in upper case."""
        fits = _each(lambda one: isinstance(one, str))
        found = self._take(key, default, "a list of strings", lambda found: fits(found) and len(found) > 0)
        return frozenset(word.upper() for word in found)

    def flag(self, key: str, default: bool) -> bool:
        value: bool = self._take(key, default, "true or false", lambda found: isinstance(found, bool))
        return value

    def table(self, key: str, *, required: bool = False) -> Table:
        """The table of that key; an empty one when it is missing and not required."""
        data = self._take(key, _MISSING if required else {}, "a table", lambda found: isinstance(found, dict))
        self._parts.append(Table(data, self._file, self._name(key)))
        return self._parts[-1]

    def merged(self, changes: Table) -> Table:
        """This table with the keys of ``changes`` in place of its own; a key taken from it is taken from both."""
        both = Table({**self._data, **changes._data}, self._file, changes._path)
        self._taken = changes._taken = both._taken
        changes._parts.append(both)
        return both

    def names(self) -> tuple[str, ...]:
        return tuple(self._data)

    def is_text(self, key: str) -> bool:
        return isinstance(self._data.get(key), str)

    def finish(self) -> None:
        """Refuse the keys that nobody took, here and in every table taken from this one."""
        for key in self._data:
            if key not in self._taken:
                known = ", ".join(sorted(self._taken))
                raise ProfileError(
                    f"{self._file}: {self._name(key)}: unknown key; expected one of {known}; nothing was opened"
                )
        for part in self._parts:
            part.finish()

    def _take(self, key: str, default: Any, expected: str, fits: Callable[[Any], bool]) -> Any:
        self._taken.add(key)
        value = self._data.get(key, default)
        if value is _MISSING or not fits(value):
            raise self.error(key, expected)
        return value

    def _name(self, key: str) -> str:
        return f"{self._path}.{key}" if self._path else key


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _each(fits: Callable[[Any], bool]) -> Callable[[Any], bool]:
    return lambda found: isinstance(found, list | tuple) and all(map(fits, found))
