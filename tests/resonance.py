"""A trap that can scan, with a plain dip in its counts: what a scan must find is known beforehand, and found fast.

It stands in for the rack's ion where the ion's own motion is not what is tested.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from unittest.mock import patch

from tests import traps
from tests.running import RunningTrap, hurried, running_trap
from trapd_simulated import Rack
from trapd_simulated.gate import Gate

DIP_HZ = 2_156_000.0
WIDTH_HZ = 2000.0

SCANNED = hurried(
    traps.NORTH_BENCH.replace('gain_uncertainty = "2 %"', 'gain_uncertainty = "0.2 %"')
    + traps.SCANS.replace('dwell = "20 ms"', 'dwell = "5 ms"').replace(
        'target = "50 Hz"', 'target = "100 Hz"\nmodel_uncertainty = "0.1 %"'
    )
)
"""x is expected at 2.155 MHz (tests/guard/test_verdict.py). Its schedule comes every half hour."""


def darken(rack: Rack, *, contrast: float = 0.5, rate_per_s: float = 80e3) -> None:
    """The counter sees a Lorentzian dip of full width `WIDTH_HZ` around `DIP_HZ`, as deep as ``contrast``."""

    def watch(gate: Gate) -> None:
        electrodes = rack.electrodes(gate.start_s)
        offset = 2 * (electrodes.frequencies_hz["tickle"] - DIP_HZ) / WIDTH_HZ
        tickled = electrodes.levels_v["tickle"] > 0
        gate.add(gate.start_s, gate.end_s, rate_per_s * (1 - (contrast / (1 + offset**2) if tickled else 0.0)))

    rack._instruments["counter"].watch = watch  # type: ignore[attr-defined]


@contextmanager
def resonant_trap(tmp_path: Path, toml: str = SCANNED) -> Iterator[RunningTrap]:
    """On at the point of its file, one 40Ca+ held. Its bursts last long enough for a machine that is busy with other tests."""
    with patch("trapd.scans.plan.BURST_SLACK_S", 5.0), running_trap(tmp_path, toml) as trap:
        darken(trap.rack)
        trap.switch_on()
        trap.client.ions("held", {"40Ca+": 1}, why="a test")
        yield trap
