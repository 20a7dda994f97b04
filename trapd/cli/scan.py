"""``trapd scan``: measure a secular frequency and watch it converge."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryFile
from typing import Any

import click

from trapd.cli.answer import INTERRUPTED, Data, tell_error, tell_json, wants_json
from trapd.cli.finding import show_finding
from trapd.cli.moves import fate
from trapd.cli.options import at_option, command, hasty_why_option, interrupt_option
from trapd.cli.spectrum import COLUMNS, MARGIN, Picture
from trapd.cli.terminal import BAD, console, is_terminal, say
from trapd.cli.verdicts import tell_refusal
from trapd.client import Client, JsonEntry
from trapd.errors import BadRequest, GuardRefused, NotConfirmed, Superseded, TrapdError

STOPPED = "the scan was stopped, its tickle goes off; every output holds"
OVER = "the scan had ended already; `trapd record --scans` tells how"

_PER_SECOND = 8
_NARROWEST = 8

_output_option = click.option(
    "-o", "--output", type=click.Path(path_type=Path), metavar="FILE.svg", help="Draw it into a new file."
)


@command(
    "trapd scan x",
    'trapd scan x --why "after the bake" -o x.svg',
    "trapd scan x --interrupt --json",
    options=(hasty_why_option, _output_option, interrupt_option, at_option),
)
@click.argument("name")
def scan_command(name: str, why: str, output: Path | None, interrupt: bool, at: str | None) -> None:
    """Measure a secular frequency now, and watch it converge. NAME is one of the trap file's [scans]; the ion is tickled and
    its photons counted.

    Exit code 0 also when there is no resonance: that is a result; 4 when the counts vanished. Ctrl-C stops the scan.
    """
    _require_new(output)
    with Client(at) as client:
        _require_scan(client, name)
        newest, begun = client.entries(limit=1)[-1]["seq"], None
        try:
            begun = client.scan(name, why=why, interrupt=interrupt, wait=False)
            _tell_end(client, begun, output)
        except GuardRefused as error:
            tell_refusal(error, why)
        except KeyboardInterrupt:
            asked = {"kind": "scan", "scan": name, "why": why}
            entry, words = (begun["entry"], "") if begun else fate(client, newest, asked)
            _tell_interrupted(client, begun or {"entry": entry}, words)


def _require_new(output: Path | None) -> None:
    """Before anything is tickled."""
    if output is None:
        return
    if output.suffix != ".svg":
        raise BadRequest(f'-o "{output}": expected a name that ends in .svg; nothing was sent')
    if output.exists() or not output.parent.is_dir():
        why = "exists already" if output.exists() else "is in no folder that exists"
        raise BadRequest(f'-o "{output}" {why}; nothing was sent')
    try:
        TemporaryFile(dir=output.parent).close()
    except OSError as error:
        raise BadRequest(f'-o "{output}" cannot be written: {error.strerror}; nothing was sent') from error


def _require_scan(client: Client, name: str) -> None:
    """The daemon refuses a wrong name too; here it costs no entry."""
    known = client.trap()["scans"]
    if name not in known:
        there = f"there are: {', '.join(known)}" if known else "its trap file has no [scans]"
        raise BadRequest(f'"{name}" is no scan of this trap; {there}; nothing was sent')


def _tell_interrupted(client: Client, begun: Data, words: str) -> None:
    """Ctrl-C. A scan is cheap to repeat, and a tickle should not go on unseen: it is stopped if it goes on still."""
    entry, state, finding = begun["entry"], "stopped", None
    scanning = client.status()["situation"]["scanning"]
    if entry is not None and scanning is not None and scanning["request"] == entry:
        client.stop("Ctrl-C at the command line that followed the scan")
        words = STOPPED
    elif entry is not None:
        told = client.scan_at(entry)
        state, finding, words = (told["result"] or {"state": "unknown"})["state"], told["finding"], OVER
    click.echo(f"\n{words}", err=True)
    if wants_json():
        tell_json(_end(begun, state, finding, Superseded(words)))
    click.get_current_context().exit(INTERRUPTED)


def _tell_end(client: Client, begun: Data, output: Path | None) -> None:
    """How the scan ended, with the exit code of that. The finding is told before its figure can fail."""
    finding, error = None, None
    try:
        with _followed(begun["plan"]) as progress:
            finding = client.wait_finding(begun["entry"], progress)
    except TrapdError as found:
        if "state" not in found.details:  # nobody can tell how it ended
            raise
        error = found
    end = _end(begun, error.details["state"] if error else "done", finding, error)
    if not wants_json():
        _show_end(end)
    if output and finding:
        try:
            _draw(client, begun["entry"], output)
            end["figure"] = str(output)
        except TrapdError as failed:
            error = failed
            end |= {"error": error.message, "code": error.code}
    if wants_json():
        tell_json(end)
    elif end["figure"]:
        say(f"drawn into {end['figure']}")
    elif finding and error:
        tell_error(error)
    vanished = NotConfirmed.exit_code if finding and finding["state"] == "vanished" else 0
    if code := vanished or (error.exit_code if error else 0):
        click.get_current_context().exit(code)


def _end(begun: Data, state: str, finding: Data | None, error: TrapdError | None) -> dict[str, Any]:
    said = {"error": error and error.message, "code": error and error.code}
    return {**begun, "state": state, "finding": finding, **said, "figure": None}


def _show_end(end: Data) -> None:
    if end["finding"] is None:
        say((end["state"], BAD), f"  {end['error']} (entry {end['entry']})")
    else:
        show_finding(end["finding"])


def _draw(client: Client, request: int, output: Path) -> None:
    from trapd.figures import scan_figure

    scan = client.scan_at(request)
    figure = scan_figure(scan["points"], scan["finding"], scan["plan"], trap=client.trap()["name"])
    try:
        with output.open("x", encoding="utf-8") as out:
            out.write(figure)
    except OSError as error:
        raise BadRequest(f"{output}: {error.strerror}; the scan is in the record, no figure was drawn") from error


@contextmanager
def _followed(plan: Data) -> Iterator[Callable[[JsonEntry], None] | None]:
    """Shows the scan as it comes: a picture on a terminal, else a line for each pass; nothing with ``--json``."""
    if wants_json():
        yield None
        return
    picture = Picture(plan)
    if not is_terminal():

        def tell_pass(entry: JsonEntry) -> None:
            picture.note(entry)
            if entry["kind"] in ("estimate", "finding") and picture.passed:
                click.echo(picture.line())

        yield tell_pass
        return
    from rich.live import Live
    from rich.text import Text

    screen = console()
    columns = max(min(COLUMNS, screen.width - MARGIN - 1), _NARROWEST)

    def drawn() -> Text:
        return Text("\n".join(picture.lines(columns)), overflow="fold")

    with Live(console=screen, get_renderable=drawn, refresh_per_second=_PER_SECOND):
        yield picture.note
