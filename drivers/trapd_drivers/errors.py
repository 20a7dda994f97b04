"""What can go wrong between a driver and its instrument, one tree.

    DriverError
    ├── Unreachable        no connection, no reply in time, the peer closed, or `interrupt` was called
    ├── Malformed          a reply came and is not what the protocol allows (garbage, too long, not a number)
    ├── InstrumentRefused  the instrument reported an error of its own for this command
    ├── WrongIdentity      another instrument answers at this address than before
    ├── OutOfRange         the value is outside the driver's stated range; nothing was sent
    └── ProfileError       the dialect profile or the driver's name is wrong; nothing was opened

After `Unreachable`, `Malformed` and `WrongIdentity` the session has been dropped; the next call reopens it, checks the
identity and looks for a power-on and queued errors (which `read_status` then tells), so that none is blamed on the next
command. After the others the session is still in step.
"""

from __future__ import annotations


class DriverError(Exception):
    """Base of the tree; the message names the instrument's resource."""


class Unreachable(DriverError):
    pass


class Malformed(DriverError):
    pass


class InstrumentRefused(DriverError):
    """``entries`` are the drained (code, text) pairs of the instrument's error queue."""

    def __init__(self, message: str, entries: tuple[tuple[int, str], ...] = ()) -> None:
        super().__init__(message)
        self.entries = entries


class WrongIdentity(DriverError):
    pass


class OutOfRange(DriverError):
    pass


class ProfileError(DriverError):
    pass
