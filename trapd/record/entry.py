"""Entries and their chain: pure, no database.

An entry's *body* is canonical JSON of everything it says, the digest of the entry before it included; its *digest* is
SHA-256(0x00 || body), which is also a leaf hash of RFC 6962 (section 2.1). Every column of the record is re-derived
from the body, so the digest covers them all.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from typing import Any, NamedTuple

from trapd.errors import Bug, RecordDamaged
from trapd.record.typed import TypedRow, typed_row

KINDS = (
    "start",  # the daemon started: software, boot
    "configuration",  # the trap file in force
    "identity",  # what an instrument says it is
    "found",  # what the instruments held at a start, beside what was last commanded
    "contents",  # what is in the trap from here on
    "request",  # what somebody asked for
    "verdict",  # the guard's answer
    "ramp",  # the judged way of an accepted request
    "intent",  # one command about to be sent; typed table `intents`
    "outcome",  # what came of it; typed table `outcomes`
    "off",  # everything was switched off, by whom, and which instruments confirmed
    "result",  # how a request ended: done, stopped or failed
    "halt",  # somebody stopped what moved; the outputs hold
    "alarm",  # a condition that wants a person
    "token",  # an access token made or revoked
    "clock",  # the wall clock stepped against the monotonic clock
    "heartbeat",  # somebody watched and nothing happened
    "stop",  # the daemon stopped in order
    "plan",  # how a scan that was asked for will go about it
    "scan_point",  # what was counted at one frequency of a scan; typed table `scan_points`
    "estimate",  # what a scan makes of its points so far, after each pass
    "finding",  # what a scan found; view `scans`
    "secular_frequency",  # the frequency of a finding that found one; typed table `secular_frequencies`
    "due_run",  # what became of a time at which a scan was due; typed table `due_runs`
    "claim",  # somebody takes the trap for themselves, or gives it back
    "interlock",  # what an interlock makes of its gauge (warned, tripped, unreadable); or a person cleared it
    "pause",  # somebody stops the schedule, or lets it go on
)
"""The kinds in use. The record takes any other kind as well; `typed` says which have typed tables."""

NO_DIGEST = "0" * 64
"""What the first entry gives as its previous digest, and the head of an empty record."""

_STR = frozenset((str,))  # these very types, not what inherits from them
_SCALARS = frozenset((str, int, float, bool, type(None)))
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(frozen=True)
class SameCommit:
    """Stands in a draft's data for the seq of an earlier draft of the same append, counted from 0."""

    index: int


@dataclass(frozen=True, kw_only=True)
class Draft:
    """An entry not yet written. ``data`` is JSON-able with string keys and finite numbers."""

    kind: str
    actor: str
    data: Mapping[str, Any]


@dataclass(frozen=True, kw_only=True)
class Entry:
    """One entry as stored. ``time_us`` is UTC microseconds; ``digest`` is in hexadecimal."""

    seq: int
    time_us: int
    monotonic_ns: int
    boot_id: str
    kind: str
    actor: str
    data: Mapping[str, Any]
    digest: str

    @property
    def time(self) -> str:
        """``time_us`` as UTC RFC 3339."""
        return rfc3339(self.time_us)


class Stored(NamedTuple):
    """A row of the table `entries`, in its column order."""

    seq: int
    time_us: int
    monotonic_ns: int
    boot_id: str
    kind: str
    actor: str
    body: str
    digest: str


class Sealed(NamedTuple):
    """A draft made ready for the chain: its parts as canonical JSON, the data as they read back, and the typed row."""

    kind: str
    actor: str
    kind_text: str
    actor_text: str
    data_text: str
    data: Mapping[str, Any]
    typed: TypedRow | None


class SeqsNeededError(Exception):
    """A draft with a `SameCommit` can be sealed only once its place is known."""


class Stamp(NamedTuple):
    """When and in which run of the kernel a commit is made."""

    time_us: int
    monotonic_ns: int
    boot_id: str


class Head(NamedTuple):
    """The newest entry of a chain; seq 0 and `NO_DIGEST` when there is none."""

    seq: int
    digest: str


def rfc3339(time_us: int) -> str:
    """UTC microseconds since the epoch as RFC 3339 with six decimals, e.g. ``2025-03-01T12:00:00.000000Z``."""
    moment = _EPOCH + timedelta(microseconds=time_us)
    return moment.isoformat(timespec="microseconds").replace("+00:00", "Z")


def canonical(value: object, earlier: Sequence[int] | None = None) -> str:
    """JSON with sorted keys, no spaces, no NaN or infinity; each `SameCommit` becomes its seq from ``earlier``.

    Raises ValueError or TypeError for what JSON cannot hold, `SeqsNeededError` for a `SameCommit` without ``earlier``.
    """
    return (_ENCODER if earlier is None else _encoder(earlier)).encode(value)


def _encoder(earlier: Sequence[int] | None) -> json.JSONEncoder:
    def plain(part: object) -> object:
        if isinstance(part, Mapping):
            return dict(part)
        if isinstance(part, SameCommit):
            if earlier is None:
                raise SeqsNeededError
            if 0 <= part.index < len(earlier):
                return earlier[part.index]
        raise TypeError(f"{part!r} is not JSON, nor an earlier draft of the same append")

    return json.JSONEncoder(sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False, default=plain)


