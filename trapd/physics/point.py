"""One state of the trap: the drive's frequency and amplitude, and the voltage of every electrode."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

FREQUENCY: Final = "drive.frequency"
AMPLITUDE: Final = "drive.amplitude"


@dataclass(frozen=True, kw_only=True)
class Point:
    """``frequency_hz`` positive; ``amplitude_v`` at the electrode, zero to peak, of either sign; ``electrodes`` name -> V,
    every electrode of the trap and no other."""

    frequency_hz: float
    amplitude_v: float
    electrodes: Mapping[str, float]
