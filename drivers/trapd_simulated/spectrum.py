"""The line a test compares with: the spectrum of an undamped orbit, sampled once a period of the drive."""

from __future__ import annotations

import math

import numpy as np

from trapd_simulated.orbit import SIZE, Array, Trap

_DOUBLINGS = 18


def line_hz(trap: Trap, axis: int) -> float:
    """The strongest line below half the drive's frequency of an ion displaced along ``axis`` (0, 1, 2), Hz.

    The line moves on by the phase between the windowed halves of the samples: 2^17 periods, so that a thousandth of a
    turn is less than 1e-8 of the drive's frequency. NaN when the orbit runs away.
    """
    state = np.zeros(SIZE)
    state[axis] = 1.0
    with np.errstate(all="ignore"):
        track = trap.tickled(0.0).track(state, _DOUBLINGS, 0.0)[axis]
    if not np.isfinite(track).all() or np.abs(track).max() > 1e3:
        return math.nan
    first, second = (np.fft.rfft(_window(len(half)) * half) for half in np.split(track, 2))
    bin_ = int(np.argmax(np.abs(first)))
    turns = np.angle(second[bin_] / first[bin_]) / (2.0 * math.pi)
    # A bin is one whole turn of the half: the rest of a turn is the part of a bin.
    return float((bin_ + turns) / (len(track) // 2) * trap.constants.drive_hz)


def _window(count: int) -> Array:
    """Blackman's four terms (Harris 1978), side lobes 92 dB down."""
    phase = 2.0 * math.pi * np.arange(count) / count
    return np.asarray(0.35875 - 0.48829 * np.cos(phase) + 0.14128 * np.cos(2 * phase) - 0.01168 * np.cos(3 * phase))
