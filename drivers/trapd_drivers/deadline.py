"""One thread for all that is overdue: it runs short actions (shut a socket, interrupt an instrument) at their time.

A blocked `recv` or `send` cannot watch its own clock, and one watcher for each instrument would double the threads.
"""

from __future__ import annotations

import heapq
import logging
import threading
import time
from collections.abc import Callable

_log = logging.getLogger(__name__)


class Deadline:
    """One action that will run unless `cancel` comes first. Cancelling costs no lock and may come too late."""

    __slots__ = ("action", "due_s")

    def __init__(self, due_s: float, action: Callable[[], None]) -> None:
        self.due_s = due_s
        self.action: Callable[[], None] | None = action

    def cancel(self) -> None:
        self.action = None

    def __lt__(self, other: Deadline) -> bool:
        return self.due_s < other.due_s


class Deadlines:
    """Runs actions when they are due, in one daemon thread that starts with the first. Actions must not block.

    A cancelled action may already be running: whoever acts on something that lives on must check, under its own lock,
    that it still means the same call.
    """

    def __init__(self) -> None:
        self._changed = threading.Condition()
        self._queue: list[Deadline] = []
        self._wakes_s = float("-inf")  # when the thread will look by itself; it looks anyway when it is not waiting
        self._thread: threading.Thread | None = None

    def after(self, delay_s: float, action: Callable[[], None]) -> Deadline:
        """Run ``action`` in ``delay_s`` seconds (monotonic) unless the answer is cancelled before."""
        deadline = Deadline(time.monotonic() + delay_s, action)
        with self._changed:
            if self._thread is None:
                self._thread = threading.Thread(target=self._run, name="deadline", daemon=True)
                self._thread.start()
            heapq.heappush(self._queue, deadline)
            # Most deadlines lie behind one that is already waited for: waking the thread for each would cost more
            # than the exchange that it guards.
            if deadline.due_s < self._wakes_s:
                self._changed.notify()
        return deadline

    def _run(self) -> None:
        while True:
            action = self._next_due().action
            try:
                if action is not None:
                    action()
            except Exception:
                _log.exception("an overdue action failed")

    def _next_due(self) -> Deadline:
        with self._changed:
            while True:
                while self._queue and self._queue[0].action is None:
                    heapq.heappop(self._queue)
                if self._queue and self._queue[0].due_s <= time.monotonic():
                    return heapq.heappop(self._queue)
                self._wakes_s = self._queue[0].due_s if self._queue else float("inf")
                self._changed.wait(min(self._wakes_s - time.monotonic(), threading.TIMEOUT_MAX))
                self._wakes_s = float("-inf")


DEADLINES = Deadlines()
"""The one of this process."""
