"""The activities in progress: begun, resumed through the mailbox, and forgotten when they have ended."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from typing import Any

from trapd.clock import Clock
from trapd.controller.activity import Activity
from trapd.controller.mailbox import Mailbox, Urgency
from trapd.controller.running import Running
from trapd.controller.timers import Timers
from trapd.errors import Superseded, TrapdError


class Stage:
    """Belongs to the controller's thread; only `post` may be called from any other. ``ended`` hears of each end."""

    def __init__(self, mailbox: Mailbox, clock: Clock, ended: Callable[[Running], None]) -> None:
        self.timers = Timers(clock)
        self._mailbox = mailbox
        self._ended = ended
        self._running: dict[int, Running] = {}
        self._numbers = itertools.count()

    def __len__(self) -> int:
        return len(self._running)

    def new(
        self,
        activity: Activity,
        finish: Callable[[dict[str, Any]], None],
        fail: Callable[[TrapdError], None],
        *,
        to_the_end: bool = False,
    ) -> Running:
        """An activity that has not taken its first step."""
        number = next(self._numbers)
        running = self._running[number] = Running(self, number, activity, finish, fail, to_the_end)
        return running

    def begin(
        self,
        activity: Activity,
        finish: Callable[[dict[str, Any]], None],
        fail: Callable[[TrapdError], None],
        *,
        to_the_end: bool = False,
    ) -> None:
        self.new(activity, finish, fail, to_the_end=to_the_end).resume(None)

    def spawn(self, activity: Activity, *, to_the_end: bool = False) -> None:
        """An activity that nobody waits for."""
        self.begin(activity, lambda _: None, lambda _: None, to_the_end=to_the_end)

    def end_all(self, why: str) -> None:
        """All but those that go on to their end."""
        for running in [one for one in self._running.values() if not one.to_the_end]:
            running.throw(Superseded(why))

    def schedule(self, seconds: float, act: Callable[[], None]) -> None:
        self.timers.add(seconds, act)

    def post(self, act: Callable[[], None]) -> None:
        """From any thread: something an activity waited for is there."""
        self._mailbox.post(Urgency.STEP_DONE, act)

    def finished(self, running: Running) -> None:
        self._running.pop(running.number, None)
        self._ended(running)
