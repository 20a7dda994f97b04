"""What every command answers with: words for people or, with ``--json``, one document; and its exit code."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from typing import Any

import click

from trapd.errors import Bug, ConfigError, NotConfirmed, RecordFailed, Refused, TrapdError, Unreachable

Data = Mapping[str, Any]
"""An answer: what the daemon or a computation here says, as JSON has it."""

INTERRUPTED = 130
"""128 + SIGINT: the exit code after Ctrl-C."""

_JSON = "trapd.json"
_LABELS: tuple[tuple[type[TrapdError], str], ...] = (
    (ConfigError, ""),
    (Refused, "refused: "),
    (NotConfirmed, "not confirmed: "),
    (Unreachable, "unreachable: "),
    (RecordFailed, "record: "),
    (Bug, "bug: "),
    (TrapdError, "error: "),
)


def note_json(ctx: click.Context, _: click.Parameter, value: bool) -> None:
    """Callback of ``--json``."""
    ctx.meta[_JSON] = value


def wants_json() -> bool:
    return bool(click.get_current_context().meta.get(_JSON, False))


def tell(data: Any, show: Callable[[Any], None], *, exit_code: int = 0) -> None:
    """``data`` as JSON, else as ``show`` puts it; then the command ends, unless the exit code is 0."""
    if wants_json():
        tell_json(data)
    else:
        show(data)
    if exit_code:
        click.get_current_context().exit(exit_code)


def tell_json(data: Any) -> None:
    """Strict JSON: a number that is not finite is our bug, and no document."""
    click.echo(json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False))


def tell_error(error: TrapdError) -> None:
    """The sentence for people on standard error; with ``--json`` also ``{code, message, details}`` as the answer."""
    label = next(label for kind, label in _LABELS if isinstance(error, kind))
    click.echo(f"{label}{error.message}", err=True)
    if wants_json():
        tell_json({"code": error.code, "message": error.message, "details": error.details})
