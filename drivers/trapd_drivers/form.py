"""Command and reply forms: text with ``{value}`` and ``{channel}`` in it, written for sending, matched on receiving."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from string import Formatter

from trapd_drivers.errors import Malformed


@dataclass(frozen=True)
class Form:
    """A checked form. `fields` are the names in braces that occur in it."""

    text: str

    def __post_init__(self) -> None:
        if not self.text.isascii() or any(character < " " for character in self.text):
            raise ValueError("text of printable ASCII characters")
        if "*RST" in self.text.upper():
            raise ValueError("anything but *RST, which is never sent")
        plain = all(not spec and not conversion for _, _, spec, conversion in Formatter().parse(self.text))
        if not plain or self.fields - {"value", "channel"}:
            raise ValueError("text with no braces but {value} and {channel}")

    @property
    def fields(self) -> frozenset[str]:
        return frozenset(name for _, name, _, _ in Formatter().parse(self.text) if name is not None)

    def written(self, *, value: str = "", channel: int = 0) -> str:
        return self.text.format(value=value, channel=channel)

    def undressed(self, reply: str, channel: int = 0) -> str:
        """The text in place of ``{value}``; `Malformed` when the reply does not have this form.

        Case and the number of blanks do not matter: IEEE 488.2 headers and words have no case.
        """
        match = _pattern(self.text, channel).fullmatch(reply)
        if match is None:
            raise Malformed(f"{reply[:80]!r} does not read {self.text!r}")
        return match["value"]


@cache
def _pattern(text: str, channel: int) -> re.Pattern[str]:
    literal = re.sub(r"(\\ )+", r"\\s+", re.escape(text))
    literal = literal.replace(r"\{value\}", r"(?P<value>\S.*?)").replace(r"\{channel\}", str(channel))
    return re.compile(literal, re.IGNORECASE)
