"""The steps of one straight way."""

from __future__ import annotations

import time
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import pytest

from tests.traps import NORTH_BENCH, write
from trapd.config.build import guard_of
from trapd.config.read import read
from trapd.guard.ramp import leg_steps

WORK = {"drive.frequency": 21e6, "drive.amplitude": 260.0, "endcaps": 119.0, "rods": 1.0, "shim_x": 0.0}


@pytest.mark.parametrize("share", [0.0, 0.2, 0.5, 0.66, 0.67, 0.9, 0.999999, 0.999999999])
@pytest.mark.parametrize("start_v", [119.0, 121.3])
def test_no_step_is_too_large_however_coarse_the_instrument(tmp_path: Path, share: float, start_v: float) -> None:
    """An instrument whose own step is nearly the largest allowed one once took half a minute for seventeen steps."""
    model = guard_of(read(write(tmp_path, NORTH_BENCH)))
    limit = replace(model.limits["endcaps"], step=7.0, resolution=7.0 * share)
    model = replace(model, limits={**model.limits, "endcaps": limit})
    target = 7.0 * share * 40 if share else 280.0
    began = time.monotonic()
    steps = leg_steps(model, {**WORK, "endcaps": start_v}, "endcaps", target)
    assert time.monotonic() - began < 1.0
    reached = [start_v, *(step.value for step in steps)]
    assert reached[-1] == target
    assert max(abs(b - a) for a, b in pairwise(reached)) <= 7.0 * (1 + 1e-9)
    assert len(steps) <= 2 * abs(target - start_v) / 3.5 + 2
