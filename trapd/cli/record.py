"""``trapd record``: what was asked, judged, sent and read back."""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click

from trapd.cli.amounts import value_of
from trapd.cli.answer import Data, tell, wants_json
from trapd.cli.entries import sentence
from trapd.cli.options import at_option, command
from trapd.cli.terminal import FAINT, say, table
from trapd.cli.words import read_moment
from trapd.client import Client
from trapd.errors import BadRequest

Rows = list[dict[str, Any]]

_MOST = 1000
"""Verdicts looked through for refusals."""


@command(
    "trapd record --since 1h",
    "trapd record --kind request --who ada --limit 5",
    "trapd record --setpoints --since 10min --json",
    "trapd record --file trapd.sqlite --refused",
    "trapd record --file trapd.sqlite --export csv setpoints.csv",
)
@click.option("--file", type=click.Path(path_type=Path), help="Ask this record, not a daemon.")
@click.option("--since", metavar="WHEN", help="A while ago (90s, 30min, 1h, 2d), or a time.")
@click.option("--kind", metavar="KIND", help="Only entries of this kind.")
@click.option("--who", metavar="NAME", help="Only what this person or program did.")
@click.option(
    "--limit", type=click.IntRange(1, 1000), default=40, show_default=True, help="At most so many, the newest."
)
@click.option("--setpoints", is_flag=True, help="What was sent and what was read back.")
@click.option("--refused", is_flag=True, help="What was refused, and why.")
@click.option(
    "--export",
    type=(click.Choice(["csv", "jsonl"]), click.Path(path_type=Path)),
    metavar="FORMAT PATH",
    help="Copy all of it out: csv (what was sent and read back) or jsonl (every entry); - for standard output.",
)
@at_option
def record_command(
    file: Path | None,
    since: str | None,
    kind: str | None,
    who: str | None,
    limit: int,
    setpoints: bool,
    refused: bool,
    export: tuple[str, Path] | None,
    at: str | None,
) -> None:
    """What was asked, judged, sent and read back. The newest last: every entry, or with --setpoints what was sent, with
    --refused what was not.

    Asks the running daemon, or a file with --file, also while a daemon writes it. Times are UTC.
    """
    one_source(file, at)
    if setpoints and refused:
        raise BadRequest("--setpoints and --refused are two different tables; choose one")
    if kind and (setpoints or refused):
        raise BadRequest("--kind narrows entries; leave out --setpoints and --refused")
    if export is not None:
        _export(file, *export)
        return
    name = "setpoints" if setpoints else "refusals" if refused else "entries"
    moment = None if since is None else read_moment(since, datetime.now(UTC))
    asked: dict[str, Any] = {"kind": kind, "who": who, "limit": limit, "since": moment}
    rows = _from_daemon(at, name, **asked) if file is None else _from_file(file, name, **asked)
    tell({name: rows}, lambda _: _show(name, rows))
    if len(rows) == limit and not wants_json():
        say((f"the newest {limit}; --limit shows more", FAINT))


def one_source(file: Path | None, at: str | None) -> None:
    """A file is asked instead of a daemon."""
    if file is not None and at is not None:
        raise BadRequest("--file asks a file and --at a daemon; leave out --at, or leave out --file")


def _from_file(file: Path, name: str, *, kind: str | None, who: str | None, since: datetime | None, limit: int) -> Rows:
    """Rows in order, the newest last, every one with its ``seq`` and ``time`` (RFC 3339, UTC)."""
    from trapd.record import Reader, rfc3339

    asked: dict[str, Any] = {"limit": limit, "newest": True, "since_us": since and round(since.timestamp() * 1e6)}
    found: Sequence[Any]
    with Reader.open(file) as reader:
        if name == "entries":
            found = reader.entries(actor=who, kind=kind, **asked)
        else:
            found = (reader.setpoints if name == "setpoints" else reader.refusals)(who=who, **asked)
    return [{"seq": one.seq, "time": rfc3339(one.time_us), **asdict(one)} for one in found]


def _from_daemon(at: str | None, name: str, *, kind: str | None, who: str | None, limit: int, since: Any) -> Rows:
    """The same rows."""
    with Client(at) as client:
        if name == "entries":
            return client.entries(kind=kind, actor=who, limit=limit, since=since)
        if name == "setpoints":
            return client.setpoints(who=who, limit=limit, since=since)
        verdicts = client.entries(kind="verdict", actor=who, limit=_MOST, since=since)
        refused = [one for one in verdicts if not one["data"]["accepted"]][-limit:]
        rows = [row for one in refused for row in _refusals(one, client.entry(one["data"]["request"]))]
    return rows[-limit:]


def _refusals(verdict: Data, request: Data) -> Rows:
    """The rows that the record's own view `refusals` gives."""
    head = {key: verdict[key] for key in ("seq", "time", "time_us")}
    head |= {"request": request["seq"], "who": verdict["actor"], "why": request["data"]["why"]}
    return [{**head, **reason} for reason in verdict["data"]["reasons"]]


def _sent(one: Data) -> tuple[str, ...]:
    value, back = (_value(one, one[key]) for key in ("value", "readback"))
    error = f" ({one['error']})" if one["error"] else ""
    return one["setpoint"], value, back, one["state"], f"{one['who']}: {one['why']}{error}"


def _value(one: Data, value: float | None) -> str:
    if one["quantity"] != "output" or value is None:
        return value_of(one["setpoint"], value)
    return "on" if value else "off"


def _refused(one: Data) -> tuple[str, ...]:
    why = f" (asked because: {one['why']})" if one["why"] else ""
    return one["who"], one["rule"], f"{one['message']}{why}"


_TABLES: Mapping[str, tuple[tuple[str, ...], Callable[[Data], tuple[str, ...]]]] = {
    "entries": (("who", "kind", "what"), lambda one: (one["actor"], one["kind"], sentence(one))),
    "setpoints": (("setpoint", ">value", ">read back", "state", "who: why"), _sent),
    "refusals": (("who", "rule", "what was refused"), _refused),
}
"""By name: the columns beside entry and time, and a row's cells in them."""


def _show(name: str, rows: Rows) -> None:
    """Times to the millisecond, and the day only once when it is all one day."""
    if not rows:
        click.echo("nothing in the record matches")
        return
    columns, cells = _TABLES[name]
    days = sorted({one["time"].partition("T")[0] for one in rows})

    def time(one: Data) -> str:
        day, _, clock = one["time"].partition("T")
        short: str = clock.rstrip("Z")[:12]
        return short if len(days) == 1 else f"{day} {short}"

    heading = f"UTC {days[0]}" if len(days) == 1 else "UTC"
    table((">entry", heading, *columns), [(str(one["seq"]), time(one), *cells(one)) for one in rows])


def _export(file: Path | None, form: str, path: Path) -> None:
    """Never over an existing file: what was exported before is somebody's evidence."""
    if file is None:
        raise BadRequest("--export copies out a record file; name it with --file (`trapd check` prints where it is)")
    from trapd.record import Reader, export

    Reader.open(file).close()
    if str(path) == "-":
        rows = export(file, sys.stdout, form)
        click.echo(f"{rows} rows", err=True)
        return
    try:
        with path.open("x", encoding="utf-8", newline="" if form == "csv" else None) as out:
            rows = export(file, out, form)
    except FileExistsError:
        raise BadRequest(f"{path} exists already; nothing was exported") from None
    except OSError as error:
        raise BadRequest(f"{path}: {error.strerror}; nothing was exported") from error
    tell({"rows": rows, "format": form, "path": str(path)}, lambda _: click.echo(f"{rows} rows to {path}"))
