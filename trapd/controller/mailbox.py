"""The controller's one mailbox: off before trip before stop before step done before request."""

from __future__ import annotations

import itertools
import queue
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import IntEnum


class Urgency(IntEnum):
    """What is taken first. Within one urgency, in the order of arrival."""

    OFF = 0
    TRIP = 1
    STOP = 2
    STEP_DONE = 3
    REQUEST = 4


@dataclass(frozen=True, order=True)
class Letter:
    """Something the controller's thread has to do. ``act`` must not block."""

    urgency: Urgency
    number: int
    act: Callable[[], None] = field(compare=False)


class Mailbox:
    """Ordered by urgency; any thread posts, one thread takes."""

    def __init__(self) -> None:
        self._letters: queue.PriorityQueue[Letter] = queue.PriorityQueue()
        self._number = itertools.count()

    def post(self, urgency: Urgency, act: Callable[[], None]) -> None:
        self._letters.put(Letter(urgency, next(self._number), act))

    def take(self, timeout_s: float | None) -> Letter | None:
        """The most urgent letter; None when none came in time."""
        try:
            return self._letters.get(timeout=timeout_s)
        except queue.Empty:
            return None
