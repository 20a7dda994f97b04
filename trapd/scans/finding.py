"""What is asked of a scan, and what it answers."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt
from typing import Literal

State = Literal["found", "none", "unclear", "vanished"]


@dataclass(frozen=True, kw_only=True)
class Question:
    """What a scan is to find out."""

    low_hz: float  # the window searched
    high_hz: float
    width_low_hz: float  # full width at half maximum that the line may have
    width_high_hz: float
    min_contrast: float = 0.05  # what "none" must exclude
    floor_per_s: float = 0.0  # counts below this are nobody home
    dark_per_s: float = 0.0  # known dark rate; 0: unknown, contained in the rate
    target_hz: float | None = None  # standard uncertainty wanted

    def __post_init__(self) -> None:
        if not (self.low_hz < self.high_hz and 0 < self.width_low_hz <= self.width_high_hz):
            raise ValueError("a scan's question needs a window and widths, each from low to high")

    @property
    def width_hz(self) -> float:
        """The width expected."""
        return sqrt(self.width_low_hz * self.width_high_hz)


@dataclass(frozen=True, kw_only=True)
class Finding:
    """The answer, for a person and for the record."""

    state: State
    message: str  # what was found, or why there is no number
    flags: tuple[str, ...] = ()  # names of FLAGS
    frequency_hz: float | None = None  # at the time `at_s`; only when found, or seen before the counts vanished
    uncertainty_hz: float | None = None  # standard
    interval_68_hz: tuple[float, float] | None = None
    interval_95_hz: tuple[float, float] | None = None
    at_s: float | None = None  # mean time of what the frequency rests on, s since the scan began
    width_hz: float | None = None
    contrast: float | None = None  # negative for a rise
    rate_per_s: float | None = None  # far from the line, without the dark rate
    likelihood_ratio: float | None = None  # 2 ln(L1/L0)
    contrast_limit: float | None = None  # where nothing was found: the largest contrast not excluded (95 %)
