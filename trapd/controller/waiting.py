"""The requests that wait their turn."""

from __future__ import annotations

from trapd.controller.ticket import Ticket
from trapd.errors import QueueFull

MOST_WAITING = 16
"""Requests that may wait behind the one in progress; one more is answered 429."""


class Waiting:
    """In the order of arrival, but what the schedule wants comes after what people want."""

    def __init__(self) -> None:
        self._people: list[Ticket] = []
        self._due: list[Ticket] = []

    def __len__(self) -> int:
        return len(self._people) + len(self._due)

    def add(self, ticket: Ticket) -> None:
        """Raises `QueueFull`."""
        if len(self) >= MOST_WAITING:
            raise QueueFull(f"{MOST_WAITING} requests wait already; nothing was sent")
        (self._people if ticket.request.due is None else self._due).append(ticket)

    def next(self) -> Ticket:
        """The one whose turn it is; there must be one."""
        return (self._people or self._due).pop(0)

    def remove(self, ticket: Ticket) -> bool:
        """Whether it was still waiting."""
        for line in (self._people, self._due):
            if ticket in line:
                line.remove(ticket)
                return True
        return False

    def remove_all(self) -> list[Ticket]:
        """Everything that waited."""
        waited = self._people + self._due
        self._people, self._due = [], []
        return waited
