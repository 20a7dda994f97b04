"""``trapd scan``: measure a secular frequency and watch it converge."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import click

from trapd.cli.answer import INTERRUPTED, Data, tell, wants_json
from trapd.cli.finding import show_finding
from trapd.cli.moves import fate
from trapd.cli.options import at_option, command, hasty_why_option, interrupt_option
from trapd.cli.spectrum import COLUMNS, MARGIN, Picture
from trapd.cli.terminal import BAD, console, is_terminal, say
from trapd.cli.verdicts import tell_refusal
from trapd.client import Client, JsonEntry
from trapd.errors import BadRequest, GuardRefused, TrapdError

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

    Exit code 0 also when there is no resonance: that is a result. Ctrl-C stops the scan.
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
            click.echo(f"\n{_stopped(client, entry) if entry else words}", err=True)
            click.get_current_context().exit(INTERRUPTED)


def _require_new(output: Path | None) -> None:
    """Before anything is tickled."""
    if output is None:
        return
    if output.suffix != ".svg":
        raise BadRequest(f'-o "{output}": expected a name that ends in .svg; nothing was sent')
    if output.exists() or not output.parent.is_dir():
        why = "exists already" if output.exists() else "is in no folder that exists"
        raise BadRequest(f'-o "{output}" {why}; nothing was sent')


def _require_scan(client: Client, name: str) -> None:
    """The daemon refuses a wrong name too; here it costs no entry."""
    known = client.trap()["scans"]
    if name not in known:
        there = f"there are: {', '.join(known)}" if known else "its trap file has no [scans]"
        raise BadRequest(f'"{name}" is no scan of this trap; {there}; nothing was sent')


def _stopped(client: Client, request: int) -> str:
    """A scan is cheap to repeat, and a tickle should not go on unseen."""
    scanning = client.status()["situation"]["scanning"]
    if scanning is None or scanning["request"] != request:
        return OVER
    client.stop("Ctrl-C at the command line that followed the scan")
    return STOPPED


def _tell_end(client: Client, begun: Data, output: Path | None) -> None:
    """How the scan ended, with the exit code of that."""
    finding, error = None, None
    try:
        with _followed(begun["plan"]) as progress:
            finding = client.wait_finding(begun["entry"], progress)
    except TrapdError as found:
        if "state" not in found.details:  # nobody can tell how it ended
            raise
        error = found
    end = {
        **begun,
        "state": error.details["state"] if error else "done",
        "finding": finding,
        "error": error and error.message,
        "code": error and error.code,
        "figure": str(output) if output and not error else None,
    }
    if output and not error:
        _draw(client, begun["entry"], output)
    tell(end, _show_end, exit_code=error.exit_code if error else 0)


def _show_end(end: Data) -> None:
    if end["finding"] is None:
        say((end["state"], BAD), f"  {end['error']} (entry {end['entry']})")
        return
    show_finding(end["finding"])
    if end["figure"]:
        say(f"drawn into {end['figure']}")


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
            if entry["kind"] in ("estimate", "finding"):
                click.echo(picture.line())

        yield tell_pass
        return
    from rich.live import Live
    from rich.text import Text

    screen = console()
    columns = max(min(COLUMNS, screen.width - MARGIN - 1), _NARROWEST)

    def drawn() -> Text:
        return Text("\n".join(picture.lines(columns)), no_wrap=True, overflow="crop")

    with Live(console=screen, get_renderable=drawn, refresh_per_second=_PER_SECOND):
        yield picture.note
