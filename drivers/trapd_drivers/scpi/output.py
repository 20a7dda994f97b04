"""Output switches, with or without a query that tells their state."""

from __future__ import annotations

from trapd_drivers.profile import OutputDialect
from trapd_drivers.scpi.session import Session


class Output:
    """The switches of one instrument; channel 0 where there are no channels.

    An instrument that cannot be asked is believed to be in the state it was last told, and on before that and after it
    was switched on: on is the answer that makes nobody careless.
    """

    def __init__(self, session: Session, dialect: OutputDialect) -> None:
        self._session = session
        self._dialect = dialect
        self._told: dict[int, bool] = {}

    def set(self, on: bool, channel: int = 0) -> None:
        """Always sent, whatever the state is believed to be; off even to an instrument that has lost its settings."""
        with self._session.call():
            self._told.pop(channel, None)
            self._session.command(self._dialect.on if on else self._dialect.off, channel=channel, always=not on)
            self._told[channel] = on

    def read(self, channel: int = 0) -> bool:
        if self._dialect.query is None:
            return self._told.get(channel, True)
        with self._session.call():
            return self._session.read_output(self._dialect.query, self._dialect, channel)

    def forget(self) -> None:
        self._told.clear()
