"""The record: what was asked, judged, sent and read back, append-only and chained, in one SQLite file.

`Record` writes it (one process), `Reader` asks it (any number, also while it is written), `verify` proves it, `export`
copies it out. The only package that imports SQLAlchemy.
"""

from trapd.record.ask import Commanded, Reader, Refusal, State
from trapd.record.ask_scans import DueRun, MadeScan, ScanPoint, SecularFrequency
from trapd.record.entry import KINDS, NO_DIGEST, Draft, Entry, Head, SameCommit, rfc3339
from trapd.record.export import EXPORTED, FORMATS, export
from trapd.record.verify import Problem, Report, verify
from trapd.record.writer import Record

__all__ = [
    "EXPORTED",
    "FORMATS",
    "KINDS",
    "NO_DIGEST",
    "Commanded",
    "Draft",
    "DueRun",
    "Entry",
    "Head",
    "MadeScan",
    "Problem",
    "Reader",
    "Record",
    "Refusal",
    "Report",
    "SameCommit",
    "ScanPoint",
    "SecularFrequency",
    "State",
    "export",
    "rfc3339",
    "verify",
]
