"""The daemon's scan and a script by a second author, which has nothing of this project, find one frequency on one rack."""

from __future__ import annotations

import subprocess
import sys
from math import hypot
from pathlib import Path

import pytest

from tests.running import hurried, running_trap
from tests.traps import NORTH_BENCH, SCANS
from trapd_simulated import Rack

KNOWN_GAIN = NORTH_BENCH.replace('gain_uncertainty = "2 %"', 'gain_uncertainty = "0.5 %"')
SCANNED = hurried(KNOWN_GAIN + SCANS.replace('span = "200 kHz"', 'span = "60 kHz"'))
"""It knows its gain well enough for a window as wide as the script's."""

SCRIPT = Path(__file__).with_name("find_frequency.py")
CENTER_HZ, HALF_SPAN_HZ = 2.16e6, 30e3


def found_by_script(rack: Rack) -> tuple[float, float]:
    """Frequency and standard uncertainty, Hz."""
    ports = [f"{name}={rack.ports[name]}" for name in ("tickle", "counter")]
    command = [sys.executable, str(SCRIPT), str(CENTER_HZ), str(HALF_SPAN_HZ), *ports]
    ran = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
    assert ran.returncode == 0, ran.stderr
    frequency_hz, uncertainty_hz = map(float, ran.stdout.split())
    return frequency_hz, uncertainty_hz


@pytest.mark.long
def test_daemon_and_second_author_measure_the_same_frequency(tmp_path: Path) -> None:
    with running_trap(tmp_path, SCANNED) as trap:
        trap.switch_on()
        trap.rack.load_ion()
        trap.client.ions("held", {"40Ca+": 1}, why="a test")
        finding = trap.client.scan("x", why="what a second author finds too")
        assert finding["state"] == "found", finding["message"]
        frequency_hz, uncertainty_hz = found_by_script(trap.rack)
        truth_hz = trap.rack.spectrum("x")
    difference_hz = frequency_hz - finding["frequency_hz"]
    # Four standard uncertainties of two independent measurements: one such test in 16 000 fails by chance (normal law).
    assert abs(difference_hz) < 4 * hypot(uncertainty_hz, finding["uncertainty_hz"])
    # The truth is read off the spectrum of the simulated ion's orbit, not from any formula.
    assert abs(frequency_hz - truth_hz) < 4 * uncertainty_hz
