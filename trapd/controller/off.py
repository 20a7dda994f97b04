"""off: RF, then DC, on every instrument that answers, now; written down afterwards."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future
from typing import Any

from trapd.controller.activity import Activity, Part, Within
from trapd.controller.desk import Desk
from trapd.controller.drafts import DAEMON
from trapd.controller.looking import follow_darkness, no_longer_known
from trapd.controller.ticket import Ticket
from trapd.errors import RecordFailed
from trapd.record import Draft
from trapd.setpoint import AMPLITUDE
from trapd.wiring import DRIVE_OUTPUT, output_of
from trapd_drivers.interfaces import DcSupply, Instrument, RfSource

RF_FIRST_S = 0.25
"""How long DC waits for RF to be off before it goes off as well."""

OFF_S = 3.0
"""How long an instrument has to confirm; one that needs longer is named and tried again."""

RECORD_S = 0.5
"""How long the answer waits for its entry number; a dead disk does not hold it up."""

Confirmed = dict[str, bool]
"""Output name to whether it is on still."""


def switching_off(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind `off`. Nothing is asked, judged or recorded before the commands are out."""
    request = ticket.request
    began_ns = desk.clock.monotonic_ns()
    report = yield from _off_everywhere(desk, began_ns)
    data = {"why": request.why, "instruments": report, "began_monotonic_ns": began_ns}
    note = desk.note(Draft(kind="off", actor=request.author, data=data))
    entry = None
    try:
        entry = (yield Within(note, RECORD_S))[0].seq
    except (RecordFailed, TimeoutError):  # it is kept in desk.unwritten and shown there
        entry = None
    no_longer_known(desk, "everything was switched off")
    pending = tuple(name for name, found in report.items() if not found["off"])
    desk.change(off_pending=pending)
    follow_darkness(desk)
    return {"entry": entry, "recorded": entry is not None, "off": not pending, "instruments": report}


def retrying_off(desk: Desk) -> Activity:
    """Instruments that did not confirm `off` are tried again until they do."""
    began_ns = desk.clock.monotonic_ns()
    names = desk.situation.off_pending
    jobs = {name: desk.submit(name, _off_job(desk, name), urgent=True) for name in names}
    report = {}
    for name, job in jobs.items():
        report[name] = yield from _answer(desk, job, OFF_S, began_ns)
    done = [name for name, found in report.items() if found["off"]]
    if done:
        desk.note(Draft(kind="off", actor=DAEMON, data={"why": "tried again", "instruments": report}))
        desk.change(off_pending=tuple(name for name in names if name not in done))
        follow_darkness(desk)
    return {}


def _off_everywhere(desk: Desk, began_ns: int) -> Part:
    drive = desk.wiring.drive
    for worker in desk.workers.values():
        worker.cancel_pending()
    rf = desk.submit(drive, _off_job(desk, drive), urgent=True)
    report: dict[str, Any] = {drive: (yield from _answer(desk, rf, RF_FIRST_S, began_ns))}
    supplies = [name for name in desk.workers if name != drive]
    jobs = {name: desk.submit(name, _off_job(desk, name), urgent=True) for name in supplies}
    for name, job in jobs.items():
        report[name] = yield from _answer(desk, job, OFF_S, began_ns)
    if not rf.done() or not report[drive]["off"]:
        rest_s = max(0.0, OFF_S - (desk.clock.monotonic_ns() - began_ns) / 1e9)
        report[drive] = yield from _answer(desk, rf, rest_s, began_ns)
    return report


def _off_job(desk: Desk, name: str) -> Callable[[Instrument], Confirmed]:
    channels = {setpoint: channel for setpoint, (owner, channel) in desk.wiring.electrodes.items() if owner == name}

    def job(instrument: Instrument) -> Confirmed:
        if isinstance(instrument, RfSource):
            instrument.set_output(False)
            return {DRIVE_OUTPUT: instrument.read_output()}
        assert isinstance(instrument, DcSupply)
        failures: list[Exception] = []
        for channel in channels.values():
            try:
                instrument.set_output(channel, False)
            except Exception as error:  # a bug in the driver included: the other channels go off all the same
                failures.append(error)
        if failures:
            raise failures[0]
        return {output_of(setpoint): instrument.read_output(channel) for setpoint, channel in channels.items()}

    return job


def _answer(desk: Desk, job: Future[Confirmed], seconds: float, began_ns: int) -> Part:
    """What one instrument said: ``off``, after how long, and why not."""
    try:
        confirmed: Confirmed = yield Within(job, seconds)
    except TimeoutError:
        return {"off": False, "after_s": _since(desk, began_ns), "error": f"no answer in {seconds:g} s"}
    except Exception as error:  # whatever it is, the other instruments go off and this one is tried again
        return {"off": False, "after_s": _since(desk, began_ns), "error": str(error) or type(error).__name__}
    _take(desk, confirmed)
    still_on = [name for name, on in confirmed.items() if on]
    words = f"{', '.join(still_on)} still on" if still_on else None
    return {"off": not still_on, "after_s": _since(desk, began_ns), "error": words}


def _since(desk: Desk, began_ns: int) -> float:
    return round((desk.clock.monotonic_ns() - began_ns) / 1e9, 4)


def _take(desk: Desk, confirmed: Confirmed) -> None:
    values = dict(desk.situation.values)
    for name, on in confirmed.items():
        if not on:
            values[AMPLITUDE if name == DRIVE_OUTPUT else name.removesuffix(".output")] = 0.0
    desk.change(values=values, outputs={**desk.situation.outputs, **confirmed})
