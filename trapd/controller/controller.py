"""The only writer to hardware: one thread, one mailbox, and straight-line activities that wait only there."""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import replace
from typing import Any

from trapd.controller.activity import Activity
from trapd.controller.aiming import require_known
from trapd.controller.claiming import IMMEDIATE, drop_what_is_over, require_allowed, revoking
from trapd.controller.desk import RETRY_S, Desk
from trapd.controller.drafts import DAEMON, unregistered_drafts
from trapd.controller.interlocking import running_down, watching
from trapd.controller.kinds import ACTIVITIES
from trapd.controller.looking import looking, no_longer_known
from trapd.controller.mailbox import Mailbox, Urgency
from trapd.controller.off import retrying_off, silencing, switching_off
from trapd.controller.precedence import gives_way, require_free
from trapd.controller.running import Running
from trapd.controller.situation import Situation
from trapd.controller.stage import Stage
from trapd.controller.ticket import Ticket
from trapd.controller.waiting import Waiting
from trapd.errors import Superseded, TrapdError
from trapd.record import Draft
from trapd.setpoint import Request

TICK_S = 0.25
"""How often the thread looks at what is due (retries, the end of loading) when nothing else comes."""

HEARTBEAT_S = 60.0

IDLE_LOOK_S = 10.0
"""How often the instruments are looked at while nothing moves."""

LAST_TRY_S = 1.0

_log = logging.getLogger(__name__)


