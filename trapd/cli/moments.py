"""``--since``: a while ago, or a time."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta

from trapd.errors import BadRequest

_AGO = re.compile(r"(?P<number>[0-9]+(\.[0-9]+)?) ?(?P<unit>s|min|h|d)")
_SECONDS = {"s": 1, "min": 60, "h": 3600, "d": 86400}


def read_moment(text: str, now: datetime) -> datetime:
    """``90 s``, ``30min``, ``1h`` and ``2d`` before ``now``, or a time such as 2026-03-01T12:00:00Z (without offset: local)."""
    ago = _AGO.fullmatch(text)
    try:
        if ago is not None:
            return now - timedelta(seconds=float(ago["number"]) * _SECONDS[ago["unit"]])
        return datetime.fromisoformat(text).astimezone(UTC)
    except (ValueError, OverflowError):
        raise BadRequest(
            f'--since "{text}": expected a while such as 1h, or a time such as 2026-03-01T12:00:00Z'
        ) from None


def microseconds(moment: datetime) -> int:
    return (moment - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1)
