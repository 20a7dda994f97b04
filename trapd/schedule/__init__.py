"""The schedule: scans become due by cron, and of each due time it is written down exactly once what became of it."""

from trapd.schedule.schedule import Schedule

__all__ = ["Schedule"]
