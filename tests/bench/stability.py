"""The exact stability of one coupled 3D state, and the exact interval of one setpoint, beside an adaptive integrator.

The state is a worked case whose frequencies are known to 16 digits. Its peer is the monodromy of one drive period by
`solve_ivp` (DOP853, rtol = atol = 1e-13, all six columns at once) and its eigenvalues, which is as close as that
integrator comes; ours must be at least as close to the known digits. `inside` decides from the map of half a period that also
gives `motion` its frequencies. (The peer cannot tell the first region from the
others.) The peer of an interval bisects both ends for both species with that integrator at rtol = atol = 1e-8, from
brackets it is given, to 1e-9 of the value; ours is good to 1e-12 and finds its own.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from math import cos
from timeit import timeit
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from tests.physics.worked_cases import of_kind, species_of, trap_of
from trapd.physics.equation import coefficients
from trapd.physics.floquet import inside, motion, motions
from trapd.physics.point import Point
from trapd.physics.species import Species, ion
from trapd.physics.trap import Electrode, Trap, curvature, linear
from trapd.physics.window import intersect, stable_intervals

TRAP: Trap = linear(
    r0_m=5e-4,
    z0_m=2.5e-3,
    kappa=0.29,
    electrodes={
        "endcaps": Electrode(kind="endcap"),
        "rods": Electrode(kind="rods"),
        "tilt": Electrode(curvature=curvature(1e4, 2e4, -3e4, 5e3, 7e3, 4e4)),
    },
)
POINT = Point(frequency_hz=21e6, amplitude_v=260.0, electrodes={"endcaps": 120.0, "rods": 1.0, "tilt": 3.0})
SPECIES = (ion("40Ca+"), ion("27Al+"))
LOW_V, HIGH_V = 1.0, 1500.0
RELATIVE = 1e-9  # of the bisection


def measure() -> list[dict[str, Any]]:
    (case,) = (one for one in of_kind("tensor") if one["id"] == "p16")
    trap, point = trap_of("tensor", case["inputs"])
    (species,) = species_of(case["inputs"])
    truth = np.array(sorted(frequency for frequency, _ in case["expected"]["modes_fHz_decayPerS"]))
    ours = np.sort(motion(trap, species, point).secular_frequencies_hz or 0.0)
    peers = _integrated(trap, species, point)
    closer = bool(np.abs(ours / truth - 1).max() <= np.abs(peers / truth - 1).max())
    states = [replace(point, amplitude_v=volts) for volts in np.linspace(0.8, 1.2, 100)]
    test, one, many, peer = _milliseconds(
        (lambda: inside(trap, species, [point]), 200),
        (lambda: motion(trap, species, point), 100),
        (lambda: motions(trap, species, states), 2),
        (lambda: _integrated(trap, species, point), 5),
    )
    many /= len(states)
    window, bisection = _milliseconds((_window, 10), (_bisected, 1))
    return [
        _row("stability of one coupled 3D state", test, peer, 30.0, 0.2, closer),
        _row("its whole motion: frequencies, a, q, depth", one, peer, 5.0, 0.5, closer),
        _row("its whole motion, one of a hundred at once", many, peer, 30.0, 0.1, closer),
        _row("exact interval of one setpoint, two species", window, bisection, 10.0, 15.0, _agree()),
    ]


def _row(name: str, value_ms: float, peer_ms: float, times: float, most_ms: float, correct: bool) -> dict[str, Any]:
    ratio = peer_ms / value_ms
    return {
        "name": name,
        "value": value_ms,
        "unit": "ms",
        "peer": peer_ms,
        "ratio": ratio,
        "goal": f"{times:g} times faster, under {most_ms:g} ms",
        "met": bool(correct and ratio >= times and value_ms < most_ms),
    }


def _milliseconds(*works: tuple[Callable[[], object], int]) -> list[float]:
    """Of one call of each, so many in a round; the median of nine rounds in which they take turns, so that a busy machine
    slows all of them alike."""
    rounds = [[1e3 * timeit(work, number=times) / times for work, times in works] for _ in range(9)]
    return [float(one) for one in np.median(rounds, axis=0)]


def _multipliers(trap: Trap, species: Species, point: Point, tolerance: float) -> np.ndarray[Any, Any]:
    c = coefficients(trap, species, [point])
    a, q = c.a[0], c.q[0]

    def rate(tau: float, flat: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
        stiffness = a + (2 * cos(2 * tau)) * q
        return np.concatenate([flat[18:], -(stiffness @ flat[:18].reshape(3, 6)).ravel()])

    solution = solve_ivp(rate, (0, np.pi), np.eye(6).ravel(), method="DOP853", rtol=tolerance, atol=tolerance)
    return np.linalg.eigvals(solution.y[:, -1].reshape(6, 6))


def _integrated(trap: Trap, species: Species, point: Point) -> np.ndarray[Any, Any]:
    angles = np.sort(np.abs(np.angle(_multipliers(trap, species, point, 1e-13))))[::2]
    return angles / np.pi * point.frequency_hz / 2


def _window() -> tuple[float, float]:
    found = [stable_intervals(TRAP, one, [POINT], "drive.amplitude", LOW_V, HIGH_V)[0] for one in SPECIES]
    (interval,) = intersect(*found)
    return interval.low, interval.high


def _bisected() -> tuple[float, float]:
    ends = [(_bisect(one, LOW_V, 260.0), _bisect(one, HIGH_V, 260.0)) for one in SPECIES]
    return max(low for low, _ in ends), min(high for _, high in ends)


def _bisect(species: Species, outside: float, within: float) -> float:
    while abs(outside - within) > RELATIVE * abs(within):
        middle = (outside + within) / 2
        point = replace(POINT, amplitude_v=middle)
        if np.abs(_multipliers(TRAP, species, point, 1e-8)).max() < 1 + 1e-5:
            within = middle
        else:
            outside = middle
    return within


def _agree() -> bool:
    """The integrator cannot place an edge better than its own growth of rounding."""
    return bool(np.allclose(_window(), _bisected(), rtol=1e-6))
