"""The resonator's gain, and the band the true gain lies in."""

from __future__ import annotations

import numpy as np
import pytest

from trapd.physics.resonator import Resonator, band, gain_at

BENCH = Resonator(gain=38.0, gain_uncertainty=0.02, center_hz=21e6, center_uncertainty_hz=2e3, loaded_q=200)


def test_off_resonance_the_synthesizer_must_give_more():
    assert gain_at(BENCH, 21e6) == 38.0
    assert 260 / gain_at(BENCH, 21e6 + 76e3) == pytest.approx(12.0, abs=0.05)  # the trap file's worked example


def test_half_power_lies_half_a_bandwidth_away():
    assert gain_at(BENCH, 21e6 * (1 + 1 / 400)) == pytest.approx(38 / 2**0.5)  # definition of the loaded Q


@pytest.mark.parametrize("stretch", [(21e6, 21e6), (20.9e6, 21.1e6), (21.03e6, 21.2e6), (20.999e6, 21.0005e6)])
@pytest.mark.parametrize("center_uncertainty_hz", [0.0, 2e3, 80e3])
def test_the_band_is_the_extreme_over_all_true_resonators(stretch, center_uncertainty_hz):
    resonator = Resonator(
        gain=38.0,
        gain_uncertainty=0.02,
        center_hz=21e6,
        center_uncertainty_hz=center_uncertainty_hz,
        loaded_q=200,
    )
    frequency = np.linspace(*stretch, 801)[:, None]
    center = 21e6 + np.linspace(-1, 1, 401) * center_uncertainty_hz
    width = 21e6 / 200
    ratio = np.sqrt((1 + (2 * (frequency - 21e6) / width) ** 2) / (1 + (2 * (frequency - center) / width) ** 2))
    assert band(resonator, *stretch) == pytest.approx((0.98 * ratio.min(), 1.02 * ratio.max()), rel=1e-5)


def test_a_flat_gain_is_the_same_everywhere():
    flat = Resonator(gain=5.0, gain_uncertainty=0.1)
    assert gain_at(flat, 1e6) == gain_at(flat, 3e7) == 5.0
    assert band(flat, 1e6, 3e7) == pytest.approx((0.9, 1.1))
