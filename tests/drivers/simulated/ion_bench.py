"""A rack with an ion and no sockets, on a clock that stands still until it is told: how a bench of many scans uses it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.optimize import curve_fit

from trapd_simulated import IonSettings, ManualClock, Rack, RackSettings, ResonatorSettings

NOTHING = (0.0, 0.0, 0.0)
STEADY = IonSettings(
    intensity_rms=0.0,
    gain_drift_per_h=0.0,
    stray_curvature_drift_v_per_m2_h=(NOTHING,) * 3,
    stray_field_drift_v_per_m_h=NOTHING,
)
QUIET = replace(STEADY, stray_field_v_per_m=NOTHING, stray_curvature_v_per_m2=(NOTHING,) * 3)


class Bench:
    """A rack whose trap is on, as an operator's hands would set it, with an ion when the trap holds one."""

    def __init__(self, ion: IonSettings = STEADY, seed: int = 0, resonator: ResonatorSettings | None = None) -> None:
        self.clock = ManualClock()
        settings = RackSettings(ion=ion, resonator=resonator or ResonatorSettings())
        self.rack = Rack(settings, seed=seed, clock=self.clock)
        self.tell("rf", "FREQ 21 MHZ;VOLT 6.8421;:OUTP ON")  # 260 V at the nominal gain of 38
        self.tell("dc", "VOLT 120;:SOUR2:VOLT 1;:OUTP ON;OUTP2 ON;OUTP3 ON")
        self.tell("tickle", "VOLT 0.0005;:BURS:STAT ON;:BURS:DUR 0.02;:OUTP ON")
        self.tell("counter", "TOT:GATE:TIME 0.02")
        self.clock.advance(3600.0)
        self.rack.load_ion()
        self.clock.advance(0.1)

    def tell(self, instrument: str, text: str) -> None:
        self.rack.front_panel(instrument, text)

    def count(self, frequency_hz: float | None) -> int:
        """One point of a scan; None: tickle off."""
        if frequency_hz is not None:
            self.tell("tickle", f"FREQ {frequency_hz:.0f};:INIT")
        self.tell("counter", "INIT")
        self.clock.advance(0.0205)
        return int(self.rack.front_panel("counter", "FETC?") or 0)

    def scan(self, center_hz: float, passes: int, span_hz: float = 10e3) -> tuple[np.ndarray, np.ndarray]:
        grid = center_hz + np.linspace(-span_hz / 2.0, span_hz / 2.0, 41)
        counts = [[self.count(one) for one in grid] for _ in range(passes)]
        return grid, np.sum(counts, axis=0)

    def line(self, center_hz: float, passes: int = 20) -> tuple[np.ndarray, np.ndarray]:
        """A Lorentzian fitted to a scan: (center Hz, full width Hz, contrast, level), and their standard errors."""
        grid, counts = self.scan(center_hz, passes)

        def law(f: np.ndarray, center: float, width: float, contrast: float, level: float) -> np.ndarray:
            return level * (1.0 - contrast / (1.0 + (2.0 * (f - center) / width) ** 2))

        sign = 1.0 if counts.min() < 0.9 * np.median(counts) else -1.0
        start = (grid[np.argmax(np.abs(counts - np.median(counts)))], 2e3, 0.3 * sign, float(counts.max()))
        found, covariance = curve_fit(law, grid, counts, start, sigma=np.sqrt(counts), absolute_sigma=True)
        return found, np.sqrt(np.diag(covariance))
