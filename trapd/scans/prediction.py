"""Where a secular frequency is expected in a state of the trap, and how well that is known."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from math import hypot

from trapd.guard.allowed import point_of
from trapd.guard.limits import amplitude_band
from trapd.guard.model import GuardModel
from trapd.physics.floquet import motions
from trapd.setpoint import AMPLITUDE, FREQUENCY, Values

MODES = ("x", "y", "z")


@dataclass(frozen=True, kw_only=True)
class Prediction:
    """One mode of one species: the exact secular frequency and its standard uncertainty (Hz).

    The uncertainty is half of what the frequency changes over the band in which the drive's amplitude may really stand
    (the trap file's gain and resonator uncertainties are read as standard ones), and in quadrature a share of the
    frequency for what the model does not know: geometry, supplies, stray fields.
    """

    species: str
    mode: str
    frequency_hz: float
    uncertainty_hz: float


def predict(
    model: GuardModel, species: str, mode: str, values: Values, model_uncertainty: float = 0.0
) -> Prediction | None:
    """None where the motion is not stable, at the set amplitude or at an end of its band, or the drive is off."""
    found = predictions(model, [species], values, model_uncertainty)
    return next((one for one in found if one.mode == mode), None)


def predictions(
    model: GuardModel, species: Iterable[str], values: Values, model_uncertainty: float = 0.0
) -> list[Prediction]:
    """All modes of these species, those that are stable. ``model_uncertainty`` is relative."""
    if values[FREQUENCY] <= 0 or values[AMPLITUDE] <= 0:
        return []
    low_v, high_v = amplitude_band(model, values)
    points = [replace(point_of(values), amplitude_v=amplitude_v) for amplitude_v in (values[AMPLITUDE], low_v, high_v)]
    found = []
    for name in species:
        here, low, high = (one.secular_frequencies_hz for one in motions(model.trap, model.catalogue[name], points))
        if here is None or low is None or high is None:
            continue
        found += [
            Prediction(
                species=name,
                mode=mode,
                frequency_hz=here[k],
                uncertainty_hz=hypot((high[k] - low[k]) / 2, model_uncertainty * here[k]),
            )
            for k, mode in enumerate(MODES)
        ]
    return found
