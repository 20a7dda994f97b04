"""The alarm clock: APScheduler, which only says that it is time to look. What is due is decided from the record."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from datetime import UTC
from typing import Any

from apscheduler.events import EVENT_JOB_ERROR, EVENT_JOB_MAX_INSTANCES, EVENT_JOB_MISSED
from apscheduler.schedulers.background import BackgroundScheduler

from trapd.schedule.due_times import trigger_of

_log = logging.getLogger(__name__)


class Alarm:
    """Calls ``ring`` when one of ``crons``, by name, is due by the machine's clock. ``ring`` must not block."""

    def __init__(self, crons: Mapping[str, str], ring: Callable[[], None]) -> None:
        self._crons = crons
        self._ring = ring
        defaults = {"misfire_grace_time": None, "coalesce": True, "max_instances": 1}
        self._scheduler = BackgroundScheduler(timezone=UTC, job_defaults=defaults)
        self._scheduler.add_listener(self._failed, EVENT_JOB_ERROR | EVENT_JOB_MISSED | EVENT_JOB_MAX_INSTANCES)

    def start(self) -> None:
        self.set()
        self._scheduler.start()

    def set(self) -> None:
        """Reckon anew from the time it is now: a job keeps the time it was given, and after the clock was set back it
        would sleep until that time comes again."""
        for name, cron in self._crons.items():
            self._scheduler.add_job(self._ring, trigger_of(cron), id=name, replace_existing=True)

    def stop(self) -> None:
        if self._scheduler.running:
            self._scheduler.shutdown(wait=False)

    def _failed(self, event: Any) -> None:
        _log.error("the alarm of %s failed: %s", event.job_id, getattr(event, "exception", None) or event)
        self._ring()
