"""off: RF, then DC, on every instrument that answers, now; written down afterwards."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from dataclasses import asdict
from typing import Any

from trapd.controller.activity import Activity, Part, Within
from trapd.controller.desk import Desk
from trapd.controller.drafts import DAEMON
from trapd.controller.looking import follow_darkness, looking, no_longer_known
from trapd.controller.ticket import Ticket
from trapd.errors import TrapdError
from trapd.record import Draft, SameCommit
from trapd.setpoint import AMPLITUDE, TICKLE_OUTPUT, Outcome
from trapd.wiring import DRIVE_OUTPUT, output_of
from trapd_drivers.interfaces import DcSupply, Instrument, RfSource

RF_FIRST_S = 0.25
"""How long DC waits for RF to be off before it goes off as well."""

OFF_S = 3.0
"""How long an instrument has to confirm; one that needs longer is named and tried again."""

RECORD_S = 0.5
"""How long the answer waits for its entry number; a dead disk does not hold it up."""

_log = logging.getLogger(__name__)

Confirmed = dict[str, bool]
"""Output name to whether it is on still."""


def switching_off(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind `off`. Nothing is asked, judged or recorded before the commands are out."""
    request = ticket.request
    began_ns = desk.clock.monotonic_ns()
    report = yield from _off_everywhere(desk, began_ns)
    pending = tuple(name for name, found in report.items() if not found["off"])
    desk.change(off_pending=pending)
    for name in pending:
        _log.error("off is not confirmed by %s: %s; it is tried again", name, report[name]["error"])
    note = desk.note(*_drafts(desk, request.author, request.why, report))
    no_longer_known(desk, "everything was switched off")
    follow_darkness(desk)
    entry = None
    try:
        entry = (yield Within(note, RECORD_S))[0].seq
    except (TrapdError, TimeoutError):  # it is kept in desk.unwritten and shown there
        entry = None
    return {"entry": entry, "recorded": entry is not None, "off": not pending, "instruments": report}


def retrying_off(desk: Desk) -> Activity:
    """Instruments that did not confirm `off` are tried again until they do."""
    began_ns = desk.clock.monotonic_ns()
    names = desk.situation.off_pending
    jobs = {name: _submit_off(desk, name) for name in names}
    report = {}
    for name, job in jobs.items():
        report[name] = yield from _answer(desk, job, OFF_S, began_ns)
    done = [name for name, found in report.items() if found["off"]]
    if done:
        desk.note(*_drafts(desk, DAEMON, "off, tried again", report))
        desk.change(off_pending=tuple(name for name in desk.situation.off_pending if name not in done))
        follow_darkness(desk)
        desk.spawn(looking(desk))
    return {}


def silencing(desk: Desk, author: str, why: str, request: int | None = None) -> Activity:
    """Tickle off, asked for again until it is; sent first and written down afterwards, as every off.

    ``request``: the entry of the scan that ends so.
    """
    name = desk.wiring.tickle
    if name is None:
        return {"off": True}
    job = _submit_off(desk, name)
    found = yield from _answer(desk, job, OFF_S, desk.clock.monotonic_ns())
    if not found["off"]:
        _log.error("the tickle is not confirmed off by %s: %s; it is tried again", name, found["error"])
        desk.change(off_pending=tuple(dict.fromkeys((*desk.situation.off_pending, name))))
    desk.note(*_switched(desk, name, found, author, why, request, 0))
    return {"off": found["off"], "error": found["error"]}


def _submit_off(desk: Desk, name: str) -> Future[tuple[Confirmed, int]]:
    return desk.submit(name, _off_job(desk, name), urgent=True)


def _off_everywhere(desk: Desk, began_ns: int) -> Part:
    drive = desk.wiring.drive
    for worker in desk.workers.values():
        worker.cancel_pending()
    jobs = {name: _submit_off(desk, name) for name in desk.wiring.with_outputs if name in (drive, desk.wiring.tickle)}
    rf = jobs.pop(drive)
    report: dict[str, Any] = {drive: (yield from _answer(desk, rf, RF_FIRST_S, began_ns))}
    jobs |= {name: _submit_off(desk, name) for name in desk.wiring.with_outputs if name not in (drive, *jobs)}
    for name, job in jobs.items():
        report[name] = yield from _answer(desk, job, _rest_s(desk, began_ns), began_ns)
    if not report[drive]["off"]:
        report[drive] = yield from _answer(desk, rf, _rest_s(desk, began_ns), began_ns)
    return report


