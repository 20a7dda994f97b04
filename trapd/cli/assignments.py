"""What people type: ``endcaps=120V`` and ``40Ca+=2``."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from trapd.errors import BadRequest
from trapd.setpoint import Contents


def split_list(words: Iterable[str]) -> list[str]:
    """Words that may hold several assignments, with commas between them."""
    return [part.strip() for word in words for part in word.split(",") if part.strip()]


def read_contents(words: Sequence[str]) -> Contents:
    """``40Ca+=2 88Sr+``, ``none``, ``unknown`` or ``loading 40Ca+``; a species without a number is one ion."""
    parts = " ".join(words).replace(",", " ").split()
    if not parts:
        raise BadRequest("say what is in the trap: 40Ca+=2, none, unknown, or loading 40Ca+")
    first, *rest = parts
    if first in ("none", "unknown"):
        if rest:
            raise BadRequest(f'"{first}" stands alone, and "{rest[0]}" follows it')
        return Contents(presence="none" if first == "none" else "unknown")
    if first == "loading":
        if not rest or any("=" in part for part in rest):
            raise BadRequest('"loading" is followed by the species that come in, such as: loading 40Ca+')
        return Contents(presence="loading", incoming=tuple(rest))
    return Contents(presence="held", ions=_counts(parts))


def _counts(parts: Sequence[str]) -> dict[str, int]:
    ions: dict[str, int] = {}
    for part in parts:
        name, equals, text = part.partition("=")
        if not name or (equals and not (text.isascii() and text.isdigit() and int(text) > 0)):
            raise BadRequest(f'"{part}": expected a species and how many, such as 40Ca+=2')
        if name in ions:
            raise BadRequest(f'"{name}" is given twice')
        ions[name] = int(text) if equals else 1
    return ions
