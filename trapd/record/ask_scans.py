"""Questions about scans: what was counted, what was found, what was due."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, TypeVar

from sqlalchemy import Select, Table, func, select

from trapd.record.reading import MANY, OpenRecord, between, matching
from trapd.record.tables import due_runs, scan_points, scans, secular_frequencies

_Row = TypeVar("_Row")


@dataclass(frozen=True, kw_only=True)
class ScanPoint:
    """A row of `scan_points`: ``counts`` in ``dwell_s`` around ``at_us`` (UTC), the tickle at ``frequency_hz`` and
    ``level_v`` (zero to peak, at the generator). ``frequency_hz`` None: the tickle was off."""

    seq: int
    request: int
    intent: int | None
    pass_number: int
    point: int
    frequency_hz: float | None
    level_v: float
    dwell_s: float
    counts: int
    at_us: int


@dataclass(frozen=True, kw_only=True)
class SecularFrequency:
    """A row of `secular_frequencies`. ``uncertainty_hz`` is standard; ``at_us`` is UTC; ``flags`` are names with a
    space between."""

    seq: int
    request: int
    finding: int
    scan: str
    species: str
    mode: str
    frequency_hz: float
    uncertainty_hz: float
    low_95_hz: float
    high_95_hz: float
    at_us: int
    predicted_hz: float
    predicted_uncertainty_hz: float
    width_hz: float
    contrast: float
    likelihood_ratio: float
    method: str
    fit_version: str
    calibration: int | None
    flags: str
    points: int
    who: str
    why: str


@dataclass(frozen=True, kw_only=True)
class MadeScan:
    """A scan that began, named by the entry of its request, and how it ended: a row of the view `scans`.

    ``state`` is that of its ``finding`` ("found", "none", ...); without one "stopped" or "failed"; "unknown" while it
    runs, and for good where it was cut off. What nobody said is None; ``flags`` as above.
    """

    seq: int
    time_us: int
    scan: str | None
    mode: str | None
    species: str | None
    state: str
    frequency_hz: float | None
    uncertainty_hz: float | None
    predicted_hz: float | None
    min_contrast: float | None
    message: str | None
    flags: str
    who: str
    why: str
    finding: int | None


@dataclass(frozen=True, kw_only=True)
class DueRun:
    """A row of `due_runs`: what became of ``due_us`` (UTC). ``state``: "run", "late", "skipped" or "missed"."""

    seq: int
    schedule: str
    scan: str
    due_us: int
    state: str
    late_s: float
    request: int | None
    reason: str


class ScanQuestions(OpenRecord):
    """The part of `Reader` that is about scans."""

    def scan_points(self, request: int) -> tuple[ScanPoint, ...]:
        """All of one scan, in the order they were counted."""
        query = _of(ScanPoint, scan_points).where(scan_points.c.request == request).order_by(scan_points.c.seq)
        with self.reading() as connection:
            return tuple(ScanPoint(**row._mapping) for row in connection.execute(query))

    def secular_frequencies(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        scan: str | None = None,
        species: str | None = None,
        mode: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[SecularFrequency, ...]:
        """At most ``limit`` beyond seq ``after``, in order: the first ones, or with ``newest`` the last. Times: `at_us`."""
        query = matching(
            _of(SecularFrequency, secular_frequencies), secular_frequencies, scan=scan, species=species, mode=mode
        )
        query = between(query, secular_frequencies.c.at_us, since_us, until_us)
        return self._rows_of(SecularFrequency, query, secular_frequencies, after, limit, newest)

    def scans(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        scan: str | None = None,
        state: str | None = None,
        who: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[MadeScan, ...]:
        """As `secular_frequencies`, every scan that began; times are those of the requests."""
        query = matching(_of(MadeScan, scans), scans, scan=scan, state=state, who=who)
        query = between(query, scans.c.time_us, since_us, until_us)
        return self._rows_of(MadeScan, query, scans, after, limit, newest)

    def due_runs(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        schedule: str | None = None,
        state: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[DueRun, ...]:
        """As `secular_frequencies`; times are those at which the runs were due."""
        query = matching(_of(DueRun, due_runs), due_runs, schedule=schedule, state=state)
        query = between(query, due_runs.c.due_us, since_us, until_us)
        return self._rows_of(DueRun, query, due_runs, after, limit, newest)

    def newest_due(self, schedule: str) -> int | None:
        """The latest time, in UTC microseconds, of which it is recorded what became of it; None before the first."""
        with self.reading() as connection:
            query = select(func.max(due_runs.c.due_us)).where(due_runs.c.schedule == schedule)
            newest_us: int | None = connection.execute(query).scalar_one()
        return newest_us

    def _rows_of(
        self, row: type[_Row], query: Select[Any], table: Table, after: int, limit: int, newest: bool
    ) -> tuple[_Row, ...]:
        rows = self.page(query.where(table.c.seq > after), table, limit, newest)
        return tuple(row(**found._mapping) for found in rows)


def _of(row: Any, table: Table) -> Select[Any]:
    return select(*(table.c[name] for name in row.__dataclass_fields__))
