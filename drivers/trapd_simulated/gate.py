"""One counting time of a photon counter, and the photons that are to be expected in it."""

from __future__ import annotations

from collections.abc import Callable


class Gate:
    """``fill`` brings `photons` up to the end of the gate, or to the present when that comes first."""

    def __init__(self, *, start_s: float, end_s: float) -> None:
        self.start_s = start_s
        self.end_s = end_s
        self.photons = 0.0  # expected from the start up to where the ion has been followed
        self.dropped = False
        self.fill: Callable[[], None] = lambda: None

    def expected(self) -> float:
        self.fill()
        return self.photons

    def add(self, from_s: float, to_s: float, rate_per_s: float) -> None:
        """The rate held from ``from_s`` to ``to_s``; what lies outside the gate is not seen."""
        self.photons += rate_per_s * max(0.0, min(to_s, self.end_s) - max(from_s, self.start_s))
