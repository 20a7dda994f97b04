"""Work in the controller is written as a straight line and waits only in the mailbox.

An activity is a generator. It yields what it waits for and is resumed by a letter when that is there: a future gives its
result or raises its error inside the generator, a `Pause` just ends, `Within` raises TimeoutError when the future takes
too long. Its return value, or its error, answers whoever asked for it.
"""

from __future__ import annotations

from collections.abc import Generator
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Pause:
    """Wait this long (s) on the monotonic clock."""

    seconds: float


@dataclass(frozen=True)
class Within:
    """Wait for a future, at most this long (s)."""

    future: Future[Any]
    seconds: float


Waits = Future[Any] | Pause | Within
Activity = Generator[Waits, Any, dict[str, Any]]
"""Returns the JSON-able answer to the request."""

Part = Generator[Waits, Any, Any]
"""A piece of an activity, entered with ``yield from``."""
