"""What may really stand at the electrodes while a ramp runs, and what might on the straight ways between two states."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from itertools import product
from math import exp

import numpy as np

from tests.guard.orbit import Actual
from tests.guard.random_moves import Move, true_gain
from trapd.setpoint import AMPLITUDE, FREQUENCY, Ramp, Values

_NEARLY = 0.999  # of the margin: an edge may lie exactly at its end
_IN_BETWEEN, _SKEWED = 4, 12  # states of each kind taken per step


class Replay:
    """Walks along a ramp: ``states`` are taken on the way; ``residues`` are those at the start of each stretch, in units of
    the margin's displacement."""

    def __init__(self, move: Move, ramp: Ramp, rng: np.random.Generator) -> None:
        self.move, self.rng = move, rng
        self.states: list[Actual] = []
        self.residues: list[float] = []
        told = dict(ramp.start)
        actual = {name: told[name] for name in move.config.electrodes}
        self._take_all(told)
        last = None
        for step in ramp.steps:
            after = {**told, step.setpoint: step.value}
            if last not in (None, step.setpoint):
                self.residues += [_residue(move, told, name, actual[name]) for name in actual if name == last]
            for part in (0.0, *rng.uniform(0, 1, _IN_BETWEEN - 1)):
                self._in_between(told, after, _relaxed(move, actual, after, part * step.wait_s))
            for _ in range(_SKEWED):
                self._skewed(told, after)
            actual = _relaxed(move, actual, after, step.wait_s)
            told, last = after, step.setpoint
        self.told = told
        self._take_all(told)

    def _in_between(self, before: Values, after: Values, electrodes: Mapping[str, float]) -> None:
        """Half-settled: the electrodes as their lag has let them, the drive anywhere between two commands."""
        frequency, level = self._drive_between(before, after, self.rng.uniform())
        gain = self._gain(frequency)
        self.states.append(Actual(frequency_hz=frequency, amplitude_v=level * gain, electrodes=dict(electrodes)))

    def _skewed(self, before: Values, after: Values) -> None:
        """The moving setpoint between its values, one displaced by up to the margin, the gain somewhere in its band."""
        part = self.rng.uniform()
        frequency, level = self._drive_between(before, after, part)
        values = {name: before[name] + part * (after[name] - before[name]) for name in before}
        values[FREQUENCY] = frequency
        displaced = str(self.rng.choice(list(values)))
        self._take(values, level * self._gain(frequency), displaced, self.rng.choice([-1, 1, self.rng.uniform(-1, 1)]))

    def _take_all(self, values: Values) -> None:
        """A state that is commanded and settled, each setpoint alone displaced by the margin, at all corners of the band."""
        resonator = self.move.config.drive.resonator
        level = _level(self.move, values)
        for error, shift in product((-1, 1), repeat=2):
            gain = true_gain(
                resonator,
                values[FREQUENCY],
                error * resonator.gain_uncertainty,
                shift * resonator.center_uncertainty_hz,
            )
            self._take(values, level * gain, AMPLITUDE, 0.0)
            for name, by in product(values, (-1, 1)):
                self._take(values, level * gain, name, by)

    def _take(self, values: Values, amplitude_v: float, displaced: str, by: float) -> None:
        real = {**values, AMPLITUDE: amplitude_v}
        real[displaced] += _NEARLY * by * self.move.displacement(displaced, values)
        self.states.append(_actual(real))

    def _drive_between(self, before: Values, after: Values, part: float) -> tuple[float, float]:
        """Frequency and level. A frequency step is two commands; the one that lowers the amplitude goes first."""
        levels = _level(self.move, before), _level(self.move, after)
        if before[FREQUENCY] == after[FREQUENCY]:
            return before[FREQUENCY], levels[0] + part * (levels[1] - levels[0])
        resonator = self.move.config.drive.resonator
        rises = true_gain(resonator, after[FREQUENCY]) > true_gain(resonator, before[FREQUENCY])
        between = (before[FREQUENCY], levels[1]) if rises else (after[FREQUENCY], levels[0])
        return [(before[FREQUENCY], levels[0]), between, (after[FREQUENCY], levels[1])][self.rng.integers(3)]

    def _gain(self, frequency_hz: float) -> float:
        resonator = self.move.config.drive.resonator
        error, shift = self.rng.choice([-1, 1, self.rng.uniform(-1, 1)], size=2)
        return true_gain(
            resonator, frequency_hz, error * resonator.gain_uncertainty, shift * resonator.center_uncertainty_hz
        )


def _level(move: Move, values: Values) -> float:
    """What the synthesizer is told for this state: rounded to what it can take."""
    level = values[AMPLITUDE] / true_gain(move.config.drive.resonator, values[FREQUENCY])
    if AMPLITUDE not in move.scales:
        return level
    step = move.scales[AMPLITUDE].resolution
    return round(level / step) * step


def _actual(values: Values) -> Actual:
    electrodes = {name: value for name, value in values.items() if name not in (FREQUENCY, AMPLITUDE)}
    return Actual(frequency_hz=values[FREQUENCY], amplitude_v=values[AMPLITUDE], electrodes=electrodes)


def _relaxed(move: Move, actual: Mapping[str, float], told: Values, wait_s: float) -> dict[str, float]:
    """First-order low-pass between supply and electrode."""
    out = {}
    for name, value in actual.items():
        lag_s = move.config.electrodes[name].lag_s
        out[name] = told[name] + (value - told[name]) * exp(-wait_s / lag_s) if lag_s else told[name]
    return out


def _residue(move: Move, told: Values, name: str, actual: float) -> float:
    # A margin of a value next to 0 V is next to nothing; there a millionth of the range has to do.
    voltage = move.config.electrodes[name].voltage
    return abs(actual - told[name]) / max(move.displacement(name, told), 1e-6 * (voltage.high - voltage.low))


def straight_way(move: Move, values: Values, name: str, end: float, samples: int) -> Iterator[Actual]:
    """Along one stretch, with twice the margin and twice the uncertainty: each setpoint alone displaced by once and twice the
    margin, the amplitude at both ends of its band and in its middle."""
    resonator = move.config.drive.resonator
    step_hz = min(move.config.drive.frequency.step, abs(end - values[name]))
    zero = (
        [0.0] if values[name] * end < 0 else []
    )  # where the drive is off a single point is lost, and no sample falls on it
    for value in (*np.linspace(values[name], end, samples), *zero):
        here = {**values, name: float(value)}
        ratios = {1.0}
        for error, shift in product((-2, 2), repeat=2):
            true = true_gain(
                resonator,
                here[FREQUENCY],
                error * resonator.gain_uncertainty,
                shift * resonator.center_uncertainty_hz,
            )
            ratios.add(true / true_gain(resonator, here[FREQUENCY]))
        low, high = min(ratios), max(ratios)
        if name == FREQUENCY:  # between the two commands of a step
            gains = [true_gain(resonator, here[FREQUENCY] + s * step_hz) for s in (-1, 0, 1)]
            low *= min(gains[1] / gains[0], gains[1] / gains[2], 1.0)
        for ratio in sorted({low, 1.0, high}):
            real = {**here, AMPLITUDE: here[AMPLITUDE] * ratio}
            yield _actual(real)
            for displaced, by in product(here, (-2, -1, 1, 2)):
                yield _actual({**real, displaced: real[displaced] + by * move.displacement(displaced, here)})
