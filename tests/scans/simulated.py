"""Whole scans of the rack's ion on its own clock: the plan, the points, the passes and the stopping rule of the daemon,
without its sockets; the truth is the spectrum of the ion's orbit."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import isnan

import numpy as np

from trapd.config.records import ScanSection
from trapd.guard.model import TickleLimits
from trapd.scans.estimate import Finding, estimate, is_enough
from trapd.scans.plan import plan_scan
from trapd.scans.points import Points
from trapd.scans.prediction import Prediction
from trapd_simulated import IonSettings, ManualClock, Rack, RackSettings

SECTION = ScanSection(
    name="x", mode="x", tickle_v=0.4e-3, span_hz=100e3, dwell_s=20e-3, target_hz=50.0, width_hz=2000.0, min_contrast=0.1
)
OVERHEAD_S = 5e-3
SHOTS = 3


@dataclass(frozen=True, kw_only=True)
class Scanned:
    finding: Finding
    truth_hz: float
    passes: int
    points: Points

    @property
    def is_within_68(self) -> bool:
        return _is_within(self.finding.interval_68_hz, self.truth_hz)

    @property
    def is_within_95(self) -> bool:
        return _is_within(self.finding.interval_95_hz, self.truth_hz)


class SimulatedBench:
    """One rack without its ports, its trap on and settled, an ion in it. ``intensity_rms``: slow drift of the light;
    ``greatest_contrast`` below 0: the ion is brighter while it moves."""

    def __init__(
        self,
        seed: int,
        *,
        intensity_rms: float = 0.0,
        greatest_contrast: float = 0.9,
        section: ScanSection = SECTION,
    ) -> None:
        ion = replace(
            IonSettings(), intensity_rms=intensity_rms, intensity_time_s=15.0, greatest_contrast=greatest_contrast
        )
        self.section = section
        self.clock = ManualClock()
        self.rack = Rack(RackSettings(ion=ion), seed=seed, clock=self.clock)
        for channel, voltage_v in ((1, 120.0), (2, 1.0)):
            self.rack.front_panel("dc", f"SOUR{channel}:VOLT {voltage_v};:OUTP{channel} ON")
        self.rack.front_panel("rf", f"FREQ 21E6;:VOLT {260.0 / 38.0:.4f};:OUTP ON")
        self.rack.front_panel("counter", f"TOT:GATE:TIME {section.dwell_s}")
        self.clock.advance(3000.0)  # warm
        self.rack.load_ion()
        self.clock.advance(0.1)

    def scan(self, seed: int, *, away_hz: float = 0.0) -> Scanned:
        """One scan. It expects the line up to a third of its window from where it is; ``away_hz``: or so far away."""
        random = np.random.default_rng(seed)
        truth_hz = self.rack.spectrum(self.section.mode)
        assert not isnan(truth_hz)
        expected_hz = truth_hz + away_hz + random.uniform(-15e3, 15e3)
        prediction = Prediction(species="40Ca+", mode=self.section.mode, frequency_hz=expected_hz, uncertainty_hz=10e3)
        limits = TickleLimits(level_max_v=0.02)
        plan = plan_scan(self.section, prediction, [], limits, self.section.tickle_v, floor_per_s=500.0)
        self.rack.front_panel("tickle", f"VOLT {plan.level_v}")
        rows = [self._count(None) for _ in range(SHOTS)]
        for number in range(1, plan.passes + 1):
            rows += [self._count(frequency_hz) for frequency_hz in plan.order(seed, number)]
            points = Points(
                **{name: np.array(column) for name, column in zip(_COLUMNS, zip(*rows, strict=True), strict=True)}
            )
            finding = estimate(points, plan.question)
            if is_enough(finding, plan.question, number):
                break
        return Scanned(finding=finding, truth_hz=truth_hz, passes=number, points=points)

    def _count(self, frequency_hz: float | None) -> tuple[float, float, float, float]:
        dwell_s = self.section.dwell_s
        if frequency_hz is not None:
            self.rack.front_panel(
                "tickle", f"FREQ {frequency_hz:.0f};:BURS:STAT ON;:BURS:DUR {dwell_s + 0.2};:OUTP ON;:INIT"
            )
        self.rack.front_panel("counter", "INIT")
        middle_s = self.clock.now_s() + dwell_s / 2
        self.clock.advance(dwell_s)
        counts = float(self.rack.front_panel("counter", "FETC?") or "nan")
        if frequency_hz is not None:
            self.rack.front_panel("tickle", "OUTP OFF")
        self.clock.advance(OVERHEAD_S)
        return (np.nan if frequency_hz is None else frequency_hz), dwell_s, counts, middle_s


_COLUMNS = ("frequency_hz", "dwell_s", "counts", "time_s")


def _is_within(interval: tuple[float, float] | None, truth_hz: float) -> bool:
    return interval is not None and interval[0] <= truth_hz <= interval[1]
