"""The check before anything is sent: is the value inside the scale?"""

from __future__ import annotations

from trapd_drivers.errors import OutOfRange
from trapd_drivers.interfaces import Scale


def require_inside(resource: str, name: str, value: float, scale: Scale) -> None:
    """`OutOfRange` unless ``value`` is within ``scale``; not a number is outside of everything."""
    slack = 1e-6 * scale.resolution  # a limit that went through another unit is still the limit
    if not scale.low - slack <= value <= scale.high + slack:
        raise OutOfRange(
            f"{resource}: {name} = {value:.10g} is outside {scale.low:.10g} .. {scale.high:.10g}; nothing was sent"
        )
