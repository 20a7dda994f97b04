"""One thread for all that is overdue: it runs short actions (shut a socket, interrupt an instrument) at their time.

A blocked `recv` or `send` cannot watch its own clock, and one watcher for each instrument would double the threads.
"""

from __future__ import annotations

import heapq
import itertools
import logging
import threading
import time
from collections.abc import Callable

_log = logging.getLogger(__name__)


class Deadline:
    """One action that will run unless `cancel` comes first. Cancelling costs no lock and may come too late."""

    __slots__ = ("_action", "due_s")

    def __init__(self, due_s: float, action: Callable[[], None]) -> None:
        self.due_s = due_s
        self._action: Callable[[], None] | None = action

    @property
    def cancelled(self) -> bool:
        return self._action is None

    def cancel(self) -> None:
        self._action = None

    def run(self) -> None:
        action, self._action = self._action, None
        if action is None:
            return
        try:
            action()
        except Exception:
            _log.exception("an overdue action failed")


class Deadlines:
    """Runs actions when they are due, in one daemon thread that starts with the first. Actions must not block.

    A cancelled action may already be running: whoever acts on something that lives on must check, under its own lock,
    that it still means the same call.
    """

    def __init__(self) -> None:
        self._changed = threading.Condition()
        self._queue: list[tuple[float, int, Deadline]] = []
        self._order = itertools.count()
        self._wakes_s = float("inf")
        self._thread: threading.Thread | None = None

    def after(self, delay_s: float, action: Callable[[], None]) -> Deadline:
        """Run ``action`` in ``delay_s`` seconds (monotonic) unless the answer is cancelled before."""
        deadline = Deadline(time.monotonic() + delay_s, action)
        with self._changed:
            if self._thread is None:
                self._thread = threading.Thread(target=self._run, name="deadline", daemon=True)
                self._thread.start()
            heapq.heappush(self._queue, (deadline.due_s, next(self._order), deadline))
            # Most deadlines lie behind one that is already waited for: waking the thread for each would cost more
            # than the exchange that it guards.
            if deadline.due_s < self._wakes_s:
                self._changed.notify()
        return deadline

    def _run(self) -> None:
        while True:
            for deadline in self._take_due():
                deadline.run()

    def _take_due(self) -> list[Deadline]:
        with self._changed:
            while self._queue and self._queue[0][2].cancelled:
                heapq.heappop(self._queue)
            due: list[Deadline] = []
            while self._queue and self._queue[0][0] <= time.monotonic():
                due.append(heapq.heappop(self._queue)[2])
            if not due:
                self._wakes_s = self._queue[0][0] if self._queue else float("inf")
                self._changed.wait(self._wakes_s - time.monotonic() if self._queue else None)
                self._wakes_s = float("-inf")
            return due


DEADLINES = Deadlines()
"""The one of this process."""
