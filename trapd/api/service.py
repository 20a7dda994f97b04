"""What the HTTP layer stands on: one trap's running service."""

from __future__ import annotations

from concurrent.futures import Executor
from dataclasses import dataclass
from pathlib import Path

from trapd.clock import Clock
from trapd.config.records import Config
from trapd.controller import Controller
from trapd.guard.model import GuardModel
from trapd.record import Record


@dataclass(frozen=True, kw_only=True)
class Service:
    """Built by the daemon. ``judges`` computes verdicts and windows that nobody's move depends on.

    ``simulated``: every instrument says that it is simulated. ``record_path`` is the record's file, for readers.
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
