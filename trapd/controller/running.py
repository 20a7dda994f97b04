"""An activity in progress: resumed by letters, and only by the letter it waits for."""

from __future__ import annotations

import logging
from collections.abc import Callable
from concurrent.futures import Future
from typing import Any, Protocol

from trapd.controller.activity import Activity, Pause, Waits, Within
from trapd.errors import Bug, Superseded, TrapdError

_log = logging.getLogger(__name__)


class Host(Protocol):
    """What a running activity needs of the controller."""

    def post(self, act: Callable[[], None]) -> None: ...

    def schedule(self, seconds: float, act: Callable[[], None]) -> None: ...

    def finished(self, running: Running) -> None: ...


class Running:
    """An activity and what it waits for. A resumption that belongs to an older wait is ignored."""

    def __init__(
        self,
        host: Host,
        number: int,
        activity: Activity,
        finish: Callable[[dict[str, Any]], None],
        fail: Callable[[TrapdError], None],
        to_the_end: bool,
    ) -> None:
        self.number = number
        self.to_the_end = to_the_end
        self.ended = False
        self._host = host
        self._activity = activity
        self._finish = finish
        self._fail = fail
        self._wait = 0

    def resume(self, value: Any) -> None:
        self._advance(lambda: self._activity.send(value))

    def throw(self, error: BaseException) -> None:
        self._advance(lambda: self._activity.throw(error))

    def _advance(self, move: Callable[[], Waits]) -> None:
        if self.ended:
            return
        self._wait += 1
        try:
            waits = move()
        except StopIteration as stop:
            answer = stop.value
            self._end(lambda: self._finish(answer))
        except TrapdError as error:
            failure: TrapdError = error
            self._end(lambda: self._fail(failure))
        except Exception as error:
            _log.exception("a bug in an activity of the controller")
            bug = Bug(f"{type(error).__name__}: {error}")
            bug.__cause__ = error
            self._end(lambda: self._fail(bug))
        else:
            self._await(waits, self._wait)

    def _await(self, waits: Waits, wait: int) -> None:
        if isinstance(waits, Pause):
            self._host.schedule(waits.seconds, lambda: self._if_still(wait, lambda: self.resume(None)))
            return
        future = waits.future if isinstance(waits, Within) else waits
        if isinstance(waits, Within):
            late = TimeoutError()
            self._host.schedule(waits.seconds, lambda: self._if_still(wait, lambda: self.throw(late)))
        future.add_done_callback(lambda done: self._host.post(lambda: self._if_still(wait, lambda: self._take(done))))

    def _if_still(self, wait: int, act: Callable[[], None]) -> None:
        if wait == self._wait:
            act()

    def _take(self, done: Future[Any]) -> None:
        if done.cancelled():
            self.throw(Superseded("cancelled before it was sent"))
            return
        error = done.exception()
        if error is None:
            self.resume(done.result())
        else:
            self.throw(error)

    def _end(self, answer: Callable[[], None]) -> None:
        self.ended = True
        answer()
        self._host.finished(self)
