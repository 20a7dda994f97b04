"""One table of a trap file, read key by key; what is wrong is noted with its key, and reading goes on.

Every getter returns a value of the right type even when it noted a mistake: NaN, "" or None, on which later comparisons
stay silent. Nothing built from such values leaves this package, because `Mistakes.raise_if_any` comes last.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from math import isfinite, nan
from pathlib import Path
from typing import TypeVar

from trapd.config.keys import LATER, SECTIONS, TOP
from trapd.config.quantity import Dimension, QuantityError, closest, expected, quantity
from trapd.errors import ConfigError

_SHOWN = 10

Choice = TypeVar("Choice", bound=str)


class Mistakes:
    """What is wrong with one file, in the order found."""

    def __init__(self, file: Path) -> None:
        self._file = file
        self._lines: list[str] = []

    def note(self, key: str, text: str) -> None:
        """``text`` continues the sentence that begins with file and key."""
        self._lines.append(self._line(f"{key}{text}"))

    def __len__(self) -> int:
        return len(self._lines)

    def raise_if_any(self) -> None:
        if not self._lines:
            return
        lines = self._lines[:_SHOWN]
        if len(self._lines) > _SHOWN:
            lines.append(self._line(f"and {len(self._lines) - _SHOWN} more"))
        raise ConfigError("\n".join(lines), {"file": str(self._file), "mistakes": self._lines})

    def _line(self, text: str) -> str:
        """One line whatever is quoted in it, with nothing that tells a terminal to do something."""
        line = f"{self._file}: {text}"
        return "".join(one if one.isprintable() else one.encode("unicode_escape").decode() for one in line)


class Table:
    """The table at ``path``, for example ``electrodes.endcaps.voltage``; `keys.SECTIONS` knows it as ``section``."""

    def __init__(self, data: Mapping[str, object], path: str, mistakes: Mistakes, section: str | None = None) -> None:
        self.path = path
        self.mistakes = mistakes
        self._data = data
        self._section = path if section is None else section
        for key in data:
            self._check_key(key, SECTIONS.get(self._section, TOP))

    def __contains__(self, key: str) -> bool:
        return key in self._data

    def at(self, key: str) -> str:
        return f"{self.path}.{key}" if self.path else key

    def wrong(self, key: str, wanted: str) -> None:
        """Notes that ``key`` holds, or lacks, what it should: found and expected."""
        found = f" = {shown(self._data[key])}" if key in self._data else " is missing"
        self.mistakes.note(self.at(key), f"{found}; expected {wanted}")

    def refuse(self, keys: Sequence[str], why: str) -> None:
        """Notes every one of ``keys`` that is there."""
        for key in keys:
            if key in self._data:
                self.mistakes.note(self.at(key), f" = {shown(self._data[key])}; {why}")

    def quantity(
        self,
        key: str,
        dimension: Dimension,
        *,
        default: float | None = None,
        above: float | None = None,
        least: float | None = None,
        unit: str | None = None,
    ) -> float:
        """A text with a unit, in SI unless ``unit`` names another; ``above`` and ``least`` bound it in that unit."""
        if key not in self._data and default is not None:
            return default
        number = self._quantity(key, self._data.get(key), dimension, unit)
        if above is not None and number <= above:
            self.wrong(key, f"more than {above:g}")
            return nan
        if least is not None and number < least:
            self.wrong(key, f"at least {least:g}")
            return nan
        return number

    def quantities(self, key: str, dimension: Dimension, names: str, *, above: float) -> tuple[float, ...]:
        """As many texts with units as there are ``names`` (such as "x, y, z"), each more than ``above``."""
        value = self._data.get(key)
        count = len(names.split(", "))
        if not isinstance(value, list) or len(value) != count:
            self.wrong(key, f"{count} times {expected(dimension)}, [{names}]")
            return (nan,) * count
        numbers = tuple(self._quantity(key, item, dimension) for item in value)
        if any(number <= above for number in numbers):
            self.wrong(key, f"more than {above:g}, each")
        return numbers

    def _quantity(self, key: str, value: object, dimension: Dimension, unit: str | None = None) -> float:
        if not isinstance(value, str):
            self.wrong(key, expected(dimension) + " (a text with a unit)")
            return nan
        try:
            return quantity(value, dimension, unit)
        except QuantityError as error:
            self.mistakes.note(self.at(key), f" = {shown(value)}: {error}")
            return nan

    def optional_quantity(
        self, key: str, dimension: Dimension, *, above: float | None = None, unit: str | None = None
    ) -> float | None:
        return self.quantity(key, dimension, above=above, unit=unit) if key in self._data else None

    def number(self, key: str, *, default: float | None = None, above: float | None = None) -> float:
        """A plain, finite number."""
        if key not in self._data and default is not None:
            return default
        number = _plain_number(self._data.get(key))
        if number is None:
            self.wrong(key, "a plain number")
        elif above is not None and not number > above:
            self.wrong(key, f"a plain number more than {above:g}")
        else:
            return number
        return nan

    def numbers(self, key: str, names: str) -> tuple[float, ...] | None:
        """As many plain numbers as there are ``names`` (such as "x, y, z"); None when absent or wrong."""
        if key not in self._data:
            return None
        value = self._data[key]
        count = len(names.split(", "))
        found = [_plain_number(item) for item in value] if isinstance(value, list) else []
        numbers = tuple(item for item in found if item is not None)
        if len(numbers) != count or len(found) != count:
            self.wrong(key, f"{count} plain numbers [{names}]")
            return None
        return numbers

    def integer(self, key: str, wanted: str, *, least: int, most: int, default: int | None = None) -> int | None:
        if key not in self._data and default is not None:
            return default
        value = self._data.get(key)
        if not isinstance(value, int) or isinstance(value, bool) or not least <= value <= most:
            self.wrong(key, wanted)
            return None
        return value

    def text(self, key: str, wanted: str, *, default: str | None = None) -> str:
        """A text that is not empty."""
        if key not in self._data and default is not None:
            return default
        value = self._data.get(key)
        if not isinstance(value, str) or not value.strip() or not value.isprintable():
            self.wrong(key, wanted)
            return ""
        return value

    def choice(self, key: str, options: Sequence[Choice], remark: str = "") -> Choice | None:
        for option in options:
            if self._data.get(key) == option:
                return option
        self.wrong(key, " or ".join(f'"{option}"' for option in options) + remark)
        return None

    def table(self, key: str, section: str, wanted: str) -> Table:
        """The table under ``key``; an empty one, noted, when there is none."""
        value = self._data.get(key)
        if not isinstance(value, dict):
            self.wrong(key, wanted)
            return Missing(self.at(key), self.mistakes, section)
        return Table(value, self.at(key), self.mistakes, section)

    def optional_table(self, key: str) -> Table:
        """The table under ``key``, an empty one when it is absent."""
        if key in self._data:
            return self.table(key, key, f"a table [{key}]")
        return Table({}, key, self.mistakes)

    def tables(self, key: str, labels: Sequence[str]) -> tuple[Table, ...]:
        """The tables of ``[[key]]``, at least one; each named in messages by the first of ``labels`` it holds."""
        value = self._data.get(key)
        if not isinstance(value, list) or not value or not all(isinstance(item, dict) for item in value):
            self.wrong(key, f"at least one table [[{key}]]")
            return ()
        tables = []
        for number, item in enumerate(value, start=1):
            texts = (item[label] for label in labels if isinstance(item.get(label), str))
            name = next((text for text in texts if text.isprintable()), str(number))
            tables.append(Table(item, f"{key}.{name[:40]}", self.mistakes, key))
        return tuple(tables)

    def _check_key(self, key: str, known: Sequence[str]) -> None:
        if key in LATER.get(self._section, ()):
            self.mistakes.note(self.at(key), ": known but not built yet in this version; take it out of the file")
        elif key not in known and not set(known) & {"NAME", "SETPOINT"}:
            kind = "key" if self.path else "section"
            self.mistakes.note(self.at(key), f": unknown {kind}{closest(key, known)}")

    def names(self) -> tuple[str, ...]:
        return tuple(self._data)


class Missing(Table):
    """Stands in for a table whose absence was noted; reading it notes nothing more."""

    def __init__(self, path: str, mistakes: Mistakes, section: str) -> None:
        super().__init__({}, path, mistakes, section)

    def wrong(self, key: str, wanted: str) -> None:
        pass


def shown(value: object) -> str:
    """What was found, as the file might write it, short."""
    try:
        text = json.dumps(value, default=str, ensure_ascii=False)
    except (ValueError, RecursionError):  # an integer of thousands of digits, a table nested as deep
        text = "something too large to print"
    return text if len(text) <= 60 else text[:57] + "..."


def _plain_number(value: object) -> float | None:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if isfinite(number) else None
