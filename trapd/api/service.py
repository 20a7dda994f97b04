"""What the HTTP layer stands on: one trap's running service."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from trapd.clock import Clock
from trapd.config.records import Config
from trapd.controller import Controller
from trapd.guard.model import GuardModel
from trapd.record import Record


class Schedule(Protocol):
    """What the API asks of the schedule, from any thread."""

    def upcoming(self) -> Sequence[Mapping[str, Any]]:
        """What comes next, the soonest first: "schedule", "scan", "due_us", and what became of the last."""


@dataclass(frozen=True, kw_only=True)
class Service:
    """Built by the daemon. ``judges`` computes verdicts and windows that nobody's move depends on.

    ``simulated``: every instrument says that it is simulated. ``record_path`` is the record's file, for readers.
    ``schedule`` None: nothing comes by itself.
    """

    config: Config
    model: GuardModel
    controller: Controller
    record: Record
    record_path: Path
    clock: Clock
    judges: Executor
    version: str
    simulated: bool
    schedule: Schedule | None = None


def upcoming(service: Service) -> Sequence[Mapping[str, Any]]:
    """What the schedule does next, the soonest first."""
    return () if service.schedule is None else service.schedule.upcoming()
