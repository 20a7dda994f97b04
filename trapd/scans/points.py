"""What a scan has measured so far: one row of numbers for each tickled or tickle-off count."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class Points:
    """Arrays of equal length n, in order of time."""

    frequency_hz: Array  # (n,) NaN where the tickle was off
    dwell_s: Array  # (n,)
    counts: Array  # (n,) integers as float64
    time_s: Array  # (n,) middle of the dwell, s since the scan began

    def __post_init__(self) -> None:
        shapes = {np.shape(column) for column in (self.frequency_hz, self.dwell_s, self.counts, self.time_s)}
        if len(shapes) != 1 or len(shapes.pop()) != 1:
            raise ValueError("the four columns of a scan's points must be of one length")
        if not ((self.dwell_s > 0).all() and (self.counts >= 0).all() and np.isfinite(self.time_s).all()):
            raise ValueError("every point needs a positive dwell, counts that are not negative, and a finite time")

    def __len__(self) -> int:
        return len(self.counts)

    def __getitem__(self, rows: NDArray[np.intp] | NDArray[np.bool_] | slice) -> Points:
        return Points(
            frequency_hz=self.frequency_hz[rows],
            dwell_s=self.dwell_s[rows],
            counts=self.counts[rows],
            time_s=self.time_s[rows],
        )

    @property
    def tickled(self) -> NDArray[np.bool_]:
        """(n,) where the tickle was on."""
        return np.isfinite(self.frequency_hz)
