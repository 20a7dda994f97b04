"""The resonator between synthesizer and electrode, and how far its gain may be from the nominal one."""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot, sqrt


@dataclass(frozen=True, kw_only=True)
class Resonator:
    """``gain``: electrode volts per synthesizer volt on resonance, both zero to peak; ``gain_uncertainty`` is relative.

    Off resonance ``gain(f) = gain / sqrt(1 + x^2)`` with ``x = 2 loaded_q (f - center) / center`` (a resonance that is
    narrow beside its frequency). ``loaded_q`` None is a flat gain, the same at every frequency.
    """

    gain: float
    gain_uncertainty: float = 0.0
    center_hz: float = 0.0
    center_uncertainty_hz: float = 0.0
    loaded_q: float | None = None


def _detuning(resonator: Resonator, offset_hz: float) -> float:
    """x of the formula above, for an offset from the nominal centre; 0 for a flat gain."""
    return 0.0 if resonator.loaded_q is None else 2 * resonator.loaded_q * offset_hz / resonator.center_hz


def gain_at(resonator: Resonator, frequency_hz: float) -> float:
    """Nominal gain, electrode volts per synthesizer volt."""
    return resonator.gain / hypot(1.0, _detuning(resonator, frequency_hz - resonator.center_hz))


def band(resonator: Resonator, low_hz: float, high_hz: float) -> tuple[float, float]:
    """Lowest and highest true over nominal gain anywhere in [low_hz, high_hz].

    The true resonator has its centre and its gain anywhere within their uncertainties; a true centre shifted by d (in
    units of x) makes the ratio sqrt((1 + x^2) / (1 + (x - d)^2)). For a given d this has its extremes where
    x = d/2 +- sqrt(1 + d^2/4); for a given x, at the d nearest to x and the d farthest from it. Both ends are exact.
    """
    start = _detuning(resonator, low_hz - resonator.center_hz)
    stop = _detuning(resonator, high_hz - resonator.center_hz)
    shift = _detuning(resonator, resonator.center_uncertainty_hz)
    turns = (shift, -shift, *(s * shift / 2 + t * sqrt(1 + shift**2 / 4) for s in (1, -1) for t in (1, -1)))
    places = (start, stop, *(x for x in turns if start < x < stop))
    lowest = min(hypot(1.0, x) / hypot(1.0, abs(x) + shift) for x in places)
    highest = max(hypot(1.0, x) / hypot(1.0, max(abs(x) - shift, 0.0)) for x in places)
    return (1 - resonator.gain_uncertainty) * lowest, (1 + resonator.gain_uncertainty) * highest
