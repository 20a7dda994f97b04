"""What comes in, decoded strictly: a string or a boolean is no number, and a number is finite."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, PlainValidator, WithJsonSchema

from trapd.setpoint import FREQUENCY, Contents, Presence

MOST_BYTES = 64 * 1024
"""Of a request's body."""

MOST_ENTRIES = 1000
_LARGEST_SEQ = 2**63 - 1
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)

# Printable: what people write ends up in tables, logs and terminals.
_TEXT = r"^[^\x00-\x1f\x7f-\x9f]*$"
_NOT_BLANK = r"^[^\x00-\x1f\x7f-\x9f]*[^\s\x00-\x1f\x7f-\x9f][^\x00-\x1f\x7f-\x9f]*$"
_TOKEN_NAME = r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$"
_DIGEST = r"^[0-9a-f]{64}$"
PATTERNS = {
    _TEXT: "expected printable text on one line",
    _NOT_BLANK: "expected printable text on one line, not blank",
    _TOKEN_NAME: "expected up to 64 letters, digits, dots, hyphens and underscores, the first a letter or digit",
    _DIGEST: "expected the 64 hexadecimal digits of a digest",
}
"""What each pattern wants, in words."""

# No trap goes beyond; and arithmetic on what is allowed here cannot overflow.
_LARGEST_NUMBER = 1e12
_LOWEST_FREQUENCY_HZ = 1.0


def _drivable(values: dict[str, float]) -> dict[str, float]:
    if values.get(FREQUENCY, _LOWEST_FREQUENCY_HZ) < _LOWEST_FREQUENCY_HZ:
        raise ValueError(f"expected {FREQUENCY} to be {_LOWEST_FREQUENCY_HZ:g} Hz at least")
    return values


Name = Annotated[str, Field(min_length=1, max_length=64, pattern=_TEXT)]
Why = Annotated[str, Field(max_length=500, pattern=_NOT_BLANK)]
HastyWhy = Annotated[str, Field(max_length=500, pattern=_TEXT)]
Number = Annotated[float, Field(ge=-_LARGEST_NUMBER, le=_LARGEST_NUMBER)]
Setpoints = Annotated[dict[Name, Number], Field(max_length=64), AfterValidator(_drivable)]
Ions = Annotated[dict[Name, Annotated[int, Field(ge=1, le=1_000_000)]], Field(max_length=64)]
Role = Literal["read", "operate", "administer"]


def _time_us(value: Any) -> int:
    """RFC 3339 as UTC microseconds since the epoch."""
    try:
        moment = datetime.fromisoformat(value)
    except (TypeError, ValueError):
        raise ValueError("expected a time such as 2025-03-01T12:00:00Z") from None
    if moment.tzinfo is None:
        raise ValueError("expected a time with its offset, such as 2025-03-01T12:00:00Z")
    return (moment - _EPOCH) // timedelta(microseconds=1)


def _seq_or_time_us(value: Any) -> dict[str, int]:
    """As `Reader.state_at` takes it."""
    if isinstance(value, str) and value.isascii() and value.isdigit():
        if len(value) > len(str(_LARGEST_SEQ)) or int(value) > _LARGEST_SEQ:
            raise ValueError(f"expected an entry number up to {_LARGEST_SEQ}")
        return {"seq": int(value)}
    return {"time_us": _time_us(value)}


_TIME_SCHEMA = WithJsonSchema({"type": "string", "format": "date-time"})
Time = Annotated[int, PlainValidator(_time_us), _TIME_SCHEMA]
Moment = Annotated[dict[str, int], PlainValidator(_seq_or_time_us), WithJsonSchema({"type": "string"})]
Seq = Annotated[int, Field(ge=0, le=_LARGEST_SEQ)]
Limit = Annotated[int, Field(ge=1, le=MOST_ENTRIES)]


class Body(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid", allow_inf_nan=False)


class Asked(BaseModel):
    """A query string: all of it is text, and nothing unknown is in it."""

    model_config = ConfigDict(extra="forbid")


class JudgeBody(Body):
    """``values`` where they differ from the present ones; with ``from`` the way from there is judged as well.

    ``ions``: as if these were held, an empty object for an empty trap; left out: what is in the trap now.
    """

    values: Setpoints
    from_: Setpoints | None = Field(default=None, alias="from")
    ions: Ions | None = None


class WindowBody(Body):
    values: Setpoints = Field(default_factory=dict)
    ions: Ions | None = None


class MoveBody(Body):
    """``interrupt``: stop what runs for somebody else, and go over somebody else's claim."""

    why: Why
    interrupt: bool = False


class SetBody(MoveBody):
    values: Annotated[Setpoints, Field(min_length=1)]


class GoBody(MoveBody):
    point: Name


class OnBody(MoveBody):
    """``point``: the first of the trap file when left out."""

    point: Name | None = None


class EmptyBody(MoveBody):
    """``point``: where to go afterwards; back to where it was when left out."""

    point: Name | None = None
    stay_off: bool = False


class IonsBody(MoveBody):
    presence: Presence
    ions: Ions = Field(default_factory=dict)
    incoming: Annotated[list[Name], Field(max_length=64)] = Field(default_factory=list)

    @property
    def contents(self) -> Contents:
        return Contents(presence=self.presence, ions=self.ions, incoming=tuple(self.incoming))


class OffBody(Body):
    why: HastyWhy = ""


class ScanBody(Body):
    """``scan``: its name in the trap file. ``interrupt`` as in a move."""

    scan: Name
    why: HastyWhy = ""
    interrupt: bool = False


class ClearBody(Body):
    interlock: Name
    why: Why


class ClaimBody(MoveBody):
    """``until``: no end when left out."""

    until: Time | None = None


class ReleaseBody(Body):
    """``interrupt``: also release what somebody else claimed."""

    why: HastyWhy = ""
    interrupt: bool = False


class PauseBody(Body):
    why: Why
    until: Time


class ResumeBody(Body):
    why: HastyWhy = ""


class TokenBody(Body):
    name: Annotated[str, Field(pattern=_TOKEN_NAME)]
    role: Role


class AskedPage(Asked):
    """In order, the newest last: those after ``after``, or without it the last ones."""

    after: Seq | None = None
    limit: Limit = 100
    since: Time | None = None
    until: Time | None = None

    def as_question(self) -> dict[str, Any]:
        """As the questions of `Reader` take it, what narrows the listing included."""
        page = {"after": self.after or 0, "newest": self.after is None, "limit": self.limit}
        narrowed = self.model_dump(exclude={"after", "limit", "since", "until"})
        return {**page, "since_us": self.since, "until_us": self.until, **narrowed}


class AskedEntries(AskedPage):
    kind: Name | None = None
    actor: Name | None = None


class AskedSetpoints(AskedPage):
    setpoint: Name | None = None
    state: Name | None = None
    who: Name | None = None


class AskedFrequencies(AskedPage):
    scan: Name | None = None
    species: Name | None = None
    mode: Literal["x", "y", "z"] | None = None


class AskedScans(AskedPage):
    """Of those made."""

    scan: Name | None = None
    state: Name | None = None
    who: Name | None = None


class AskedDue(AskedPage):
    schedule: Name | None = None
    state: Literal["run", "late", "skipped", "missed"] | None = None


class AskedState(Asked):
    at: Moment | None = None


class AskedStream(Asked):
    after: Seq | None = None


class AskedVerify(Asked):
    """``head``: the digest of an entry, noted elsewhere, that must be in the record."""

    head: Annotated[str, Field(pattern=_DIGEST)] | None = None
