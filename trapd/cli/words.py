"""What people type, as values: ``endcaps=120V,rods=1V``, ``40Ca+=2``, ``30min``, ``18:00``."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from datetime import UTC, datetime, time, timedelta

from trapd.errors import BadRequest
from trapd.setpoint import Contents

_WHILE = re.compile(r"(?P<number>[0-9]+(\.[0-9]+)?) ?(?P<unit>s|min|h|d)")
_CLOCK = re.compile(r"[0-9]{1,2}:[0-9]{2}")
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
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
    try:
        while_ago = _while(text)
        return _time(text) if while_ago is None else now - while_ago
    except (ValueError, OverflowError):
        raise BadRequest(
            f'--since "{text}": expected a while such as 1h, or a time such as 2026-03-01T12:00:00Z'
        ) from None


def read_until(text: str, now: datetime) -> datetime:
    """``30min``, ``2h`` from ``now``; ``18:00``, the next one here; or a time as in `read_moment`. Raises `BadRequest`,
    also for what has passed."""
    try:
        ahead = _while(text)
        found = now + ahead if ahead is not None else _next(text, now) if _CLOCK.fullmatch(text) else _time(text)
    except (ValueError, OverflowError):
        raise BadRequest(
            f'--until "{text}": expected a while such as 30min, 18:00, or a time such as 2026-03-01T18:00:00Z'
        ) from None
    if found <= now:
        raise BadRequest(f'--until "{text}" has passed; nothing was sent')
    return found


def utc(time_us: int) -> str:
    """``2026-03-01 12:00:00 UTC``."""
    moment = _EPOCH + timedelta(microseconds=time_us)
    return f"{moment:%Y-%m-%d %H:%M:%S} UTC"


def _while(text: str) -> timedelta | None:
    found = _WHILE.fullmatch(text)
    return found and timedelta(seconds=float(found["number"]) * _SECONDS[found["unit"]])


def _time(text: str) -> datetime:
    return datetime.fromisoformat(text).astimezone(UTC)


def _next(text: str, now: datetime) -> datetime:
    here = now.astimezone()
    today = datetime.combine(here.date(), time.fromisoformat(text.zfill(5)))
    found = today.astimezone(UTC)
    return found if found > now else (today + timedelta(days=1)).astimezone(UTC)
