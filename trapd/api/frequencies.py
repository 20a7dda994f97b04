"""The secular frequency of every configured scan: as predicted for the present setpoints, and as last measured."""

from __future__ import annotations

import logging
import math
from collections.abc import Collection
from dataclasses import dataclass, replace

from trapd.config.records import ScanSection
from trapd.controller import Measured, Situation
from trapd.guard.model import GuardModel
from trapd.scans.prediction import Prediction, predict
from trapd.setpoint import Values

_SAME = 1e-9
"""Relative: as near as two values of one setpoint are that was not moved."""

_log = logging.getLogger("trapd.api")


@dataclass(frozen=True, kw_only=True)
class Compared:
    """``predicted_hz`` and its uncertainty (half the spread over the resonator's gain band) are for the present
    setpoints; None when the mode is not stable there, or nobody knows which species is meant.

    ``difference_hz`` is measured minus predicted, both at the setpoints of the measurement; ``difference_sigma`` the
    same in combined standard uncertainties. ``same_setpoints``: those are the present ones. All None before the first
    measurement of this species.
    """

    scan: str
    species: str | None
    mode: str
    predicted_hz: float | None = None
    predicted_uncertainty_hz: float | None = None
    measured_hz: float | None = None
    uncertainty_hz: float | None = None
    at_us: int | None = None
    entry: int | None = None
    difference_hz: float | None = None
    difference_sigma: float | None = None
    same_setpoints: bool | None = None


class Frequencies:
    """Compares; a prediction is kept until the setpoints change."""

    def __init__(self, model: GuardModel, scans: tuple[ScanSection, ...]) -> None:
        self._model = model
        self._scans = scans
        self._known: dict[tuple[str, str], tuple[Values, Prediction | None]] = {}

    def compared(self, situation: Situation) -> list[Compared]:
        """In the order of the trap file. Blocks while it predicts."""
        return [self._compared(scan, situation) for scan in self._scans]

    def _compared(self, scan: ScanSection, situation: Situation) -> Compared:
        measured = situation.measured.get(scan.name)
        species = scan.species or _only(situation.contents.possible) or _only(self._model.catalogue)
        species = species or (measured.species if measured else None)
        predicted = self._predicted(species, scan, situation.values) if species else None
        compared = Compared(
            scan=scan.name,
            species=species,
            mode=scan.mode,
            predicted_hz=None if predicted is None else predicted.frequency_hz,
            predicted_uncertainty_hz=None if predicted is None else predicted.uncertainty_hz,
        )
        if measured is None or measured.species != species:
            return compared
        return _with_measured(compared, measured, _same(measured.values, situation.values))

    def _predicted(self, species: str, scan: ScanSection, values: Values) -> Prediction | None:
        known = self._known.get((species, scan.name))
        if known is None or known[0] != values:
            known = self._known[species, scan.name] = (values, self._asked(species, scan, values))
        return known[1]

    def _asked(self, species: str, scan: ScanSection, values: Values) -> Prediction | None:
        if set(values) != set(self._model.limits):
            return None
        try:
            return predict(self._model, species, scan.mode, values, scan.model_uncertainty)
        except Exception:  # whatever is wrong with the model must not hide the state of the trap
            _log.exception("no prediction of %s of %s at %s", scan.mode, species, values)
            return None


def _with_measured(compared: Compared, measured: Measured, same: bool) -> Compared:
    """While the setpoints are the same, the model of now is what the measurement is held against."""
    there_hz, spread_hz = compared.predicted_hz, compared.predicted_uncertainty_hz
    if not same or there_hz is None or spread_hz is None:
        there_hz, spread_hz = measured.predicted_hz, measured.predicted_uncertainty_hz
    difference_hz = measured.frequency_hz - there_hz
    sigma_hz = math.hypot(measured.uncertainty_hz, spread_hz)
    return replace(
        compared,
        measured_hz=measured.frequency_hz,
        uncertainty_hz=measured.uncertainty_hz,
        at_us=measured.at_us,
        entry=measured.entry,
        difference_hz=difference_hz,
        difference_sigma=difference_hz / sigma_hz if sigma_hz > 0 else None,
        same_setpoints=same,
    )


def _only(species: Collection[str]) -> str | None:
    return next(iter(species)) if len(species) == 1 else None


def _same(one: Values, other: Values) -> bool:
    return one.keys() == other.keys() and all(math.isclose(one[name], other[name], rel_tol=_SAME) for name in one)
