"""Stretches of one setpoint, and what ends them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import isfinite
from typing import Literal

from trapd.physics.point import FREQUENCY
from trapd.physics.trap import Trap


@dataclass(frozen=True, kw_only=True)
class Edge:
    """What ends an interval: the searched range ("limit"), the first region's ``edge`` "beta = 0" or "beta = 1", or a ``rule``
    ("min_secular_frequency", "min_depth"); ``mode`` is the axis that dominates the motion that is lost."""

    kind: Literal["limit", "edge", "rule"]
    species: str | None = None
    mode: str | None = None
    edge: str | None = None
    rule: str | None = None


@dataclass(frozen=True, kw_only=True)
class Interval:
    """Closed; at an end that is an edge the motion is just lost."""

    low: float
    high: float
    low_by: Edge
    high_by: Edge


LIMIT = Edge(kind="limit")


def intersect(a: Sequence[Interval], b: Sequence[Interval]) -> list[Interval]:
    """Overlaps of two ascending lists, each end with its own reason. Intervals that share one point only do not overlap, unless
    one of them is a point: the whole range of a setpoint that cannot move."""
    found = []
    for one in a:
        for other in b:
            lower = one if one.low >= other.low else other
            upper = one if one.high <= other.high else other
            a_point = one.low == one.high or other.low == other.high
            if lower.low < upper.high or (a_point and lower.low == upper.high):
                found.append(Interval(low=lower.low, high=upper.high, low_by=lower.low_by, high_by=upper.high_by))
    return found


def whole_range(trap: Trap, setpoint: str, low: float, high: float) -> list[Interval]:
    """[low, high] as one interval. ValueError when there is no such setpoint or range."""
    if setpoint not in trap.setpoints:
        raise ValueError(f"there is no setpoint {setpoint!r}; this trap has {', '.join(trap.setpoints)}")
    if not (isfinite(low) and isfinite(high) and low <= high):
        raise ValueError(f"the range of {setpoint} from {low} to {high} is none")
    if setpoint == FREQUENCY and not low > 0:
        raise ValueError(f"the range of {FREQUENCY} must begin above 0 Hz, not at {low}")
    return [Interval(low=low, high=high, low_by=LIMIT, high_by=LIMIT)]
