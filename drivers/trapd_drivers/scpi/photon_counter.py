"""A photon counter that speaks SCPI."""

from __future__ import annotations

from trapd_drivers.dialect import Dialect
from trapd_drivers.errors import InstrumentRefused
from trapd_drivers.interfaces import PhotonCounter
from trapd_drivers.scpi.instrument import ScpiInstrument
from trapd_drivers.scpi.session import Session

_GATE = ("gate", 0)


class ScpiPhotonCounter(ScpiInstrument, PhotonCounter):
    """See `PhotonCounter` for the contract.

    A count that this object did not start is nobody's: its gate is not known.
    """

    KIND = "photon_counter"

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        assert dialect.course is not None, "every profile's [photon_counter.gate] says how to start"
        assert dialect.reading is not None, "every profile's [photon_counter] has a count"
        self.gate = self._scales[_GATE]
        self._course, self._count = dialect.course, dialect.reading
        self._started_at: int | None = None  # the instrument's power-ons then

    def start_count(self, gate_s: float) -> None:
        gate = self._encoded(_GATE, "gate_s", gate_s)
        self._started_at = None
        with self._session.call():
            self._start(self._course, _GATE, gate)
            self._started_at = self._session.power_ons

    def read_count(self) -> int | None:
        if self._started_at is None:
            raise InstrumentRefused(f"{self.resource}: no count has been started; nothing was sent")
        with self._session.call():
            if self._started_at != self._session.power_ons:
                raise InstrumentRefused(f"{self.resource}: was switched off and on, and has lost the count")
            if self._session.read_state(self._course.running):
                return None
            return self._session.read_count(self._count)
