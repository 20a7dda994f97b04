"""Start: read the instruments, record what was found, compare with what was last commanded; and the tickle off, the one
thing that a start commands."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass, field

from trapd.controller.activity import Activity
from trapd.controller.desk import Desk
from trapd.controller.drafts import DAEMON, contents_draft, result_draft
from trapd.controller.looking import look
from trapd.controller.off import silencing
from trapd.controller.situation import Claim, Measured, SchedulePause
from trapd.errors import Superseded
from trapd.guard.interlock import InterlockState
from trapd.record import Draft
from trapd.setpoint import Contents, Values


@dataclass(frozen=True, kw_only=True)
class Remembered:
    """What the record of earlier runs says: the last commanded values and outputs, the contents, the state before.

    ``open_intents``: intents without an outcome; nobody knows whether they were sent. ``open_scan``: the entry of a
    scan that never ended. ``tripped``: interlocks that nobody has cleared. ``claim`` and ``pause`` as last declared,
    ``measured`` by scan name.
    """

    values: Values
    outputs: Mapping[str, bool]
    contents: Contents | None
    previous: Values | None
    open_intents: tuple[int, ...] = ()
    open_scan: int | None = None
    claim: Claim | None = None
    pause: SchedulePause | None = None
    measured: Mapping[str, Measured] = field(default_factory=dict)
    tripped: tuple[str, ...] = ()


def adopting(remembered: Remembered) -> Callable[[Desk], Activity]:
    """The controller's first activity."""

    def activity(desk: Desk) -> Activity:
        desk.change(values=dict(remembered.values), outputs=dict(remembered.outputs), previous=remembered.previous)
        contents, gone = _contents(desk, remembered)
        desk.change(
            contents=contents,
            interlocks={name: InterlockState(tripped=name in remembered.tripped) for name in desk.wiring.gauges},
            claim=remembered.claim,
            pause=remembered.pause,
            measured=dict(remembered.measured),
        )
        surveys = yield from look(desk)
        situation = desk.situation
        found = {
            "identities": {s.instrument: asdict(s.identity) for s in surveys},
            "values": dict(situation.values),
            "outputs": dict(situation.outputs),
            "last_commanded": dict(remembered.values),
            "differences": list(situation.doubt),
            "no_longer_in_the_file": list(gone),
            "unreachable": dict(situation.unreachable),
            "open_intents": list(remembered.open_intents),
            "open_scan": remembered.open_scan,
            "tickling": situation.tickling,
        }
        drafts = [
            Draft(kind="identity", actor=DAEMON, data={"instrument": s.instrument, **asdict(s.identity)})
            for s in surveys
        ]
        drafts.append(Draft(kind="found", actor=DAEMON, data=found))
        if remembered.open_scan is not None:
            cut_off = Superseded("the daemon ended while it ran")
            here = situation.values
            drafts.append(result_draft(DAEMON, remembered.open_scan, here, here, returns=False, error=cut_off))
            words = f"the last run ended in the middle of a scan (entry {remembered.open_scan})"
            desk.change(doubt=(*desk.situation.doubt, words))
        drafts.append(contents_draft(situation.contents, DAEMON, "after a start"))
        yield desk.note(*drafts)
        yield from silencing(desk, DAEMON, "after a start")
        return found

    return activity


def _contents(desk: Desk, remembered: Remembered) -> tuple[Contents, tuple[str, ...]]:
    """After any start the contents are unknown; those last held stay guarded (before any, the catalogue). The second:
    species that the trap file no longer knows; with any of them gone the whole catalogue is guarded."""
    last = remembered.contents
    ions = {} if last is None else last.possible
    gone = tuple(name for name in ions if name not in desk.model.catalogue)
    return Contents(presence="unknown", ions={} if gone else ions), gone