_ENCODER = _encoder(None)


@lru_cache(maxsize=1024)
def _quoted(text: str) -> str:
    """A kind, actor or boot id as JSON: few, and in every entry."""
    return canonical(text)


def digest_of(body: bytes) -> str:
    """SHA-256(0x00 || body) in hexadecimal: the leaf hash of RFC 6962."""
    return hashlib.sha256(b"\x00" + body).hexdigest()


def seal(draft: Draft, earlier: Sequence[int] | None = None) -> Sealed:
    """Everything about ``draft`` that does not depend on its place. Raises `Bug` for what cannot be recorded.

    Nobody works with anything but the data as they read back from their text, which is what will be on the disk.
    """
    kind, actor = draft.kind, draft.actor
    try:
        if not kind or not actor:
            raise ValueError("kind and actor must not be empty")
        if not isinstance(draft.data, Mapping):
            raise TypeError("data must be a mapping")
        data = dict(sorted(draft.data.items()))
        text = canonical(data, earlier)
        text.encode()
        if not _is_plain(data):
            data = json.loads(text)
        return Sealed(kind, actor, _quoted(kind), _quoted(actor), text, data, typed_row(kind, actor, data))
    except (TypeError, ValueError) as error:
        raise Bug(f"an entry of kind {kind!r} cannot be recorded: {error}; nothing was written") from error


def _is_plain(data: dict[Any, Any]) -> bool:
    """Whether JSON gives back the very ``data``, sorted by key: intents and outcomes need not be parsed to know it."""
    return _STR.issuperset(map(type, data)) and _SCALARS.issuperset(map(type, data.values()))


def chain(parts: Sequence[Draft | Sealed], head: Head, stamp: Stamp) -> list[tuple[Stored, Entry, TypedRow | None]]:
    """Give drafts their place after ``head``. Raises `Bug` for a draft that cannot be recorded."""
    links: list[tuple[Stored, Entry, TypedRow | None]] = []
    first, previous = head.seq + 1, head.digest
    for seq, part in enumerate(parts, first):
        sealed = part if isinstance(part, Sealed) else seal(part, range(first, seq))
        body = (  # canonical: the keys are in order
            f'{{"actor":{sealed.actor_text},"boot_id":{_quoted(stamp.boot_id)},"data":{sealed.data_text},'
            f'"kind":{sealed.kind_text},"monotonic_ns":{stamp.monotonic_ns},"previous":"{previous}",'
            f'"seq":{seq},"time_us":{stamp.time_us}}}'
        )
        previous = digest_of(body.encode())
        stored = Stored(seq, *stamp, sealed.kind, sealed.actor, body, previous)
        links.append((stored, _entry(stored, sealed.data), sealed.typed))
    return links


def entry_of(stored: Stored) -> Entry:
    """The entry people see, from its row. Raises `RecordDamaged`."""
    return _entry(stored, body_of(stored)["data"])


def body_of(stored: Stored) -> dict[str, Any]:
    """The parsed body. Raises `RecordDamaged` when it is no entry's."""
    try:
        return _parsed(stored.body)
    except ValueError as error:
        raise RecordDamaged(f"the record is damaged at entry {stored.seq}: {error}; nothing more was read") from error


def _parsed(body: object) -> dict[str, Any]:
    """Raises ValueError, which says why it is no entry's."""
    if not isinstance(body, str):
        raise ValueError("its body is no text")
    try:
        parsed = json.loads(body)
    except (ValueError, RecursionError) as error:
        raise ValueError("its body is not JSON") from error
    if not isinstance(parsed, dict) or not isinstance(parsed.get("data"), dict):
        raise ValueError("its body is not an entry")
    return parsed


def _entry(stored: Stored, data: Mapping[str, Any]) -> Entry:
    return Entry(
        seq=stored.seq,
        time_us=stored.time_us,
        monotonic_ns=stored.monotonic_ns,
        boot_id=stored.boot_id,
        kind=stored.kind,
        actor=stored.actor,
        data=data,
        digest=stored.digest,
    )


def faults_of(stored: Stored, previous: Head) -> tuple[list[str], dict[str, Any]]:
    """What is wrong with a stored entry that follows ``previous``, and its parsed body (empty if it is no entry's)."""
    faults = []
    if stored.seq != previous.seq + 1:
        faults.append(f"follows entry {previous.seq}: {stored.seq - previous.seq - 1} missing between them")
    if isinstance(stored.body, str) and digest_of(stored.body.encode("utf-8", "surrogateescape")) != stored.digest:
        faults.append("its digest is not that of its body: one of them was changed")
    try:
        body = _parsed(stored.body)
    except ValueError as error:
        return [*faults, str(error)], {}
    if body.get("previous") != previous.digest:
        faults.append(f"its previous digest is not that of entry {previous.seq}")
    faults += [
        f"column {name} is {found!r}, its body says {body.get(name)!r}"
        for name, found in stored._asdict().items()
        if name not in ("body", "digest") and not same(found, body.get(name))
    ]
    return faults, body


def same(found: object, expected: object) -> bool:
    """Equal in value and in type: True is not 1, 1 is not 1.0."""
    return type(found) is type(expected) and found == expected
