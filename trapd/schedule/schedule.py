"""What is due is run, one scan at a time, and of each due time it is written down once what became of it."""

from __future__ import annotations

import logging
import threading
from collections import deque
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import asdict, dataclass, replace
from operator import itemgetter
from typing import Any

from trapd.clock import Clock
from trapd.config.records import DueSection
from trapd.controller import Controller, Ticket
from trapd.controller.drafts import DAEMON
from trapd.errors import RecordFailed, RecordUnwritable, Superseded
from trapd.record import Draft, DueRun, Entry, Reader, Record
from trapd.schedule.alarm import Alarm
from trapd.schedule.baseline import read_since
from trapd.schedule.clock_watch import ClockWatch
from trapd.schedule.due_times import MOST_MISSED, backlog, due_between, hindrance, utc
from trapd.setpoint import Due, Request

AUTHOR = "schedule"

TICK_S = 1.0
"""How often the clock is watched, and how much later than the alarm a due time may be noticed."""

_MOST_STEPS = 100
_MOST_LINES = 3
_MOST_TROUBLES = 5

_UNWRITTEN = "the record could not be written"
_BUSY = "a scan of the schedule was still waiting or running"

_log = logging.getLogger(__name__)


@dataclass(eq=False)
class _Row:
    """One schedule. ``newest_us``: its latest due time that has an entry, 0: none; ``last``: its newest entry; ``owed``:
    one that could not be written yet."""

    section: DueSection
    newest_us: int = 0
    since_us: int = 0
    last: DueRun | None = None
    owed: Draft | None = None

    @property
    def baseline_us(self) -> int:
        """Up to here everything has its entry, or was nobody's to do."""
        return max(self.newest_us, self.since_us)


