"""From when on a schedule answers for its due times, as far as it has no entries of its own to say so."""

from __future__ import annotations

from itertools import takewhile

from trapd.config.records import DueSection
from trapd.record import Entry, Reader


def read_since(reader: Reader, section: DueSection, last_seq: int, now_us: int) -> int:
    """When the schedule began to be in force without a break, UTC microseconds: ``now_us`` for one that is new.

    The daemon writes down its configuration at each start. Those at the end of the record that name this schedule with
    this cron are its unbroken run; what came due before was nobody's to do. ``last_seq`` is the schedule's newest
    entry, 0 before the first: one from within the run says all that is needed, and 0 is returned.
    """
    newest_first = reversed(reader.entries(kind="configuration", newest=True))
    run = list(takewhile(lambda entry: _names(entry, section), newest_first))
    if not run:
        return now_us
    return 0 if last_seq > run[-1].seq else min(run[-1].time_us, now_us)  # later than now: the clock was set back


def _names(configuration: Entry, section: DueSection) -> bool:
    named = ((one["name"], one["cron"]) for one in configuration.data.get("schedule", ()))
    return (section.name, section.cron) in named
