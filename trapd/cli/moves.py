"""``trapd set``, ``go``, ``back``, ``on`` and ``empty``: the trap moves, step by step, and every step is read back."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from typing import Any

import click

from trapd.cli.amounts import duration, in_order, value_of
from trapd.cli.answer import INTERRUPTED, Data, tell, wants_json
from trapd.cli.options import at_option, command, interrupt_option, wait_option, why_option
from trapd.cli.terminal import BAD, GOOD, console, is_terminal, say
from trapd.cli.verdicts import NO_VALUES, tell_refusal
from trapd.cli.words import split_list
from trapd.client import Client, JsonEntry
from trapd.config.quantity import closest, parse_assignments
from trapd.errors import BadRequest, GuardRefused, TrapdError

LEFT = "no longer followed; the ramp continues in the daemon: `trapd stop` holds it where it is, `trapd off` ends it"

_OPTIONS = (why_option, interrupt_option, wait_option, at_option)

Ask = Callable[[Client], dict[str, Any]]


@command(
    'trapd set endcaps=200V --why "stiffer along z"',
    'trapd set drive.amplitude=300V rods=0.5V --why "day setting" --no-wait',
    options=_OPTIONS,
)
@click.argument("values", nargs=-1, required=True, metavar="NAME=VALUE...")
def set_command(values: tuple[str, ...], why: str, interrupt: bool, wait: bool, at: str | None) -> None:
    """Move setpoints to values. Judged first, then ramped one at a time, each step recorded, read back and compared."""
    wanted = parse_assignments(split_list(values))

    def ask(client: Client) -> dict[str, Any]:
        known = client.trap()["setpoints"]
        for name in wanted:  # the daemon refuses a wrong name too; here it costs no entry, and may be near a right one
            if name not in known:
                raise BadRequest(f'"{name}" is no setpoint of this trap{closest(name, known)}; nothing was sent')
        return client.set(wanted, why=why, interrupt=interrupt, wait=False)

    _move(at, wait, why, ask, wanted)


@command('trapd go work --why "back to the day\'s setting"', options=_OPTIONS)
@click.argument("point")
def go_command(point: str, why: str, interrupt: bool, wait: bool, at: str | None) -> None:
    """Move to a named point of the trap file."""
    _move(at, wait, why, lambda client: client.go(point, why=why, interrupt=interrupt, wait=False))


@command('trapd back --why "that was worse"', options=_OPTIONS)
def back_command(why: str, interrupt: bool, wait: bool, at: str | None) -> None:
    """Move to the state before the last completed move."""
    _move(at, wait, why, lambda client: client.back(why=why, interrupt=interrupt, wait=False))


@command('trapd on --why "start of the day"', 'trapd on work --why "after the bake"', options=_OPTIONS)
@click.argument("point", required=False)
def on_command(point: str | None, why: str, interrupt: bool, wait: bool, at: str | None) -> None:
    """Switch an empty trap on and ramp it to POINT (default: the first). Supplies begin at 0 V, RF at its least level."""
    _move(at, wait, why, lambda client: client.on(point, why=why, interrupt=interrupt, wait=False))


@command(
    'trapd empty --why "wrong isotope"',
    'trapd empty --stay-off --why "leaving for the night"',
    options=_OPTIONS,
)
@click.argument("point", required=False)
@click.option("--stay-off", is_flag=True, help="RF stays off afterwards.")
def empty_command(point: str | None, stay_off: bool, why: str, interrupt: bool, wait: bool, at: str | None) -> None:
    """Let every ion go, then back to a point or off. RF is off until nothing can be left, then ramped to POINT (default: the
    first), or --stay-off."""
    if stay_off and point is not None:
        raise BadRequest(f'--stay-off goes nowhere; leave out "{point}"')
    _move(
        at, wait, why, lambda client: client.empty(point, stay_off=stay_off, why=why, interrupt=interrupt, wait=False)
    )


def _move(at: str | None, wait: bool, why: str, ask: Ask, asked: Mapping[str, float] = NO_VALUES) -> None:
    """Ask for a move and tell what came of it: a refusal with every reason, or its end. ``asked``: values by name."""
    with Client(at) as client:
        newest = client.entries(limit=1)[-1]["seq"]
        answer = None
        try:
            answer = ask(client)
            if wait:
                _tell_end(client, answer)
            else:
                tell({**answer, "state": None}, _show_accepted)
        except GuardRefused as error:
            tell_refusal(error, why, asked)
        except KeyboardInterrupt:
            _, words = (0, LEFT) if answer else fate(client, newest, {"why": why})
            click.echo(f"\n{words or LEFT}", err=True)
            click.get_current_context().exit(INTERRUPTED)


def fate(client: Client, after: int, asked: Data) -> tuple[int | None, str]:
    """What became of a request that nobody waits for any more: the daemon drops it if its turn had not come.

    Its entry when it goes on, else None and how it ended. ``asked``: what its entry, beyond ``after``, is known by.
    """
    request = None
    for entry in client.follow(after):
        data = entry["data"]
        if entry["kind"] == "request" and all(data[key] == value for key, value in asked.items()):
            request = entry["seq"]
        elif entry["kind"] == "verdict" and data["request"] == request:
            return (request, "") if data["accepted"] else (None, "refused; nothing was sent")
        elif entry["kind"] == "result" and data["request"] == request:
            return None, f"withdrawn: {data['error']}"
    raise AssertionError("a stream ends only with an error")


def _show_accepted(answer: Data) -> None:
    length = f"{answer['steps']} steps, {duration(answer['duration_s'])}"
    say(("accepted", GOOD), f"  entry {answer['entry']}, {length}; not waited for")


def _tell_end(client: Client, answer: Data) -> None:
    """How the move ended, with the exit code of that."""
    error = None
    try:
        with _progress(answer) as progress:
            result = client.wait(answer["entry"], progress)
        end = {**result["data"], "entry": result["seq"]}
    except TrapdError as found:
        if "state" not in found.details:  # nobody can tell how it ended
            raise
        error, end = found, found.details
    told = {
        **answer,
        **{key: end[key] for key in ("state", "from", "to")},
        "error": error and error.message,
        "code": error and error.code,
        "result_entry": end["entry"],
    }
    tell(told, _show_end, exit_code=error.exit_code if error else 0)


def _show_end(end: Data) -> None:
    before, after = end["from"] or {}, end["to"] or {}
    moved = {name: value for name, value in in_order(after).items() if value != before.get(name)}
    now = ", ".join(f"{name} {value_of(name, value)}" for name, value in moved.items()) or _nothing(end)
    say((end["state"], BAD if end["error"] else GOOD), f"  {now} (entry {end['entry']})")
    if end["error"]:
        say(end["error"], indent=2)


def _nothing(end: Data) -> str:
    return "back where it began" if end.get("steps") and not end["error"] else "nothing had to move"


@contextmanager
def _progress(answer: Data) -> Iterator[Callable[[JsonEntry], None] | None]:
    """Shows the move's own entries as one line that is gone at the end; None where output is no terminal."""
    if wants_json() or not is_terminal():
        yield None
        return
    from rich.progress import BarColumn, Progress, TextColumn

    screen = console()
    bars = BarColumn(min(30, max(4, screen.width - 48)))  # what stands beside it is never cut
    columns = (TextColumn("{task.description}"), bars, TextColumn("{task.completed}/{task.total}"))
    with Progress(*columns, console=screen, transient=True) as bar:
        task = bar.add_task("starting", total=answer["steps"])

        def show(entry: JsonEntry) -> None:
            data = entry["data"]
            if entry["kind"] == "intent" and data["request"] == answer["entry"]:
                value = "" if data["quantity"] == "output" else value_of(data["setpoint"], data["value"])
                bar.update(task, description=f"{data['setpoint']} {value}".ljust(28), completed=data["step"])

        yield show
