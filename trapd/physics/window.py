"""All values of one setpoint for which an ion is held, the other setpoints at rest: exact, closed intervals.

Every edge is an eigenvalue (`pencil`), so the stretches between two neighbouring candidates are either held or not as a whole
and one test in the middle decides (`krein.room`). Ends are then polished on the reduced condition itself.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from trapd.physics.depth import depth_intervals as depth_intervals
from trapd.physics.edge import Side, polish
from trapd.physics.equation import Indices, at_rest, coefficients, independent_axes, per_volt, stacked
from trapd.physics.interval import LIMIT as LIMIT
from trapd.physics.interval import Edge as Edge
from trapd.physics.interval import Interval as Interval
from trapd.physics.interval import intersect as intersect
from trapd.physics.interval import whole_range
from trapd.physics.krein import room
from trapd.physics.pencil import Line, crossings
from trapd.physics.point import FREQUENCY, Point
from trapd.physics.species import Species
from trapd.physics.trap import AXES, Trap

_TOUCHING = 1e-8  # of the room in their middles: two held stretches that meet with less are kept apart
_ZERO = 1e-13  # of the range
_NARROWEST = 1e-13  # of the value: a stretch between two edges closer than their rounding is none


@dataclass(frozen=True, kw_only=True)
class _Stretch:
    row: int
    low: float
    high: float
    room: float  # of its middle


@dataclass(frozen=True, kw_only=True)
class _End:
    value: float
    side: Side | None  # None: the searched range ends here
    axis: int


@dataclass(frozen=True, kw_only=True)
class _Span:
    row: int
    low: _End
    high: _End


def stable_intervals(
    trap: Trap,
    species: Species,
    points: Sequence[Point],
    setpoint: str,
    low: float,
    high: float,
    *,
    min_secular_hz: float | None = None,
) -> list[list[Interval]]:
    """For each point all maximal intervals of ``setpoint`` in [low, high], ascending, in which the species is held in the first
    region (damped: decays, no mode past its first locking) and every secular frequency is ``min_secular_hz`` or more, the
    point's other setpoints as they are. Good to 1e-12 of the value.
    """
    whole = whole_range(trap, setpoint, low, high)
    if not points:
        return []
    c = coefficients(trap, species, [at_rest(point, setpoint) for point in points], min_secular_hz)
    slopes = per_volt(trap, species, points, setpoint)
    result = [whole] * len(points)
    frequencies = np.array([point.frequency_hz for point in points], dtype=float)
    for blocks in independent_axes(c.a, c.q, *slopes):
        line = Line(
            c=c.stacked(blocks),
            frequency_hz=np.tile(frequencies, len(blocks)) if setpoint == FREQUENCY else None,
            a_slope=stacked(slopes[0], blocks),
            q_slope=stacked(slopes[1], blocks),
            low=np.full(len(blocks) * len(points), float(low)),
            high=np.full(len(blocks) * len(points), float(high)),
        )
        for index, spans in enumerate(_held(line)):
            axes, row = blocks[index // len(points)], index % len(points)
            result[row] = intersect(result[row], [_interval(span, species.name, axes) for span in spans])
    return result


def _held(line: Line) -> list[list[_Span]]:
    """Of every row of the line the maximal held stretches, their ends exact."""
    clipped, fixed = line.clipped(), line.high == line.low
    rows = np.flatnonzero((clipped.high > clipped.low) | fixed)
    result: list[list[_Span]] = [[] for _ in line.low]
    if not len(rows):
        return result
    cut = replace(clipped, low=np.where(fixed, line.low, clipped.low), high=np.where(fixed, line.high, clipped.high))
    near = cut[rows]
    nodes = _nodes(near)
    ends = [(row, low, high) for row, each in enumerate(nodes) for low, high in pairwise(each)]
    row = np.array([one[0] for one in ends])
    margin, counted = room(near[row].at(np.array([(low + high) / 2 for _, low, high in ends])))
    stretches = [
        _Stretch(row=row, low=low, high=high, room=space)
        for (row, low, high), space, counts in zip(ends, margin.tolist(), counted, strict=True)
        if counts and space > 0
    ]
    spans = _merged(near, stretches)
    for span in _exact(line[rows], spans):
        result[rows[span.row]].append(span)
    return result


def _nodes(line: Line) -> list[list[float]]:
    """Ends of the stretches of every row: its range and the candidates inside, those closer than their rounding as one."""
    nodes = [[low, high] for low, high in zip(line.low.tolist(), line.high.tolist(), strict=True)]
    moved = np.flatnonzero(line.moves & (line.high > line.low))
    if len(moved):
        low, high = line.low[moved, None], line.high[moved, None]
        values = crossings(line[moved])
        values[np.abs(values) < _ZERO * np.maximum(-low, high)] = 0.0  # where two edges meet at 0 V
        step = np.diff(values, axis=1, prepend=low)
        apart = step > _NARROWEST * np.maximum(np.abs(values), 1e-3 * (high - low))
        for index, row, kept in zip(moved, values, apart, strict=True):
            nodes[index][1:1] = row[kept].tolist()
    return nodes


def _merged(line: Line, stretches: Sequence[_Stretch]) -> list[_Stretch]:
    """Maximal runs of held stretches; two that only touch (a mode is lost at one point) stay apart."""
    meet = [
        index
        for index, (before, after) in enumerate(pairwise(stretches), start=1)
        if (after.row, after.low) == (before.row, before.high)
    ]
    row = np.array([stretches[i].row for i in meet], dtype=np.intp)
    through: set[int] = set()
    if meet:
        margin = room(line[row].at(np.array([stretches[i].low for i in meet])))[0]
        least = np.array([min(stretches[i].room, stretches[i - 1].room) for i in meet])
        through = {i for i, free in zip(meet, margin > _TOUCHING * least, strict=True) if free}
    runs: list[_Stretch] = []
    for index, stretch in enumerate(stretches):
        if index in through:
            runs[-1] = replace(runs[-1], high=stretch.high)  # its room is of no more use
        else:
            runs.append(stretch)
    return runs


def _exact(line: Line, runs: Sequence[_Stretch]) -> list[_Span]:
    """Each end that is not the searched range's polished and explained."""
    row = np.array([run.row for run in runs for _ in range(2)], dtype=np.intp)
    value = np.array([end for run in runs for end in (run.low, run.high)])
    limit = np.column_stack([line.low, line.high])[row, np.arange(len(row)) % 2]
    ends: list[_End] = [_End(value=float(v), side=None, axis=0) for v in value]
    edges = np.flatnonzero(value != limit)
    if len(edges):
        exact, sides, axes = polish(line[row[edges]], value[edges])
        for index, edge in enumerate(edges):
            ends[edge] = _End(value=float(exact[index]), side=sides[index], axis=int(axes[index]))
    spans = [_Span(row=run.row, low=ends[2 * i], high=ends[2 * i + 1]) for i, run in enumerate(runs)]
    return [
        span for span, run in zip(spans, runs, strict=True) if span.low.value < span.high.value or run.low == run.high
    ]


def _interval(span: _Span, species: str, axes: Indices) -> Interval:
    low_by, high_by = (_edge(end, species, axes) for end in (span.low, span.high))
    return Interval(low=span.low.value, high=span.high.value, low_by=low_by, high_by=high_by)


def _edge(end: _End, species: str, axes: Indices) -> Edge:
    if end.side is None:
        return LIMIT
    mode = AXES[axes[end.axis]]
    if end.side is Side.WANTED:
        return Edge(kind="rule", species=species, mode=mode, rule="min_secular_frequency")
    return Edge(kind="edge", species=species, mode=mode, edge=(Side.ONE if end.side is Side.PAST else end.side).value)