class Controller:
    """Start with `start`; ask with `submit`, `off` and `stop` from any thread; read `situation` from any thread."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self._mailbox = Mailbox()
        self._stage = Stage(self._mailbox, desk.clock, self._ended)
        desk.spawn = self._stage.spawn
        self._waiting = Waiting()
        self._current: Running | None = None
        self._current_request: Request | None = None
        self._ending = False
        self._retrying_off = False
        self._next_off_ns = 0
        self._offs = 0
        self._adopted = False
        self._next_look_ns = 0
        self._next_heartbeat_ns = 0
        self._thread = threading.Thread(target=self._run, name="controller", daemon=True)

    @property
    def situation(self) -> Situation:
        return replace(self._desk.situation, unwritten=len(self._desk.unwritten))

    def start(self, adoption: Callable[[Desk], Activity]) -> Future[dict[str, Any]]:
        """Run the thread; its first activity reads the instruments and touches nothing."""
        future: Future[dict[str, Any]] = Future()
        self._thread.start()
        self._mailbox.post(Urgency.STEP_DONE, lambda: self._adopt(adoption, future))
        return future

    def submit(self, request: Request) -> Ticket:
        """Queue a request. Its ticket is answered when it is recorded and when it is done."""
        ticket = Ticket(request)
        if request.kind == "off":
            self._mailbox.post(Urgency.OFF, lambda: self._off(ticket))
        elif request.kind == "stop":
            self._mailbox.post(Urgency.STOP, lambda: self._stop(ticket))
        else:
            self._mailbox.post(Urgency.REQUEST, lambda: self._request(ticket))
        return ticket

    def withdraw(self, ticket: Ticket) -> None:
        """Whoever asked has gone: a request that still waits its turn is dropped, one that has begun goes on."""
        self._mailbox.post(Urgency.STOP, lambda: self._withdraw(ticket))

    def close(self, timeout_s: float = 5.0) -> None:
        """Stop what moves, leave every output as it is, end the thread."""
        self._mailbox.post(Urgency.STOP, self._end)
        if self._thread.is_alive():
            self._thread.join(timeout_s)

    # Everything below runs on the controller's thread.

    def _run(self) -> None:
        while not (self._ending and not len(self._stage)):
            letter = self._mailbox.take(self._stage.timers.patience_s(TICK_S))
            try:
                if letter is not None:
                    letter.act()
                self._do_what_is_due()
            except Exception:  # a bug in one letter must not take `off` away
                _log.exception("the controller goes on after a bug")
        self._leave()

    def _leave(self) -> None:
        """Answer whoever still asked, and try a last time to write what could not be written."""
        while (letter := self._mailbox.take(0.0)) is not None:
            self._do(letter.act)
        for future in self._desk.retry_unwritten():
            with suppress(Exception):
                future.result(LAST_TRY_S)
        for drafts in self._desk.unwritten:
            _log.error("never written: %s", drafts)

    def _do_what_is_due(self) -> None:
        now_ns = self._desk.clock.monotonic_ns()
        for act in self._stage.timers.take_ready():
            self._do(act)
        if self._desk.situation.contents.presence == "loading" and now_ns >= (self._desk.loading_until_ns or now_ns):
            no_longer_known(self._desk, "loading was not concluded in time")
            if self._current is not None:  # it was judged by what held while loading
                self._current.throw(Superseded("loading was not concluded in time; the move stopped where it was"))
        if self._desk.unwritten and self._desk.retry_due_ns <= now_ns:
            self._desk.retry_due_ns = now_ns + int(RETRY_S * 1e9)
            self._desk.retry_unwritten()
        drop_what_is_over(self._desk)
        if now_ns >= self._next_off_ns and self._offs == 0:
            self._retry_off()
        idle = self._current is None and self._offs == 0 and not self._ending and self._adopted
        if idle and now_ns >= self._next_look_ns:
            self._next_look_ns = now_ns + int(IDLE_LOOK_S * 1e9)
            self._stage.spawn(looking(self._desk))
        if now_ns >= self._next_heartbeat_ns and self._adopted and not self._ending:
            self._next_heartbeat_ns = now_ns + int(HEARTBEAT_S * 1e9)
            self._desk.note(Draft(kind="heartbeat", actor=DAEMON, data={"values": dict(self._desk.situation.values)}))

    def _do(self, act: Callable[[], None]) -> None:
        try:
            act()
        except Exception:  # the others that are due come all the same
            _log.exception("the controller goes on after a bug")

    def _adopt(self, adoption: Callable[[Desk], Activity], future: Future[dict[str, Any]]) -> None:
        def adopted(found: dict[str, Any]) -> None:
            self._adopted = True
            self._next_look_ns = self._desk.clock.monotonic_ns() + int(IDLE_LOOK_S * 1e9)
            for name in self._desk.wiring.gauges:
                self._stage.spawn(watching(self._desk, name, self._trip))
            future.set_result(found)

        self._current = running = self._stage.new(adoption(self._desk), adopted, future.set_exception)
        running.resume(None)

    def _off(self, ticket: Ticket) -> None:
        self._supersede("off came first")

        def finish(answer: dict[str, Any]) -> None:
            ticket.finish(answer)
            ended()

        def fail(error: TrapdError) -> None:
            ticket.fail(error)
            ended()

        def ended() -> None:
            self._offs -= 1
            self._next_off_ns = self._desk.clock.monotonic_ns() + int(RETRY_S * 1e9)
            if self._desk.situation.claim is not None:
                self._stage.spawn(revoking(self._desk, ticket.request.author, "everything was switched off"))
            self._next()

        self._offs += 1
        self._stage.begin(switching_off(self._desk, ticket), finish, fail, to_the_end=True)

    def _trip(self, name: str) -> None:
        """An interlock has tripped: what moves stops, and the action of the file follows."""
        why = f"interlock {name} tripped"
        self._supersede(why)
        action = self._desk.config.interlocks[name].action
        off = Ticket(Request(kind="off", author=DAEMON, why=why))
        if action == "off":
            self._off(off)
        elif action == "ramp down":
            self._offs += 1

            def down(_: object) -> None:
                self._offs -= 1
                self._off(off)

            self._stage.begin(running_down(self._desk, why), down, down, to_the_end=True)

    def _stop(self, ticket: Ticket) -> None:
        situation, busy, request = self._desk.situation, self._current is not None, ticket.request
        under_way = situation.moving or situation.scanning
        if situation.tickling and not situation.scanning:
            self._stage.spawn(silencing(self._desk, request.author, request.why), to_the_end=True)
        self._supersede(f"{request.author} said stop")
        data = {"why": request.why, "request": under_way and under_way.request}
        self._desk.note(Draft(kind="halt", actor=request.author, data=data))
        ticket.finish({"stopped": busy, "values": dict(self._desk.situation.values)})

    def _request(self, ticket: Ticket) -> None:
        request, running = ticket.request, self._current_request
        try:
            self._require_allowed(request)
            require_known(self._desk, request)
            if request.kind in IMMEDIATE:
                activity = IMMEDIATE[request.kind](self._desk, ticket)
                self._stage.begin(activity, ticket.finish, lambda error: self._fail(ticket, error))
                return
            require_free(running, request)
            self._waiting.add(ticket)
        except TrapdError as error:
            self._fail(ticket, error)
            return
        if self._current is not None and gives_way(running, request):
            self._current.throw(Superseded(f"{request.author} asked for something else; the scan ended there"))
        self._next()

    def _require_allowed(self, request: Request) -> None:
        """Asked on arrival, and again when its turn comes."""
        if self._ending:
            raise Superseded("the daemon is stopping; nothing was sent")
        require_allowed(self._desk, request)

    def _withdraw(self, ticket: Ticket) -> None:
        if self._waiting.remove(ticket):
            self._fail(ticket, Superseded("whoever asked went away before its turn; nothing was sent"))

    def _next(self) -> None:
        while self._current is None and self._offs == 0 and self._desk.contents_open == 0 and len(self._waiting):
            ticket = self._waiting.next()
            try:
                self._require_allowed(ticket.request)
            except TrapdError as error:
                self._fail(ticket, error)
                continue
            self._start(ticket)

    def _start(self, ticket: Ticket) -> None:
        activity = ACTIVITIES[ticket.request.kind](self._desk, ticket)
        # The slot is taken before the first step: an activity may end at once and ask for the next.
        self._current_request = ticket.request
        self._current = running = self._stage.new(activity, ticket.finish, lambda error: self._fail(ticket, error))
        running.resume(None)

    def _fail(self, ticket: Ticket, error: TrapdError) -> None:
        """Answer with the error. What never came as far as a verdict is written down here."""
        if ticket.answered_later:
            return
        if not ticket.registered and not ticket.recorded.done():
            self._desk.note(*unregistered_drafts(ticket.request, self._desk.situation.values, error))
        ticket.fail(error)

    def _supersede(self, why: str) -> None:
        """Stop what moves and answer what waits: the outputs hold where they are."""
        for ticket in self._waiting.remove_all():
            self._fail(ticket, Superseded(f"{why}; nothing was sent"))
        current, self._current, self._current_request = self._current, None, None
        if current is not None:
            ended = "the scan ended there" if self._desk.situation.scanning else "the move stopped where it was"
            current.throw(Superseded(f"{why}; {ended}"))

    def _end(self) -> None:
        self._ending = True
        self._supersede("the daemon is stopping")
        self._stage.end_all("the daemon is stopping")

    def _retry_off(self) -> None:
        if self._desk.situation.off_pending and not self._retrying_off and not self._ending:
            self._retrying_off = True
            self._stage.begin(retrying_off(self._desk), lambda _: self._off_retried(), lambda _: self._off_retried())

    def _off_retried(self) -> None:
        self._retrying_off = False
        self._next_off_ns = self._desk.clock.monotonic_ns() + int(RETRY_S * 1e9)

    def _ended(self, running: Running) -> None:
        if self._current is running:
            self._current = self._current_request = None
        self._next()
