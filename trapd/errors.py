"""Every deliberate failure, one tree, split by whose fault it is.

    TrapdError
    ├── Mistake                what was asked or written cannot be         exit 2
    │   ├── ConfigError        the trap file                               422 config
    │   ├── BadRequest         a request or a command line                 422 bad_request
    │   └── NotFound           a name or an entry that does not exist      404 not_found
    ├── Refused                we could, and will not                      exit 3
    │   ├── GuardRefused       a rule of the guard; carries the verdict    409 refused
    │   ├── NotAuthenticated   no token, or one that is not valid          401 not_authenticated
    │   ├── NotPermitted       the role is too low, or a wrong origin      403 not_permitted
    │   ├── Conflict           the trap's state does not allow it now      409 conflict
    │   ├── Superseded         `off`, a stop or a later start came first   409 superseded
    │   ├── QueueFull          too many requests wait                      429 queue_full
    │   └── Locked             another daemon owns it                      423 locked
    ├── NotConfirmed           sent, and the instrument did not confirm    502 not_confirmed       exit 4
    ├── Unreachable            nobody answers                              exit 5
    │   ├── InstrumentUnreachable                                          503 instrument_unreachable
    │   └── DaemonUnreachable                                              503 daemon_unreachable
    ├── RecordFailed           the record                                  exit 6
    │   ├── RecordUnwritable   nothing was sent                            503 record_unwritable
    │   └── RecordDamaged      it does not verify                          500 record_damaged
    └── Bug                    ours; the only one shown with a traceback   500 bug                 exit 1

A refusal by the guard is data (`setpoint.Verdict`) until it reaches an edge; only the edge raises `GuardRefused`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, ClassVar


class TrapdError(Exception):
    """Base of the tree. ``str(error)`` is the message for people; `details` is JSON for programs."""

    code: ClassVar[str] = "bug"
    http_status: ClassVar[int] = 500
    exit_code: ClassVar[int] = 1

    def __init__(self, message: str, details: Mapping[str, Any] | None = None) -> None:
        super().__init__(message)
        self.message = message
        self.details: dict[str, Any] = dict(details or {})


class Mistake(TrapdError):
    code, http_status, exit_code = "bad_request", 422, 2


class ConfigError(Mistake):
    code = "config"


class BadRequest(Mistake):
    code = "bad_request"


class NotFound(Mistake):
    code, http_status = "not_found", 404


class Refused(TrapdError):
    code, http_status, exit_code = "refused", 409, 3


class GuardRefused(Refused):
    code = "refused"


class NotAuthenticated(Refused):
    code, http_status = "not_authenticated", 401


class NotPermitted(Refused):
    code, http_status = "not_permitted", 403


class Conflict(Refused):
    code = "conflict"


class Superseded(Refused):
    code = "superseded"


class QueueFull(Refused):
    code, http_status = "queue_full", 429


class Locked(Refused):
    code, http_status = "locked", 423


class NotConfirmed(TrapdError):
    code, http_status, exit_code = "not_confirmed", 502, 4


class Unreachable(TrapdError):
    code, http_status, exit_code = "unreachable", 503, 5


class InstrumentUnreachable(Unreachable):
    code = "instrument_unreachable"


class DaemonUnreachable(Unreachable):
    code = "daemon_unreachable"


class RecordFailed(TrapdError):
    code, http_status, exit_code = "record_failed", 500, 6


class RecordUnwritable(RecordFailed):
    code, http_status = "record_unwritable", 503


class RecordDamaged(RecordFailed):
    code = "record_damaged"


class Bug(TrapdError):
    """Something that cannot happen did."""
