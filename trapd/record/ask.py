"""`Reader`: the questions people ask of a record, answered read-only beside a running daemon or from a file alone."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Select, and_, or_, select, tuple_

from trapd.errors import NotFound
from trapd.record.ask_scans import ScanQuestions
from trapd.record.entry import NO_DIGEST, Entry, Head, Stored, entry_of
from trapd.record.reading import MANY, between, matching
from trapd.record.tables import entries, intents, refusals, setpoints


@dataclass(frozen=True, kw_only=True)
class Commanded:
    """An intent with what came of it: a row of the view `setpoints`.

    ``value``, ``readback`` and ``difference`` are in ``unit``; ``level`` is what the instrument was told, of the
    ``quantity`` named. ``state`` is "unknown" and ``outcome`` None while nothing is known of it.
    """

    seq: int
    time_us: int
    setpoint: str
    value: float
    unit: str
    state: str
    readback: float | None
    difference: float | None
    error: str | None
    instrument: str
    channel: int | None
    quantity: str
    level: float
    who: str
    why: str
    request: int | None
    verdict: int | None
    ramp: int | None
    step: int | None
    outcome: int | None
    sent_us: int | None
    acknowledged_us: int | None
    verified_us: int | None


@dataclass(frozen=True, kw_only=True)
class Refusal:
    """One rule that failed in a verdict that was not accepted; or, with the rule "conflict" and without numbers, why a
    request did not come as far as one: a row of the view `refusals`."""

    seq: int
    time_us: int
    request: int | None
    who: str
    why: str
    rule: str
    quantity: str | None
    unit: str | None
    found: float | None
    bound: float | None
    nearest: float | None
    species: str | None
    mode: str | None
    message: str


@dataclass(frozen=True, kw_only=True)
class State:
    """What had been commanded at the end of entry ``seq``, newest command of each setpoint and of each output.

    ``setpoints`` and ``outputs`` (quantity "output": 1 on, 0 off) are keyed by the setpoint's name. Intents that were
    certainly not sent do not count; unknown ones do. ``contents`` is the newest entry that says what is in the trap.
    """

    seq: int
    setpoints: Mapping[str, Commanded]
    outputs: Mapping[str, Commanded]
    contents: Entry | None


class Reader(ScanQuestions):
    """Read-only. Safe to use from several threads; each call sees the record at one moment."""

    def head(self) -> Head:
        """Seq and digest of the newest entry."""
        with self.reading() as connection:
            newest = select(entries.c.seq, entries.c.digest).order_by(entries.c.seq.desc()).limit(1)
            return Head(*(connection.execute(newest).one_or_none() or (0, NO_DIGEST)))

    def entry(self, seq: int) -> Entry:
        """Raises `NotFound`."""
        with self.reading() as connection:
            row = connection.execute(select(entries).where(entries.c.seq == seq)).one_or_none()
        if row is None:
            raise NotFound(f"there is no entry {seq} in {self.path}")
        return entry_of(Stored(*row))

    def entries(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        kind: str | None = None,
        actor: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Entry, ...]:
        """At most ``limit`` entries beyond seq ``after``, in order: the first ones, or with ``newest`` the last."""
        query = select(entries).where(entries.c.seq > after)
        query = matching(query, entries, kind=kind, actor=actor)
        query = between(query, entries.c.time_us, since_us, until_us)
        return tuple(entry_of(Stored(*row)) for row in self.page(query, entries, limit, newest))

    def setpoints(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        setpoint: str | None = None,
        state: str | None = None,
        who: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Commanded, ...]:
        """Intents and what came of them, in order of seq; times are those of the intents."""
        query = _commanded().where(setpoints.c.seq > after)
        query = matching(query, setpoints, setpoint=setpoint, state=state, who=who)
        query = between(query, setpoints.c.time_us, since_us, until_us)
        return tuple(Commanded(**row._mapping) for row in self.page(query, setpoints, limit, newest))

    def refusals(
        self,
        *,
        after: int = 0,
        limit: int = MANY,
        who: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Refusal, ...]:
        """One for each rule that failed, in order of the seq of what said so."""
        query = select(*(refusals.c[name] for name in Refusal.__dataclass_fields__)).where(refusals.c.seq > after)
        query = between(matching(query, refusals, who=who), refusals.c.time_us, since_us, until_us)
        return tuple(Refusal(**row._mapping) for row in self.page(query, refusals, limit, newest))

    def state_at(self, *, seq: int | None = None, time_us: int | None = None) -> State:
        """What had been commanded by entry ``seq``, by ``time_us``, or by now."""
        with self.reading() as connection:
            until = _last_seq(connection, seq, time_us)
            commanded = [
                newest
                for setpoint, quantity in _commanded_quantities(connection)
                if (newest := _newest(connection, setpoint, quantity, until)) is not None
            ]
            contents = _contents(connection, until)
        in_order = sorted(commanded, key=lambda command: command.seq)
        return State(
            seq=until,
            setpoints={command.setpoint: command for command in in_order if command.quantity != "output"},
            outputs={command.setpoint: command for command in in_order if command.quantity == "output"},
            contents=contents,
        )

    def last_commanded(self) -> State:
        """What had been commanded by now."""
        return self.state_at()

    def contents_at(self, *, seq: int | None = None, time_us: int | None = None) -> Entry | None:
        """The newest entry of kind "contents" by entry ``seq``, by ``time_us``, or by now."""
        with self.reading() as connection:
            return _contents(connection, _last_seq(connection, seq, time_us))


def _commanded() -> Select[Any]:
    return select(*(setpoints.c[name] for name in Commanded.__dataclass_fields__))


def _last_seq(connection: Connection, seq: int | None, time_us: int | None) -> int:
    """The newest entry by ``seq`` or by ``time_us``. Where the clock was set back, the later pass counts."""
    query = select(entries.c.seq)
    if time_us is not None:
        query = query.where(entries.c.time_us <= time_us).order_by(entries.c.time_us.desc())
    if seq is not None:
        query = query.where(entries.c.seq <= seq)
    return connection.execute(query.order_by(entries.c.seq.desc()).limit(1)).scalar() or 0


def _commanded_quantities(connection: Connection) -> Iterator[tuple[str, str]]:
    """Every (setpoint, quantity) ever commanded, by hops through the index: few, among millions of intents."""
    key = tuple_(intents.c.setpoint, intents.c.quantity)
    hop = select(intents.c.setpoint, intents.c.quantity).order_by(intents.c.setpoint, intents.c.quantity).limit(1)
    found = connection.execute(hop).one_or_none()
    while found is not None:
        yield found.setpoint, found.quantity
        found = connection.execute(hop.where(key > tuple_(*found))).one_or_none()


def _newest(connection: Connection, setpoint: str, quantity: str, until: int) -> Commanded | None:
    was_sent = and_(
        setpoints.c.setpoint == setpoint,
        setpoints.c.quantity == quantity,
        setpoints.c.seq <= until,
        or_(setpoints.c.state != "not sent", setpoints.c.outcome > until),
    )
    row = connection.execute(_commanded().where(was_sent).order_by(setpoints.c.seq.desc()).limit(1)).one_or_none()
    return None if row is None else Commanded(**row._mapping)


def _contents(connection: Connection, until: int) -> Entry | None:
    query = select(entries).where(entries.c.kind == "contents", entries.c.seq <= until)
    row = connection.execute(query.order_by(entries.c.seq.desc()).limit(1)).one_or_none()
    return None if row is None else entry_of(Stored(*row))
