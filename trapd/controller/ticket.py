"""A request on its way through the controller."""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import Future
from dataclasses import dataclass, field
from typing import Any

from trapd.setpoint import Request


@dataclass(eq=False)
class Ticket:
    """``recorded`` is answered when request and verdict are durable, ``done`` at the end.

    ``registered``: the request has an entry, or will have one; nobody writes it down a second time. ``answered_later``: it
    ended while that entry was being written; whoever asked is told when it is known whether it stands.
    """

    request: Request
    recorded: Future[dict[str, Any]] = field(default_factory=Future)
    done: Future[dict[str, Any]] = field(default_factory=Future)
    registered: bool = False
    answered_later: bool = False

    def __post_init__(self) -> None:
        # Whoever asked may go away; that cancels nothing here.
        self.recorded.set_running_or_notify_cancel()
        self.done.set_running_or_notify_cancel()

    def tell(self, answer: Mapping[str, Any]) -> None:
        """The verdict is on disk: whoever asked may be told."""
        if not self.recorded.done():
            self.recorded.set_result(dict(answer))

    def finish(self, answer: Mapping[str, Any]) -> None:
        self.tell(answer)
        self.done.set_result(dict(answer))

    def fail(self, error: Exception) -> None:
        if not self.recorded.done():
            self.recorded.set_exception(error)
        self.done.set_exception(error)
