"""What the last run left in the record: the state it commanded, what it believed to be in the trap, what is open."""

from __future__ import annotations

from trapd.controller import Claim, Measured, Remembered, SchedulePause
from trapd.record import Entry, Reader
from trapd.setpoint import AMPLITUDE, TICKLE, TICKLE_OUTPUT, Contents
from trapd.wiring import DRIVE_OUTPUT

_MANY = 10_000
_MEASURED = (
    "scan",
    "species",
    "mode",
    "frequency_hz",
    "uncertainty_hz",
    "predicted_hz",
    "predicted_uncertainty_hz",
    "at_us",
)


def remember(reader: Reader) -> Remembered:
    """Read before this run writes its own start."""
    state = reader.last_commanded()
    outputs = {name: command.level == 1.0 for name, command in state.outputs.items()}
    outputs.pop(TICKLE_OUTPUT, None)
    values = {name: command.value for name, command in state.setpoints.items() if name != TICKLE}
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
        open_scan=_open_scan(reader),
        claim=_claim(reader),
        pause=_pause(reader),
        measured=_measured(reader),
        tripped=_tripped(reader),
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
    for result in reversed(reader.entries(kind="result", newest=True, limit=_MANY)):
        if result.data["state"] == "done" and result.data["from"] != result.data["to"]:
            return dict(result.data["from"]) if result.data["returns"] else None
    return None


def _newest(reader: Reader, kind: str) -> Entry | None:
    return next(iter(reader.entries(kind=kind, newest=True, limit=1)), None)


def _open_scan(reader: Reader) -> int | None:
    """The entry of the newest scan, if nothing says how it ended."""
    plan = _newest(reader, "plan")
    if plan is None:
        return None
    request: int = plan.data["request"]
    ended = any(one.data["request"] == request for one in reader.entries(kind="result", after=plan.seq))
    return None if ended else request


def _claim(reader: Reader) -> Claim | None:
    newest = _newest(reader, "claim")
    if newest is None or newest.data["state"] != "claimed":
        return None
    return Claim(entry=newest.seq, who=newest.data["who"], why=newest.data["why"], until_us=newest.data["until_us"])


def _pause(reader: Reader) -> SchedulePause | None:
    newest = _newest(reader, "pause")
    if newest is None or newest.data["state"] != "paused":
        return None
    return SchedulePause(entry=newest.seq, who=newest.actor, why=newest.data["why"], until_us=newest.data["until_us"])


def _measured(reader: Reader) -> dict[str, Measured]:
    """The newest measurement of each scan, and the setpoints that its plan was made for."""
    found: dict[str, Measured] = {}
    for entry in reversed(reader.entries(kind="secular_frequency", newest=True, limit=_MANY)):
        data = entry.data
        if data["scan"] not in found:
            verdict = next(iter(reader.entries(kind="verdict", after=data["request"], limit=1)))
            found[data["scan"]] = Measured(
                entry=data["finding"],
                values=verdict.data["values"],
                **{name: data[name] for name in _MEASURED},
            )
    return found


def _tripped(reader: Reader) -> tuple[str, ...]:
    """Interlocks that tripped and were not cleared since."""
    entries = reader.entries(kind="interlock", limit=_MANY, newest=True)
    newest = {entry.data["name"]: entry.data["tripped"] for entry in entries}
    return tuple(name for name, tripped in newest.items() if tripped)
