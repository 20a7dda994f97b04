"""What the last run left in the record: the state it commanded, what it believed to be in the trap, what is open."""

from __future__ import annotations

from trapd.controller import Remembered
from trapd.record import Entry, Reader
from trapd.setpoint import AMPLITUDE, Contents
from trapd.wiring import DRIVE_OUTPUT


def remember(reader: Reader) -> Remembered:
    """Read before this run writes its own start."""
    state = reader.last_commanded()
    outputs = {name: command.level == 1.0 for name, command in state.outputs.items()}
    values = {name: command.value for name, command in state.setpoints.items()}
    for name, on in outputs.items():
        if not on:
            values[AMPLITUDE if name == DRIVE_OUTPUT else name.removesuffix(".output")] = 0.0
    starts = reader.entries(kind="start", newest=True, limit=1)
    open_intents = reader.setpoints(state="unknown", after=starts[0].seq) if starts else ()
    return Remembered(
        values=values,
        outputs=outputs,
        contents=None if state.contents is None else _contents(state.contents),
        previous=_previous(reader),
        open_intents=tuple(command.seq for command in open_intents),
    )


def _contents(entry: Entry) -> Contents:
    data = entry.data
    return Contents(
        presence=data["presence"],
        ions=data["ions"],
        incoming=tuple(data["incoming"]),
        expires_us=data["expires_us"],
    )


def _previous(reader: Reader) -> dict[str, float] | None:
    for result in reversed(reader.entries(kind="result", newest=True, limit=100)):
        if result.data["state"] == "done" and result.data["from"] != result.data["to"]:
            return dict(result.data["from"]) if result.data["returns"] else None
    return None
