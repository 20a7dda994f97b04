"""Program messages to program message units: the notation of IEEE 488.2 clause 7 and SCPI-1999 volume 1 clauses 6 to 8.

Only notation: which headers exist is the instrument's `HeaderTree`, what a parameter may be is `arguments`.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from enum import Enum
from itertools import product

from trapd_simulated.errors import ScpiError

# IEEE 488.2 7.4.1.2: white space is every ASCII control character and the blank, but not the newline.
WHITE = "".join(chr(code) for code in range(33) if code != 10)
_MNEMONIC_LIMIT = 12  # 488.2 7.6.1.4.1
_LONGEST_RANGE = 1000
_HEADER = re.compile(r"(\*[A-Za-z]\w*|:?[A-Za-z]\w*(?::[A-Za-z]\w*)*)(\?)?", re.ASCII)
_NUMBER = re.compile(
    r"(?P<mantissa>[+-]?(?:\d+(?:\.\d*)?|\.\d+))"
    r"(?:[\x00-\x20]*[eE][\x00-\x20]*(?P<exponent>[+-]?\d+))?"
    r"[\x00-\x20]*(?P<suffix>/?[A-Za-z][A-Za-z0-9./-]*)?",
    re.ASCII,
)
_WORD = re.compile(r"[A-Za-z]\w*", re.ASCII)
_CHANNEL = re.compile(r"(\d+)(?:\s*:\s*(\d+))?", re.ASCII)
_NODE = re.compile(r"(?P<open>\[)?:?(?P<name>[A-Za-z]+)(?P<suffix>#)?\]?")
_SUFFIX = re.compile(r"([A-Z_]+)(\d*)", re.ASCII)


class Kind(Enum):
    NUMBER = "decimal numeric"
    WORD = "character"
    STRING = "string"  # no command of this rack takes any, but it must be recognised to be refused
    CHANNELS = "channel list"


@dataclass(frozen=True, kw_only=True)
class Parameter:
    """``text`` is a word, or the suffix of a number (empty when there was none), in upper case.

    ``channels`` is ``(@1,2:4)`` written out: (1, 2, 3, 4).
    """

    kind: Kind
    text: str = ""
    value: float = 0.0
    channels: tuple[int, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Unit:
    """One program message unit. ``nodes`` in upper case, no colons; a common command is one node beginning with *."""

    nodes: tuple[str, ...]
    from_root: bool
    query: bool
    parameters: tuple[Parameter, ...]

    @property
    def common(self) -> bool:
        return self.nodes[0].startswith("*")


def units(message: str) -> Iterator[Unit]:
    """The units of one message, each parsed only when asked for: those before a mistake have then been executed.

    Raises `ScpiError` at the first mistake. An empty message is legal and has no units (488.2 7.3.2).
    """
    if not message.strip(WHITE):
        return
    for text in _split(message, ";"):
        yield _unit(text.strip(WHITE))


def _split(text: str, separator: str) -> Iterator[str]:
    """``text`` cut at ``separator`` wherever that is outside strings and expressions."""
    if not any(mark in text for mark in "\"'("):
        yield from text.split(separator)
        return
    start, depth, quote = 0, 0, ""
    for index, char in enumerate(text):
        if quote:
            quote = "" if char == quote else quote
        elif char in "\"'":
            quote = char
        elif char == "(":
            depth += 1
        elif char == ")":
            depth -= 1
        elif char == separator and depth <= 0:
            yield text[start:index]
            start = index + 1
    if quote:
        raise ScpiError(-151, "string is not closed")
    if depth > 0:
        raise ScpiError(-171, "parenthesis is not closed")
    yield text[start:]


def _unit(text: str) -> Unit:
    for char in text:
        if not " " <= char <= "~" and char not in WHITE:
            raise ScpiError(-101, repr(char))
    match = _HEADER.match(text)
    if not match:
        raise ScpiError(-102, text[:20])
    rest = text[match.end() :]
    if rest and rest[0] not in WHITE:
        raise ScpiError(-111, text[: match.end() + 1])
    header = match[1].upper()
    nodes = tuple(header.lstrip(":").split(":"))
    if any(len(node.lstrip("*")) > _MNEMONIC_LIMIT for node in nodes):
        raise ScpiError(-112, header[:40])
    return Unit(nodes=nodes, from_root=header[0] == ":", query=match[2] is not None, parameters=_parameters(rest))


def _parameters(text: str) -> tuple[Parameter, ...]:
    text = text.strip(WHITE)
    return tuple(_parameter(part.strip(WHITE)) for part in _split(text, ",")) if text else ()


def _parameter(text: str) -> Parameter:
    if not text:
        raise ScpiError(-102, "empty parameter")
    first = text[0]
    if first.isdigit() or first in "+-.":
        return _number(text)
    if first == "(":
        return _channel_list(text)
    if first in "\"'":
        if len(text) < 2 or text[-1] != first:
            raise ScpiError(-151, text[:20])
        return Parameter(kind=Kind.STRING, text=text[1:-1])
    if first == "#":
        raise ScpiError(-168, text[:20])
    return _word(text)


def _word(text: str) -> Parameter:
    if not _WORD.fullmatch(text):
        raise ScpiError(-103 if any(char in WHITE for char in text) else -141, text[:20])
    if len(text) > _MNEMONIC_LIMIT:
        raise ScpiError(-144, text[:20])
    return Parameter(kind=Kind.WORD, text=text.upper())


def _number(text: str) -> Parameter:
    match = _NUMBER.fullmatch(text)
    if not match:
        raise ScpiError(-121, text[:20])
    mantissa, exponent, suffix = match["mantissa"], match["exponent"] or "0", match["suffix"] or ""
    if len(mantissa.lstrip("+-0.").replace(".", "")) > 255:  # 488.2 7.7.2.4.1
        raise ScpiError(-124, "more than 255 digits")
    if abs(int(exponent)) > 32000:  # 488.2 7.7.2.4.1
        raise ScpiError(-123, exponent[:20])
    if len(suffix) > _MNEMONIC_LIMIT:  # 488.2 7.7.3.4
        raise ScpiError(-134, suffix[:20])
    return Parameter(kind=Kind.NUMBER, value=float(f"{mantissa}e{exponent}"), text=suffix.upper())


def _channel_list(text: str) -> Parameter:
    """SCPI-1999 volume 1, 8.3.2: entries are channels or ranges, kept in the order written."""
    if not (text.startswith("(@") and text.endswith(")")):
        raise ScpiError(-171, text[:20])
    channels: list[int] = []
    for entry in text[2:-1].split(","):
        match = _CHANNEL.fullmatch(entry.strip(WHITE))
        if not match or abs(int(match[1]) - int(match[2] or match[1])) > _LONGEST_RANGE:
            raise ScpiError(-171, text[:20])
        first, last = int(match[1]), int(match[2] or match[1])
        step = 1 if last >= first else -1
        channels.extend(range(first, last + step, step))
    return Parameter(kind=Kind.CHANNELS, channels=tuple(channels))


class HeaderTree:
    """All spellings of all headers of one instrument, each looked up in one step.

    A pattern is written as in SCPI-1999 volume 1, 6.2: capitals are the short form, brackets an optional node, and
    ``#`` a node that takes a numeric suffix: ``[SOURce#]:VOLTage[:LEVel]``.
    """

    def __init__(self, patterns: Mapping[str, tuple[str, ...]]) -> None:
        self._spellings: dict[tuple[str, ...], tuple[str, int]] = {}
        for command, alternatives in patterns.items():
            for pattern in alternatives:
                for spelling, suffixed in _spellings(pattern):
                    self._spellings[spelling] = (command, suffixed)

    def find(self, nodes: tuple[str, ...]) -> tuple[str, int]:
        """Our own name for the command, and its numeric suffix, 1 when omitted (SCPI-1999 6.2.5.2).

        Raises `ScpiError` -113 for an unknown header, -114 for a suffix on a node that has only one.
        """
        names, numbers = zip(*(_name_and_suffix(node) for node in nodes), strict=True)
        entry = self._spellings.get(names)
        if entry is None:
            raise ScpiError(-113, ":".join(nodes))
        command, suffixed = entry
        for index, number in enumerate(numbers):
            if index != suffixed and number != 1:
                raise ScpiError(-114, ":".join(nodes))
        return command, numbers[suffixed] if suffixed >= 0 else 1


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
