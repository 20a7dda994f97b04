"""``trapd record``: what was asked, judged, sent and read back."""

from __future__ import annotations

import sys
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import click

from trapd.cli.answer import examples, json_option, tell_json, wants_json
from trapd.cli.daemon import daemon_option, not_both
from trapd.cli.moments import read_moment
from trapd.cli.sources import Asked, DaemonSource, FileSource, Row, Rows, Source
from trapd.errors import BadRequest


@click.command(
    "record",
    short_help="What was asked, judged, sent and read back.",
    epilog=examples(
        "trapd record --since 1h",
        "trapd record --kind request --who ada --limit 5",
        "trapd record --setpoints --since 10min --json",
        "trapd record --file trapd.sqlite --refused",
        "trapd record --file trapd.sqlite --export csv setpoints.csv",
    ),
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
@json_option
@daemon_option
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
    """The record, newest last: every entry, or with --setpoints what was sent, with --refused what was not.

    Asks the running daemon, or a file with --file, also while a daemon writes it. Times are UTC.
    """
    not_both(file, at)
    if setpoints and refused:
        raise BadRequest("--setpoints and --refused are two different tables; choose one")
    if kind and (setpoints or refused):
        raise BadRequest("--kind narrows entries; leave out --setpoints and --refused")
    if export is not None:
        _export(file, *export)
        return
    moment = None if since is None else read_moment(since, datetime.now(UTC))
    asked = Asked(limit=limit, kind=kind, who=who, since=moment)
    source: Source = FileSource(file) if file is not None else DaemonSource(at)
    if setpoints:
        _tell("setpoints", source.setpoints(asked), _show_setpoints)
    elif refused:
        _tell("refusals", source.refusals(asked), _show_refusals)
    else:
        _tell("entries", source.entries(asked), _show_entries)


def _tell(name: str, rows: Rows, show: Callable[[Rows], None]) -> None:
    if wants_json():
        tell_json({name: rows})
    elif rows:
        show(rows)
    else:
        click.echo("nothing in the record matches")


def _show_entries(rows: Rows) -> None:
    from trapd.cli.entries import sentence
    from trapd.cli.terminal import table

    heading, times = _times(rows)
    lines = [(str(one["seq"]), times(one), one["actor"], one["kind"], sentence(one)) for one in rows]
    table((">entry", heading, "who", "kind", "what"), lines)


def _show_setpoints(rows: Rows) -> None:
    from trapd.cli.amounts import value_of
    from trapd.cli.terminal import table

    heading, times = _times(rows)
    lines = []
    for one in rows:
        output = one["quantity"] == "output"
        value, back = (
            _on_off(one[key]) if output else value_of(one["setpoint"], one[key]) for key in ("value", "readback")
        )
        error = f" ({one['error']})" if one["error"] else ""
        why = f"{one['who']}: {one['why']}{error}"
        lines.append((str(one["seq"]), times(one), one["setpoint"], value, back, one["state"], why))
    table((">entry", heading, "setpoint", ">value", ">read back", "state", "who: why"), lines)


def _show_refusals(rows: Rows) -> None:
    from trapd.cli.terminal import table

    heading, times = _times(rows)
    lines = [(str(one["seq"]), times(one), one["who"], one["rule"], _refused(one)) for one in rows]
    table((">entry", heading, "who", "rule", "what was refused"), lines)


def _times(rows: Rows) -> tuple[str, Callable[[Row], str]]:
    """Heading and cells of the column of times: to the millisecond, the day only once when it is all one day."""
    days = sorted({one["time"].partition("T")[0] for one in rows})
    one_day = len(days) == 1

    def cell(one: Row) -> str:
        day, _, clock = one["time"].partition("T")
        short = clock.rstrip("Z")[:12]
        return short if one_day else f"{day} {short}"

    return (f"UTC {days[0]}" if one_day else "UTC"), cell


def _refused(refusal: Row) -> str:
    return f"{refusal['message']} (asked because: {refusal['why']})" if refusal["why"] else str(refusal["message"])


def _on_off(value: float | None) -> str:
    return "-" if value is None else "on" if value else "off"


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
    if wants_json():
        tell_json({"rows": rows, "format": form, "path": str(path)})
    else:
        click.echo(f"{rows} rows to {path}")
