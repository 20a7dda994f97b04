"""What the ion scatters into the counter."""

from __future__ import annotations

import math
import random

from trapd_simulated.ion_settings import IonSettings

_GRID = 64  # the light is renewed this often in its time constant


class Light:
    """Its intensity is an Ornstein-Uhlenbeck process around 1, exact over any gap, on a grid of rack time."""

    def __init__(self, settings: IonSettings, seed: int) -> None:
        self._settings = settings
        self._random = random.Random(f"{seed}/light")
        self._grid_s = settings.intensity_time_s / _GRID
        self._cell = 0
        self._deviation = settings.intensity_rms * self._random.gauss(0.0, 1.0)

    def rate_per_s(self, amplitude_squared_m2: float, time_s: float) -> float:
        """Of an ion whose motion has this amplitude; the law stands at `IonSettings`. Times never run backwards."""
        signal = amplitude_squared_m2 / self._settings.half_signal_m**2
        weakened = 1.0 - self._settings.greatest_contrast * signal / (1.0 + signal)
        return self._settings.dark_per_s + self._settings.rate_per_s * self._intensity(time_s) * weakened

    def next_change_s(self, time_s: float) -> float:
        if self._settings.intensity_rms == 0.0:
            return math.inf
        next_s = (math.floor(time_s / self._grid_s) + 1.0) * self._grid_s
        return next_s if next_s > time_s else next_s + self._grid_s  # rounding must not stop time

    def _intensity(self, time_s: float) -> float:
        cell = math.floor(time_s / self._grid_s)
        if cell > self._cell:
            kept = math.exp(-(cell - self._cell) / _GRID)
            fresh = self._settings.intensity_rms * math.sqrt(1.0 - kept**2)
            self._deviation = kept * self._deviation + fresh * self._random.gauss(0.0, 1.0)
            self._cell = cell
        return max(0.0, 1.0 + self._deviation)
