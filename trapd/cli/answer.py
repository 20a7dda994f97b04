"""What every command shares: ``--json``, examples in its help, and one shape for answers and errors."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import asdict, is_dataclass
from typing import Any, TypeVar

import click

from trapd.errors import Bug, ConfigError, NotConfirmed, RecordFailed, Refused, TrapdError, Unreachable

Function = TypeVar("Function", bound=Callable[..., Any])

INTERRUPTED = 130
"""128 + SIGINT: the exit code after Ctrl-C."""

_JSON = "trapd.json"
_LABELS: tuple[tuple[type[TrapdError], str], ...] = (
    (Refused, "refused"),
    (NotConfirmed, "not confirmed"),
    (Unreachable, "unreachable"),
    (RecordFailed, "record"),
    (Bug, "bug"),
)


def json_option(command: Function) -> Function:
    """``--json``; `wants_json` tells whether it was given."""

    def note(ctx: click.Context, _: click.Parameter, value: bool) -> None:
        ctx.meta[_JSON] = value

    text = "One JSON document on standard output; SI units."
    return click.option("--json", is_flag=True, is_eager=True, expose_value=False, callback=note, help=text)(command)


def wants_json() -> bool:
    return bool(click.get_current_context().meta.get(_JSON, False))


def examples(*lines: str) -> str:
    """The epilogue of a command's help."""
    return "\b\nExamples:\n" + "\n".join(f"  {line}" for line in lines)


def plain(record: object) -> dict[str, Any]:
    """A record as JSON-able data."""
    assert is_dataclass(record)
    assert not isinstance(record, type)
    return asdict(record)


def tell_json(data: object) -> None:
    """Strict JSON: a number that is not finite is our bug, and no document."""
    click.echo(json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False))


def tell_error(error: TrapdError) -> None:
    """The sentence for people on standard error; with ``--json`` also ``{code, message, details}`` as the answer."""
    text = error.message
    if not isinstance(error, ConfigError):
        label = next((name for kind, name in _LABELS if isinstance(error, kind)), "error")
        text = f"{label}: {text}"
    click.echo(text, err=True)
    if wants_json():
        tell_json({"code": error.code, "message": error.message, "details": error.details})


def leave_with(exit_code: int) -> None:
    """End the command with this exit code after its answer is printed; 0 just goes on."""
    if exit_code:
        click.get_current_context().exit(exit_code)


Answer = Mapping[str, Any]
