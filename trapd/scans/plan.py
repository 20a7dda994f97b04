"""What a scan will do: its window, its tickle, and the order of its points."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil, floor

import numpy as np

from trapd.config.records import ScanSection
from trapd.guard.model import TickleLimits
from trapd.scans.finding import Question
from trapd.scans.prediction import Prediction
from trapd.setpoint import Envelope

BURST_SLACK_S = 0.5
"""How much longer than its count a burst may go on: what instruments need to answer."""

WIDE_SD = 3.0
"""The search covers the prediction's uncertainty this many times to either side."""

LEAST_WIDTHS = 8.0
"""And never fewer widths of the line than this, all in all."""

SHOT_EVERY = 12
"""Points between two counts with the tickle off."""

_OVERHEAD_S = 0.5  # for each point at most, beyond its dwell: beyond that something is wrong


@dataclass(frozen=True, kw_only=True)
class Plan:
    """One scan: ``points`` frequencies a pass, ``step_hz`` apart from ``low_hz`` to ``high_hz``, at most ``passes`` passes.

    ``others``: predictions of the other modes of what is held, which may answer in the same window.
    """

    scan: str
    species: str
    mode: str
    low_hz: float
    high_hz: float
    step_hz: float
    resolution_hz: float
    points: int
    passes: int
    level_v: float
    dwell_s: float
    burst_s: float
    longest_s: float
    width_hz: float
    min_contrast: float
    target_hz: float
    floor_per_s: float
    predicted_hz: float
    predicted_uncertainty_hz: float
    method: str
    others: tuple[Prediction, ...] = ()

    @property
    def envelope(self) -> Envelope:
        return Envelope(
            low_hz=self.low_hz,
            high_hz=self.high_hz,
            level_v=self.level_v,
            burst_s=self.burst_s,
            longest_s=self.longest_s,
        )

    @property
    def question(self) -> Question:
        return Question(
            low_hz=self.low_hz,
            high_hz=self.high_hz,
            width_low_hz=self.width_hz / 4,
            width_high_hz=self.width_hz * 4,
            min_contrast=self.min_contrast,
            floor_per_s=self.floor_per_s,
            target_hz=self.target_hz,
        )

    def order(self, seed: int, number: int) -> tuple[float | None, ...]:
        """The frequencies (Hz) of pass ``number``, from 1; None is a count with the tickle off.

        Every pass is in a random order of its own and its grid begins at a random place: under a slow drift of the light
        one pass upward raises false alarms, a random order in several passes does not.
        """
        random = np.random.default_rng([seed, number])
        grid = self.low_hz + (np.arange(self.points) + random.random()) * self.step_hz
        told = np.clip(np.round(grid / self.resolution_hz) * self.resolution_hz, self.low_hz, self.high_hz)
        frequencies: list[float | None] = random.permutation(told).tolist()
        for shot in reversed(range(ceil(self.points / SHOT_EVERY))):
            frequencies.insert(shot * SHOT_EVERY, None)
        return tuple(frequencies)

    def is_ambiguous(self, frequency_hz: float) -> bool:
        """Whether another mode would explain a line there about as well."""
        own = abs(frequency_hz - self.predicted_hz) / max(self.predicted_uncertainty_hz, self.width_hz)
        distances = [
            abs(frequency_hz - one.frequency_hz) / max(one.uncertainty_hz, self.width_hz) for one in self.others
        ]
        return any(other < min(WIDE_SD, 2 * own + 1) for other in distances)


def plan_scan(
    section: ScanSection,
    prediction: Prediction,
    others: Sequence[Prediction],
    limits: TickleLimits,
    level_v: float,
    floor_per_s: float,
) -> Plan:
    """The plan of ``section`` where its mode is expected at ``prediction``. ``level_v`` is what the generator will really
    give; the window is what the prediction leaves open, no wider than the section's span, on frequencies it can give."""
    half_hz = max(WIDE_SD * prediction.uncertainty_hz, LEAST_WIDTHS / 2 * section.width_hz)
    half_hz = min(half_hz, section.span_hz / 2)
    step = limits.frequency_resolution_hz
    low_hz = ceil((prediction.frequency_hz - half_hz) / step) * step
    high_hz = floor((prediction.frequency_hz + half_hz) / step) * step
    points = ceil((high_hz - low_hz) / (section.width_hz / 2))
    return Plan(
        scan=section.name,
        species=prediction.species,
        mode=section.mode,
        low_hz=low_hz,
        high_hz=high_hz,
        step_hz=(high_hz - low_hz) / points,
        resolution_hz=step,
        points=points,
        passes=section.passes,
        level_v=level_v,
        dwell_s=section.dwell_s,
        burst_s=section.dwell_s + BURST_SLACK_S,
        longest_s=section.passes * points * (section.dwell_s + _OVERHEAD_S),
        width_hz=section.width_hz,
        min_contrast=section.min_contrast,
        target_hz=section.target_hz,
        floor_per_s=floor_per_s,
        predicted_hz=prediction.frequency_hz,
        predicted_uncertainty_hz=prediction.uncertainty_hz,
        method=section.method,
        others=tuple(others),
    )
