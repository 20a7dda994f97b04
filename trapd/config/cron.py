"""When a scan is due: five fields in UTC, taken only where all programs that know such fields read them alike."""

from __future__ import annotations

from dataclasses import dataclass

_MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
_LONGEST = (31, 29, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)
_WEEKDAYS = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")


@dataclass(frozen=True, kw_only=True)
class _Field:
    what: str
    low: int
    high: int
    names: tuple[str, ...] = ()


_FIELDS = (
    _Field(what="minute", low=0, high=59),
    _Field(what="hour", low=0, high=23),
    _Field(what="day of the month", low=1, high=31),
    _Field(what="month", low=1, high=12, names=_MONTHS),
    _Field(what="weekday", low=0, high=6, names=_WEEKDAYS),
)


def wanted_instead(cron: str) -> str | None:
    """What should stand there in place of ``cron``; None where it is right."""
    words = cron.split()
    if len(words) != len(_FIELDS):
        return 'five fields in UTC, minute hour day month weekday, such as "*/30 * * * *"'
    day, month, weekday = words[2:]
    if any(letter.isdigit() for letter in weekday):
        return f'weekdays by name, mon to sun, not "{weekday}": programs disagree whether 0 is Monday or Sunday'
    for word, field in zip(words, _FIELDS, strict=True):
        if not all(_values(part, field) for part in word.split(",")):
            return f'{_wanted(field)}, not "{word}"'
    if day != "*" and weekday != "*":
        return "a day of the month or a weekday: programs disagree whether one of the two is enough or both must hold"
    first_day = min(min(_values(part, _FIELDS[2])) for part in day.split(","))
    months = {number for part in month.split(",") for number in _values(part, _FIELDS[3])}
    if first_day > max(_LONGEST[number - 1] for number in months):
        return "a day that one of its months has"
    return None


def _wanted(field: _Field) -> str:
    low, high = field.low, field.high
    if field.what == "weekday":
        return 'as the weekday "*" or mon to sun, "mon,thu", "mon-fri" (which begins the week)'
    names = f" or {field.names[0]} to {field.names[-1]}" if field.names else ""
    return f'as the {field.what} "*" or {low} to {high}{names}, "{low},{low + 2}", "{low}-{low + 8}", "*/2"'


def _values(part: str, field: _Field) -> range:
    """What ``part``, between two commas, stands for; nothing where it is wrong. Steps need a range of numbers: with
    names, or with a first value alone, some programs step, some ignore it, some refuse."""
    body, slash, step = part.partition("/")
    low, high = field.low, field.high
    if body != "*":
        first, dash, last = body.partition("-")
        last = last if dash else first
        if first.isdigit() is not last.isdigit() or (slash and not (dash and first.isdigit())):
            return range(0)
        low, high = _number(first, field), _number(last, field)
    every = _number(step) if slash else 1
    if not field.low <= low <= high <= field.high or every < 1 or (slash and every > high - low):
        return range(0)
    return range(low, high + 1, every)


def _number(text: str, field: _Field | None = None) -> int:
    """-1 where it is none."""
    if field and text in field.names:
        return field.low + field.names.index(text)
    return int(text) if text.isascii() and text.isdigit() and len(text) <= 2 else -1
