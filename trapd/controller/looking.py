"""Look at the instruments before anything is judged: the guard judges what is, not what was commanded."""

from __future__ import annotations

from collections.abc import Iterable
from concurrent.futures import Future

from trapd.controller.activity import Activity, Part, Pause, Within
from trapd.controller.desk import Desk
from trapd.controller.drafts import DAEMON, contents_draft
from trapd.controller.survey import Survey, differences, reports, survey_job, values_found
from trapd.errors import InstrumentUnreachable
from trapd.record import Draft
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents
from trapd.wiring import DRIVE_OUTPUT
from trapd_drivers.errors import DriverError
from trapd_drivers.interfaces import Instrument, RfSource

ANSWER_S = 5.0
"""Longer than any instrument's own time-out; beyond it the instrument counts as unreachable."""

DARK_S = 1.0
"""How long RF must be verified off before the trap counts as empty."""


def look(desk: Desk, *, added: bool = False) -> Part:
    """Survey every instrument, take what was found for the present state, record what differs.

    With ``added`` what is in doubt already stays in doubt: nobody has asked for anything since.

    Returns the surveys. Instruments that do not answer keep their last known values and are named in the situation. If a
    command was handed to an instrument meanwhile, what was read of it is stale and nothing is taken from that.
    """
    sent = dict(desk.sent)
    jobs = {name: worker.submit(survey_job(desk.wiring, name)) for name, worker in desk.workers.items()}
    for job in jobs.values():
        job.add_done_callback(lambda done: _keep_events(desk, done))
    surveys: list[Survey] = yield from _gather(desk, jobs)
    desk.refit()
    before = desk.situation
    fresh = [found for found in surveys if desk.sent[found.instrument] == sent[found.instrument]]
    words = differences(desk.wiring, desk.model, fresh, before.values, before.outputs)
    events = [desk.events.popleft() for _ in range(len(desk.events))]
    words += [one for found in events if found not in surveys for one in reports(found)]
    if fresh or not surveys:
        outputs = dict(before.outputs)
        for found in fresh:
            outputs.update(found.outputs)
        tickling = next((found.tickling for found in fresh if found.tickling is not None), desk.situation.tickling)
        kept = desk.situation.doubt if added else ()
        doubt = tuple(dict.fromkeys((*kept, *words)))
        desk.change(values=_merged(desk, fresh), outputs=outputs, tickling=tickling, doubt=doubt)
    elif not events:
        return surveys
    if words and words != desk.last_words:
        desk.note(_found_draft(desk, surveys, words))
    desk.last_words = words
    if any(found.power_on and found.instrument in desk.wiring.holding for found in events):
        no_longer_known(desk, "an instrument was switched off and on")
    follow_darkness(desk)
    return surveys


def looking(desk: Desk) -> Activity:
    """A look of its own: after a move that failed, and now and then while nothing moves."""
    yield from look(desk, added=True)
    return {}


def require_reachable(desk: Desk, setpoints: Iterable[str]) -> None:
    """Nothing that touches an instrument that does not answer, and nothing at all while a value is not known."""
    situation = desk.situation
    missing = [name for name in desk.wiring.setpoints if name not in situation.values]
    for name in [*setpoints, *missing]:
        instrument = desk.wiring.instrument_of(name)
        if instrument in situation.unreachable or name in missing:
            why = situation.unreachable.get(instrument, "its state is not known")
            raise InstrumentUnreachable(f"{name}: {instrument} does not answer ({why}); nothing was sent")


def no_longer_known(desk: Desk, why: str) -> None:
    """Doubt: those held stay guarded, and a person must say again what is in the trap."""
    contents = desk.situation.contents
    if contents.presence in ("held", "loading"):
        unknown = Contents(presence="unknown", ions=contents.possible)
        desk.change(contents=unknown)
        desk.note(contents_draft(unknown, DAEMON, why))


def follow_darkness(desk: Desk) -> None:
    """With RF found off the contents are in doubt at once, and after a second of it the trap counts as empty."""
    if desk.situation.outputs.get(DRIVE_OUTPUT) is False and desk.situation.contents.presence != "none":
        no_longer_known(desk, "RF was found off")
        desk.spawn(darkness(desk))


def darkness(desk: Desk) -> Activity:
    """RF verified off for `DARK_S`: nothing can be in the trap, and the daemon says so."""
    drive = desk.wiring.drive
    sent = desk.sent[drive]
    yield Pause(DARK_S)
    if (yield from verified_dark(desk)) and desk.sent[drive] == sent and desk.situation.contents.presence != "none":
        nobody = Contents(presence="none")
        desk.change(contents=nobody)
        desk.note(contents_draft(nobody, DAEMON, f"RF verified off for {DARK_S:g} s"))
    elif desk.sent[drive] != sent:
        follow_darkness(desk)
    return {}


def verified_dark(desk: Desk) -> Part:
    """Whether the RF source says now that its output is off."""

    def job(instrument: Instrument) -> bool:
        assert isinstance(instrument, RfSource)
        return not instrument.read_output()

    try:
        return (yield Within(desk.workers[desk.wiring.drive].submit(job), ANSWER_S))
    except (DriverError, TimeoutError):
        return False


def _keep_events(desk: Desk, done: Future[Survey]) -> None:
    """On the instrument's thread: what it tells only once is kept even when nobody waits for the survey any more."""
    if not done.cancelled() and done.exception() is None:
        found = done.result()
        if found.power_on or found.tripped or found.errors:
            desk.events.append(found)


def _gather(desk: Desk, jobs: dict[str, Future[Survey]]) -> Part:
    surveys, unreachable = [], {}
    for name, job in jobs.items():
        try:
            found: Survey = yield Within(job, ANSWER_S)
        except (DriverError, TimeoutError) as error:
            unreachable[name] = str(error) or f"no answer within {ANSWER_S:g} s"
        else:
            surveys.append(found)
            if found.failure is not None:
                unreachable[name] = found.failure
    if unreachable.keys() != desk.situation.unreachable.keys():
        desk.note(Draft(kind="found", actor=DAEMON, data={"unreachable": unreachable}))
    desk.change(unreachable=unreachable)
    return surveys


def _merged(desk: Desk, surveys: list[Survey]) -> dict[str, float]:
    """Within accuracy of the command the command is the better number; beyond it what was found counts."""
    before = desk.situation.values
    merged = values_found(desk.model, surveys, before)
    for name, value in merged.items():
        if name in before and (name != AMPLITUDE or FREQUENCY in before):
            accuracy = desk.wiring.accuracy(desk.model, before, name)
            merged[name] = before[name] if abs(value - before[name]) <= accuracy else value
    return merged


def _found_draft(desk: Desk, surveys: list[Survey], words: list[str]) -> Draft:
    data = {
        "differences": words,
        "values": dict(desk.situation.values),
        "outputs": dict(desk.situation.outputs),
        "programmed": {name: level for found in surveys for name, level in found.programmed.items()},
    }
    return Draft(kind="found", actor=DAEMON, data=data)