class Schedule:
    """`start` and `close` once each; `upcoming` from any thread.

    1. A due time gets one entry of kind "due_run": the controller's, in the commit of the request it accepted (run,
       late), or this one's (skipped, missed). The newest entry of each schedule is the baseline; only what lies beyond
       it is due. So neither a restart nor a step of the clock makes anything due twice or loses it: after a step back
       nothing is due until the clock passes the baseline again.
    2. Of several due times the newest is run and the others were missed; of those before the start, all were.
    3. What cannot be written is not run; it is looked at again a second later.
    """

    def __init__(
        self, sections: Iterable[DueSection], *, controller: Controller, record: Record, reader: Reader, clock: Clock
    ) -> None:
        """Reads from the record where each schedule stands. Raises `RecordFailed`."""
        self._controller = controller
        self._record = record
        self._reader = reader
        self._clock = clock
        self._watch = ClockWatch(clock)
        self._start_us = clock.now_us()
        self._rows = [self._row(section) for section in sections]
        self._troubles: dict[str, None] = {}
        self._steps: deque[Draft] = deque(maxlen=_MOST_STEPS)
        self._wake = threading.Event()
        self._news = threading.Event()
        self._closing = threading.Event()
        self._gone = threading.Event()
        self._alarm = Alarm({row.section.name: row.section.cron for row in self._rows}, self._wake.set)
        self._thread = threading.Thread(target=self._run, name="schedule", daemon=True)

    def start(self) -> None:
        self._alarm.start()
        self._thread.start()

    def close(self, timeout_s: float = 5.0) -> None:
        """Nothing is begun any more; a scan that waits its turn is withdrawn, one that runs is the controller's."""
        self._closing.set()
        self._wake.set()
        self._news.set()
        self._alarm.stop()
        if self._thread.is_alive():
            self._thread.join(timeout_s)
        self._gone.set()
        self._news.set()

    def upcoming(self) -> list[dict[str, Any]]:
        """What comes next, the soonest first: "schedule", "scan", "cron", "due_us", and "last", a `DueRun` or None."""
        now_us = self._clock.now_us()
        return sorted((_upcoming(row, now_us) for row in self._rows), key=itemgetter("due_us"))

    def look(self) -> None:
        """One round: watch the clock, write down what was missed, run the oldest of what is due now and wait for it."""
        self._watch_clock()
        for _ in range(len(self._steps)):
            self._note(self._steps.popleft())
        now_us = self._clock.now_us()
        try:
            found = [(self._catch_up(row, now_us), row) for row in self._rows]
            self._troubles.clear()
            due = [(due_us, row) for due_us, row in found if due_us is not None]
            if due and not self._closing.is_set():
                self._take(*min(due, key=itemgetter(0)))
                self._wake.set()  # another one may wait
        except RecordFailed as error:
            if _UNWRITTEN not in self._troubles:
                _log.error("the schedule rests, the record cannot be used: %s", error)
            self._trouble(_UNWRITTEN)

    def _run(self) -> None:
        while not self._closing.is_set():
            try:
                self.look()
            except Exception:
                _log.exception("the schedule goes on after a bug")
            self._wake.wait(TICK_S)
            self._wake.clear()

    def _row(self, section: DueSection) -> _Row:
        row = _Row(section=section)
        self._read_newest(row)
        row.since_us = read_since(self._reader, section, 0 if row.last is None else row.last.seq, self._start_us)
        return row

    def _read_newest(self, row: _Row) -> None:
        name = row.section.name
        row.newest_us = max(row.newest_us, self._reader.newest_due(name) or 0)
        row.last = next(iter(self._reader.due_runs(schedule=name, newest=True, limit=1)), None)

    def _catch_up(self, row: _Row, now_us: int) -> int | None:
        """Write down what was missed; the newest due time is still to be run, if there is one. Raises `RecordFailed`."""
        self._pay(row)
        cron = row.section.cron
        if next(due_between(cron, row.baseline_us, now_us), None) is None:
            return None
        self._read_newest(row)  # a commit that failed may have come to stand all the same
        self._miss(row, backlog(cron, row.baseline_us, min(self._start_us, now_us)), "the daemon was not running")
        due = backlog(cron, row.baseline_us, now_us, MOST_MISSED + 1)
        self._miss(row, due[:-1], "; ".join(self._troubles) or "nobody looked at the time")
        return due[-1][0] if due else None

    def _miss(self, row: _Row, missed: Sequence[tuple[int, str]], reason: str) -> None:
        if missed:
            self._write(row, [self._draft(row, due_us, "missed", reason + more) for due_us, more in missed])

    def _take(self, due_us: int, row: _Row) -> None:
        """Run what is due, or write down why not. Raises `RecordFailed`: the entry is then owed."""
        request, reason = None, hindrance(self._controller.situation, self._clock.now_us())
        if reason is None:
            self._trouble(_BUSY)
            ticket = self._controller.submit(_request(row.section, due_us))
            if not self._answered(ticket):
                return  # closed: whatever the controller writes about it, the next start sees
            request, reason = _answer(ticket, closing=self._closing.is_set())
            if reason is None:
                with suppress(RecordFailed):
                    self._read_newest(row)
                self._wait(ticket.done, self._closing.is_set)
                return
        row.owed = self._draft(row, due_us, "skipped", reason, request)
        self._pay(row)

    def _answered(self, ticket: Ticket) -> bool:
        """Whether the controller has. It takes its time while somebody's move or scan comes before this one."""
        if not self._wait(ticket.recorded, self._closing.is_set):
            self._controller.withdraw(ticket)
        return self._wait(ticket.recorded, self._gone.is_set)

    def _pay(self, row: _Row) -> None:
        if row.owed is not None:
            self._write(row, [row.owed])
            row.owed = None

    def _write(self, row: _Row, drafts: Sequence[Draft]) -> None:
        """Wait until they are on the disk, those that are not there yet. Raises `RecordFailed`."""
        self._read_newest(row)
        future = self._record.append(*(draft for draft in drafts if draft.data["due_us"] > row.newest_us))
        if not self._wait(future, self._gone.is_set):
            raise RecordUnwritable("the schedule was closed before its entries were written")
        future.result()
        self._read_newest(row)

    def _wait(self, future: Future[Any], given_up: Callable[[], bool]) -> bool:
        """Whether it is done; meanwhile somebody watches the clock."""
        future.add_done_callback(lambda _: self._news.set())
        while not (future.done() or given_up()):
            self._news.wait(TICK_S)
            self._news.clear()
            self._watch_clock()
        return future.done()

    def _watch_clock(self) -> None:
        step_s = self._watch.read_step_s()
        if not step_s:
            return
        words = f"the clock stepped {'forward' if step_s > 0 else 'back'} by {abs(step_s):.0f} s"
        _log.warning("%s", words)
        self._note(Draft(kind="clock", actor=DAEMON, data={"step_s": round(step_s, 3)}))
        self._alarm.set()
        if step_s > 0:
            self._trouble(f"{words}, or the machine slept")
        else:
            self._begin_again(self._clock.now_us())

    def _begin_again(self, now_us: int) -> None:
        """The clock was ahead when the schedule began: times that it will pass again now are still to come."""
        self._start_us = min(self._start_us, now_us)
        for row in self._rows:
            row.since_us = min(row.since_us, now_us)

    def _note(self, draft: Draft) -> None:
        """Append without waiting; what cannot be written is tried again with the next round."""

        def keep(done: Future[tuple[Entry, ...]]) -> None:
            if isinstance(done.exception(), RecordFailed):
                late = {"written_late": True, "happened_us": happened_us}
                self._steps.append(replace(draft, data={**late, **draft.data}))

        happened_us = self._clock.now_us()
        self._record.append(draft).add_done_callback(keep)

    def _trouble(self, words: str) -> None:
        if len(self._troubles) < _MOST_TROUBLES:
            self._troubles[words] = None

    def _draft(self, row: _Row, due_us: int, state: str, reason: str, request: int | None = None) -> Draft:
        data = {
            "schedule": row.section.name,
            "scan": row.section.scan,
            "due_us": due_us,
            "state": state,
            "late_s": max(0.0, (self._clock.now_us() - due_us) / 1e6),
            "request": request,
            "reason": reason,
        }
        return Draft(kind="due_run", actor=DAEMON, data=data)


def _request(section: DueSection, due_us: int) -> Request:
    due = Due(schedule=section.name, scan=section.scan, due_us=due_us)
    return Request(kind="scan", author=AUTHOR, why=f"due {utc(due_us)}", scan=section.scan, due=due)


def _answer(ticket: Ticket, *, closing: bool) -> tuple[int | None, str | None]:
    """The entry of the request if it has one, and why it was not accepted; None if it was."""
    try:
        answer = ticket.recorded.result()
    except Exception as error:
        if closing and isinstance(error, Superseded):
            return None, "the daemon was stopping"
        return None, "\n".join(str(error).splitlines()[:_MOST_LINES]) or type(error).__name__
    if answer["accepted"]:
        return answer["entry"], None
    broken = [reason["message"] for reason in answer["verdict"]["reasons"]]
    return answer["entry"], "\n".join(broken[:_MOST_LINES]) or "the guard refused it"


def _upcoming(row: _Row, now_us: int) -> dict[str, Any]:
    section, last = row.section, row.last
    due_us = next(due_between(section.cron, max(now_us, row.baseline_us)))
    plan = {"schedule": section.name, "scan": section.scan, "cron": section.cron, "due_us": due_us}
    return {**plan, "last": None if last is None else asdict(last)}
