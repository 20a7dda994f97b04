"""A move seen to its end: the record is the event stream, and the move's own entries tell how far it is."""

from __future__ import annotations

import shlex
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, Protocol

import click

from trapd.cli.amounts import assignment, duration, in_order, value_of
from trapd.cli.answer import leave_with, tell_json, wants_json
from trapd.cli.terminal import BAD, GOOD, console, is_terminal, say, say_parts
from trapd.cli.verdicts import nearest_of, show_reasons
from trapd.errors import GuardRefused, InstrumentUnreachable, NotConfirmed, Superseded

if TYPE_CHECKING:
    from trapd.client import Client

Answer = Mapping[str, Any]

LEFT = "no longer followed; the ramp continues in the daemon: `trapd stop` holds it where it is, `trapd off` ends it"


class Progress(Protocol):
    def show(self, setpoint: str, value: float, step: int) -> None: ...


def finish(client: Client, answer: Answer, *, wait: bool) -> None:
    """See an accepted move to its end, tell how it ended, leave with its exit code."""
    if not wait:
        if wants_json():
            tell_json({**answer, "state": None})
        else:
            say_parts(("accepted", GOOD), (f"  entry {answer['entry']}, {_length(answer)}; not waited for", ""))
        return
    end = see_to_its_end(client, answer)
    if wants_json():
        tell_json({**answer, **end})
    else:
        tell_end(answer, end)
    leave_with(exit_code_of(end))


def see_to_its_end(client: Client, answer: Answer) -> dict[str, Any]:
    """``state`` ("done", "stopped", "failed"), ``from``, ``to``, ``error``, ``result_entry``, ``last_outcome``."""
    last_outcome = None
    with _progress(answer) as progress:
        for entry in client.follow(after=answer["entry"]):
            data = entry["data"]
            if entry["kind"] == "intent" and data["request"] == answer["entry"]:
                progress.show(data["setpoint"], data["value"], data["step"])
            elif entry["kind"] == "outcome":
                last_outcome = data["state"]
            elif entry["kind"] == "start":
                lost = "the daemon was started anew before the move ended; its outputs hold"
                result = {"state": "failed", "from": None, "to": None, "error": lost}
                return {**result, "result_entry": None, "last_outcome": last_outcome}
            elif entry["kind"] == "result" and data["request"] == answer["entry"]:
                result = {key: data[key] for key in ("state", "from", "to", "error")}
                return {**result, "result_entry": entry["seq"], "last_outcome": last_outcome}
    raise AssertionError("a stream ends only with an error")


def exit_code_of(end: Answer) -> int:
    """A failed move is told apart by what its last command met."""
    if end["state"] == "done":
        return 0
    if end["state"] == "stopped":
        return Superseded.exit_code
    return (InstrumentUnreachable if end["last_outcome"] == "unreachable" else NotConfirmed).exit_code


def tell_end(answer: Answer, end: Answer) -> None:
    before, after = end["from"] or {}, end["to"] or {}
    moved = {name: value for name, value in in_order(after).items() if value != before.get(name)}
    now = ", ".join(f"{name} {value_of(name, value)}" for name, value in moved.items()) or "nothing had to move"
    style = GOOD if end["state"] == "done" else BAD
    say_parts((end["state"], style), (f"  {now} (entry {answer['entry']})", ""))
    if end["error"]:
        say(end["error"], indent=2)


def tell_refusal(error: GuardRefused, why: str, asked: Mapping[str, float]) -> None:
    """Every reason; and what was asked with the nearest allowed values in it, as a command to paste."""
    verdict, entry = error.details["verdict"], error.details["entry"]
    if wants_json():
        tell_json({"entry": entry, "accepted": False, "verdict": verdict})
        return
    say_parts(("refused", BAD), (f"  nothing was sent (entry {entry})", ""))
    show_reasons(verdict["reasons"], verdict["values"])
    nearest = {reason["quantity"]: nearest_of(reason, verdict["values"]) for reason in verdict["reasons"]}
    words = {name: assignment(name, value) for name, value in asked.items()} | nearest
    if words and all(word and "=" in word for word in words.values()):
        # Not wrapped: it is there to be pasted.
        click.echo(f"    trapd set {' '.join(map(str, words.values()))} --why {shlex.quote(why)}")


def _length(answer: Answer) -> str:
    return f"{answer['steps']} steps, {duration(answer['duration_s'])}"


@contextmanager
def _progress(answer: Answer) -> Iterator[Progress]:
    """One line that is gone at the end; nothing where output is no terminal."""
    if wants_json() or not is_terminal():
        yield _Silence()
        return
    from rich.progress import BarColumn, TextColumn
    from rich.progress import Progress as Bar

    columns = (TextColumn("{task.description}"), BarColumn(30), TextColumn("{task.completed}/{task.total}"))
    with Bar(*columns, console=console(), transient=True) as bar:
        yield _Line(bar, answer["steps"])


class _Silence:
    def show(self, setpoint: str, value: float, step: int) -> None:
        pass


class _Line:
    def __init__(self, bar: Any, steps: int) -> None:
        self._bar = bar
        self._task = bar.add_task("starting", total=steps)

    def show(self, setpoint: str, value: float, step: int) -> None:
        words = f"{setpoint} {value_of(setpoint, value) if not setpoint.endswith('.output') else ''}"
        self._bar.update(self._task, description=f"{words:<28}", completed=step)