def _rest_s(desk: Desk, began_ns: int) -> float:
    """What is left of `OFF_S`, for all instruments together."""
    return max(0.0, OFF_S - (desk.clock.monotonic_ns() - began_ns) / 1e9)


def _drafts(desk: Desk, author: str, why: str, report: Mapping[str, Any]) -> list[Draft]:
    """The entry, and for each output what was commanded and what came of it, as for any other command."""
    drafts = [Draft(kind="off", actor=author, data={"why": why, "instruments": dict(report)})]
    for name, found in report.items():
        drafts += _switched(desk, name, found, author, why, SameCommit(0), len(drafts))
    return drafts


def _switched(
    desk: Desk, name: str, found: Mapping[str, Any], author: str, why: str, request: int | SameCommit | None, first: int
) -> list[Draft]:
    """Intent and outcome of each output of one instrument; ``first`` is the place of the first of them in its commit."""
    drafts: list[Draft] = []
    for intent in desk.wiring.off_intents(name):
        origin = {"request": request, "who": author, "why": why}
        outcome = {**asdict(_outcome(found)), "intent": SameCommit(first + len(drafts))}
        drafts.append(Draft(kind="intent", actor=author, data={**asdict(intent), **origin}))
        drafts.append(Draft(kind="outcome", actor=author, data=outcome))
    return drafts


def _outcome(found: Mapping[str, Any]) -> Outcome:
    return Outcome(
        state="confirmed" if found["off"] else "not confirmed",
        sent_us=found["sent_us"],
        readback=0.0 if found["off"] else None,
        difference=0.0 if found["off"] else None,
        error=found["error"],
    )


def _off_job(desk: Desk, name: str) -> Callable[[Instrument], tuple[Confirmed, int]]:
    """Switches off and asks; with the monotonic time at which that was answered."""
    channels = {setpoint: channel for setpoint, (owner, channel) in desk.wiring.electrodes.items() if owner == name}

    def job(instrument: Instrument) -> tuple[Confirmed, int]:
        confirmed = switch_off(instrument)
        return confirmed, desk.clock.monotonic_ns()

    def switch_off(instrument: Instrument) -> Confirmed:
        if isinstance(instrument, RfSource):
            instrument.set_output(False)
            return {DRIVE_OUTPUT if name == desk.wiring.drive else TICKLE_OUTPUT: instrument.read_output()}
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


def _answer(desk: Desk, job: Future[tuple[Confirmed, int]], seconds: float, began_ns: int) -> Part:
    """What one instrument said: ``off``, after how long, when it was asked, and why not."""
    sent_us = desk.clock.now_us()
    still_on: list[str] = []
    error: str | None = None
    at_ns: int | None = None
    try:
        confirmed, at_ns = yield Within(job, seconds)
    except TimeoutError:
        error = f"no answer in {seconds:.2g} s"
    except Exception as failure:  # whatever it is, the other instruments go off and this one is tried again
        error = str(failure) or type(failure).__name__
    else:
        _take(desk, confirmed)
        still_on = [name for name, on in confirmed.items() if on]
        error = f"{', '.join(still_on)} still on" if still_on else None
    after_s = round(((at_ns or desk.clock.monotonic_ns()) - began_ns) / 1e9, 4)
    return {"off": error is None, "after_s": after_s, "sent_us": sent_us, "error": error}


def _take(desk: Desk, confirmed: Confirmed) -> None:
    if TICKLE_OUTPUT in confirmed:
        desk.change(tickling=confirmed[TICKLE_OUTPUT])
        return
    values = dict(desk.situation.values)
    for name, on in confirmed.items():
        if not on:
            values[AMPLITUDE if name == DRIVE_OUTPUT else name.removesuffix(".output")] = 0.0
    desk.change(values=values, outputs={**desk.situation.outputs, **confirmed})
