"""What people type, as values: ``endcaps=120V,rods=1V``, ``40Ca+=2``, ``30min``."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from datetime import UTC, datetime, timedelta

from trapd.errors import BadRequest
from trapd.setpoint import Contents

_AGO = re.compile(r"(?P<number>[0-9]+(\.[0-9]+)?) ?(?P<unit>s|min|h|d)")
_SECONDS = {"s": 1, "min": 60, "h": 3600, "d": 86400}


def split_list(words: Iterable[str]) -> list[str]:
    """Words that may hold several assignments, with commas between them."""
    words = list(words)
    for word in words:
        if re.search(r"=\s*[-+]?\d+,\d", word):
            raise BadRequest(f'"{word}" has a decimal comma; expected a decimal point; nothing was sent')
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
    ions: dict[str, int] = {}
    for part in parts:
        name, equals, text = part.partition("=")
        if not name or (equals and not (text.isascii() and text.isdigit() and int(text) > 0)):
            raise BadRequest(f'"{part}": expected a species and how many, such as 40Ca+=2')
        if name in ions:
            raise BadRequest(f'"{name}" is given twice')
        ions[name] = int(text) if equals else 1
    return Contents(presence="held", ions=ions)


def read_moment(text: str, now: datetime) -> datetime:
    """``90 s``, ``30min``, ``1h``, ``2d`` before ``now``, or a time such as 2026-03-01T12:00:00Z (without offset: local)."""
    ago = _AGO.fullmatch(text)
    try:
        if ago is not None:
            return now - timedelta(seconds=float(ago["number"]) * _SECONDS[ago["unit"]])
        return datetime.fromisoformat(text).astimezone(UTC)
    except (ValueError, OverflowError):
        raise BadRequest(
            f'--since "{text}": expected a while such as 1h, or a time such as 2026-03-01T12:00:00Z'
        ) from None
