"""``trapd record``: what was asked, judged, sent and read back."""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click

from trapd.cli.amounts import duration, hertz, value_of, with_uncertainty
from trapd.cli.answer import Data, tell, wants_json
from trapd.cli.entries import sentence
from trapd.cli.options import Command, at_option, command
from trapd.cli.rows import MOMENTS, from_daemon, from_file
from trapd.cli.terminal import FAINT, say, table
from trapd.cli.words import read_moment
from trapd.errors import BadRequest

_NAMES = {"refused": "refusals"}
"""What the rows of a view are called, where that is not how it is asked for."""

_EXPORTS = {"due": "due_times"}
"""The same for the record's own views."""


def _view(name: str, help: str) -> Callable[[Command], Command]:
    return click.option(f"--{name}", "views", flag_value=_NAMES.get(name, name), multiple=True, help=help)


@command(
    "trapd record --since 1h",
    "trapd record --kind request --who ada --limit 5",
    "trapd record --setpoints --since 10min --json",
    "trapd record --frequencies --since 30d",
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
@click.option("--points", is_flag=True, help="Also what belongs to single points of scans.")
@_view("setpoints", "What was sent and what was read back.")
@_view("refused", "What was refused, and why.")
@_view("scans", "Every scan that began, and how it ended.")
@_view("frequencies", "The secular frequencies that were measured.")
@_view("due", "What became of what was due.")
@click.option(
    "--export",
    type=(click.Choice(["csv", "jsonl"]), click.Path(path_type=Path)),
    metavar="FORMAT PATH",
    help="Copy all of it out, or the table named beside it: csv (alone: what was sent and read back) or jsonl (alone: "
    "every entry); - for standard output.",
)
@at_option
def record_command(
    file: Path | None,
    since: str | None,
    kind: str | None,
    who: str | None,
    limit: int,
    points: bool,
    views: tuple[str, ...],
    export: tuple[str, Path] | None,
    at: str | None,
) -> None:
    """What was asked, judged, sent and read back. The newest last: every entry, or one of the tables --setpoints (what was
    sent), --refused (what was not), --scans, --frequencies and --due.

    What belongs to single points of scans is left out without --points. Asks the running daemon, or a file with --file,
    also while a daemon writes it. Times are UTC.
    """
    one_source(file, at)
    view = _one_of(views, kind, who)
    if export is not None:
        _export(file, *export, view)
        return
    moment = None if since is None else read_moment(since, datetime.now(UTC))
    whole = points or bool(kind) or view not in ("entries", "setpoints")
    asked: dict[str, Any] = {"kind": kind, "who": who, "limit": limit, "since": moment, "points": whole}
    rows, left_out = from_daemon(at, view, **asked) if file is None else from_file(file, view, **asked)
    tell({view: rows, "left_out": left_out}, lambda _: _show(view, rows))
    if wants_json():
        return
    if left_out:
        say((f"{left_out} rows of single points of scans are left out; --points shows them", FAINT))
    if len(rows) == limit:
        say((f"the newest {limit}; --limit shows more", FAINT))


def _one_of(views: tuple[str, ...], kind: str | None, who: str | None) -> str:
    if len(views) > 1:
        raise BadRequest("--setpoints, --refused, --scans, --frequencies and --due are different tables; choose one")
    if kind and views:
        raise BadRequest("--kind narrows entries; leave it out, or leave out the table")
    if who and views and views[0] in MOMENTS:
        raise BadRequest(f"--who narrows other tables; leave it out, or leave out --{views[0]}")
    return views[0] if views else "entries"


def one_source(file: Path | None, at: str | None) -> None:
    """A file is asked instead of a daemon."""
    if file is not None and at is not None:
        raise BadRequest("--file asks a file and --at a daemon; leave out --at, or leave out --file")


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


def _found(one: Data) -> tuple[str, ...]:
    number = (one["message"] or "-").rstrip(".")
    if one["state"] == "found":
        number = with_uncertainty(one["frequency_hz"], one["uncertainty_hz"])
    return one["scan"], f"{one['mode']} of {one['species']}", one["state"], _flagged(number, one), _author(one)


def _measured(one: Data) -> tuple[str, ...]:
    off = hertz(one["frequency_hz"] - one["predicted_hz"], signed=True)
    number = with_uncertainty(one["frequency_hz"], one["uncertainty_hz"])
    return one["scan"], f"{one['mode']} of {one['species']}", number, _flagged(off, one), _author(one)


def _due(one: Data) -> tuple[str, ...]:
    late = duration(one["late_s"]) if one["state"] in ("run", "late") else "-"
    return one["schedule"], one["scan"], one["state"], late, str(one["request"] or "-"), one["reason"]


def _flagged(text: str, one: Data) -> str:
    return f"{text} ({one['flags'].replace(' ', ', ')})" if one["flags"] else text


def _author(one: Data) -> str:
    return f"{one['who']}: {one['why']}" if one["why"] else str(one["who"])


_TABLES: Mapping[str, tuple[tuple[str, ...], Callable[[Data], tuple[str, ...]]]] = {
    "entries": (("who", "kind", "what"), lambda one: (one["actor"], one["kind"], sentence(one))),
    "setpoints": (("setpoint", ">value", ">read back", "state", "who: why"), _sent),
    "refusals": (("who", "rule", "what was refused"), _refused),
    "scans": (("scan", "mode", "state", "what was found", "who: why"), _found),
    "frequencies": (("scan", "mode", "measured", "from the prediction", "who: why"), _measured),
    "due": (("schedule", "scan", "state", ">late", ">request", "reason"), _due),
}
"""By name: the columns beside entry and time, and a row's cells in them."""


def _show(name: str, rows: list[dict[str, Any]]) -> None:
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
    entry = "request" if name == "frequencies" else "seq"  # a scan is named by the entry of its request
    table((">entry", heading, *columns), [(str(one[entry]), time(one), *cells(one)) for one in rows])


def _export(file: Path | None, form: str, path: Path, view: str) -> None:
    """Never over an existing file: what was exported before is somebody's evidence."""
    if file is None:
        raise BadRequest("--export copies out a record file; name it with --file (`trapd check` prints where it is)")
    from trapd.record import EXPORTED, Reader, export

    table = None if view == "entries" else _EXPORTS.get(view, view)
    if table is not None and table not in EXPORTED:
        raise BadRequest(f"--{view} has no export; use its --json; nothing was exported")
    Reader.open(file).close()
    if str(path) == "-":
        rows = export(file, sys.stdout, form, table)
        click.echo(f"{rows} rows", err=True)
        return
    try:
        with path.open("x", encoding="utf-8", newline="" if form == "csv" else None) as out:
            rows = export(file, out, form, table)
    except FileExistsError:
        raise BadRequest(f"{path} exists already; nothing was exported") from None
    except OSError as error:
        raise BadRequest(f"{path}: {error.strerror}; nothing was exported") from error
    tell({"rows": rows, "format": form, "path": str(path)}, lambda _: click.echo(f"{rows} rows to {path}"))
