"""Which headers an instrument knows: the notation of SCPI manuals, compiled, and the header path of compound messages.

A pattern is written as in SCPI-1999 volume 1, 6.2: capitals are the short form, brackets an optional node, and ``#``
a node that takes a numeric suffix: ``[SOURce#]:VOLTage[:LEVel]``.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

from trapd_simulated.errors import ScpiError
from trapd_simulated.syntax import Unit

_NODE = re.compile(r"(?P<open>\[)?:?(?P<name>[A-Za-z]+)(?P<suffix>#)?\]?")
_SUFFIX = re.compile(r"([A-Z_]+)(\d*)", re.ASCII)


@dataclass(frozen=True, kw_only=True)
class Found:
    """``command`` is our own name for it; ``suffix`` the numeric suffix, 1 when omitted (SCPI-1999 6.2.5.2)."""

    command: str
    suffix: int


class HeaderTree:
    """All spellings of all headers of one instrument, each looked up in one step."""

    def __init__(self, patterns: Mapping[str, tuple[str, ...]]) -> None:
        self._spellings: dict[tuple[str, ...], tuple[str, int]] = {}
        for command, alternatives in patterns.items():
            for pattern in alternatives:
                for spelling, suffixed in _spellings(pattern):
                    self._spellings[spelling] = (command, suffixed)

    def find(self, nodes: tuple[str, ...]) -> Found:
        """Raises `ScpiError` -113 for an unknown header, -114 for a suffix on a node that has only one."""
        names, numbers = zip(*(_name_and_suffix(node) for node in nodes), strict=True)
        entry = self._spellings.get(names)
        if entry is None:
            raise ScpiError(-113, ":".join(nodes))
        command, suffixed = entry
        for index, number in enumerate(numbers):
            if index != suffixed and number != 1:
                raise ScpiError(-114, ":".join(nodes))
        return Found(command=command, suffix=numbers[suffixed] if suffixed >= 0 else 1)


class HeaderPath:
    """Where a unit without leading colon begins (SCPI-1999 volume 1, 6.2.4); new for each message.

    The path is the header as it was written less its last node: optional nodes that were left out are not in it.
    """

    def __init__(self) -> None:
        self._nodes: tuple[str, ...] = ()

    def full(self, unit: Unit) -> tuple[str, ...]:
        """The unit's header from the root, and the path moved on. Common commands leave the path alone."""
        if unit.common:
            return unit.nodes
        nodes = unit.nodes if unit.from_root else self._nodes + unit.nodes
        self._nodes = nodes[:-1]
        return nodes


def _name_and_suffix(node: str) -> tuple[str, int]:
    if node.startswith("*"):
        return node, 1
    match = _SUFFIX.fullmatch(node)
    if not match:
        raise ScpiError(-113, node)
    return match[1], int(match[2] or 1)


def _spellings(pattern: str) -> list[tuple[tuple[str, ...], int]]:
    """Every way to write ``pattern``, with the index of the node that takes the suffix (-1: none)."""
    if pattern.startswith("*"):
        return [((pattern.upper(),), -1)]
    choices: list[list[tuple[str, bool]]] = []
    for node in _NODE.finditer(pattern):
        name, suffixed = node["name"], node["suffix"] is not None
        short = "".join(char for char in name if char.isupper())
        forms = [(form, suffixed) for form in sorted({short, name.upper()})]
        choices.append([*forms, ("", False)] if node["open"] else forms)
    found = []
    for combination in product(*choices):
        written = [(name, suffixed) for name, suffixed in combination if name]
        if written:
            places = [index for index, (_, suffixed) in enumerate(written) if suffixed]
            found.append((tuple(name for name, _ in written), places[0] if places else -1))
    return found
