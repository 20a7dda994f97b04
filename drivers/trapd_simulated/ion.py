"""One ion: its orbit is followed, when someone asks, from change to change of what surrounds it."""

from __future__ import annotations

import math
import threading
from contextlib import suppress
from dataclasses import dataclass

import numpy as np

from trapd_simulated.bench import Bench
from trapd_simulated.gate import Gate
from trapd_simulated.ion_settings import IonSettings
from trapd_simulated.orbit import FIELD, POSITION, SIZE, TICKLE, Array, Trap
from trapd_simulated.photons import Light
from trapd_simulated.spectrum import line_hz
from trapd_simulated.surroundings import Moment, Surroundings

_FIRST_STEP_S = 2e-4  # after anything was changed
_STEP_S = 1e-3  # while anything still moves; damping follows the amplitude at least so often
_MOVING, _COARSE, _FINE = 1e-5, 1e-3, 1e-9  # parts by which a trap may move in a step, or away from its map
_FIELD_V_PER_M = 1e-3  # the least change that counts; it moves the ion by 1e-11 m
_CALM_S = 0.1  # with a longer step nobody need follow the ion before it has passed
_LOOK_S = 0.02  # a trap at rest is looked at again so much later, or at the next change
_DOUBLINGS = 10  # 2^10 periods of the drive show the amplitude
_LOADED_M = 1e-6


@dataclass(frozen=True, kw_only=True)
class IonState:
    """``amplitude_m`` of the motion along x, y, z; ``lost_at_s`` and ``why`` of the last ion that was lost."""

    present: bool
    amplitude_m: tuple[float, float, float]
    lost_at_s: float | None
    why: str


class Ion:
    """Whoever holds its lock may ask instruments. Of these only the counter, which nothing here asks, may wait for it."""

    def __init__(self, settings: IonSettings, bench: Bench, now_s: float, seed: int) -> None:
        self._settings = settings
        self._bench = bench
        self._surroundings = Surroundings(settings, bench)
        self._light = Light(settings, seed)
        self._lock = threading.RLock()
        self._gates: list[Gate] = []
        self._window = np.hanning(2**_DOUBLINGS) / np.hanning(2**_DOUBLINGS).sum()
        self._time_s = now_s
        self._state: Array | None = None
        self._moment = self._surroundings.at(now_s)
        self._trap = Trap(self._moment.constants)
        self._tickle_hz = self._moment.tickle_hz  # of the map; that of a tickle that is off does not matter
        self._map = self._trap.tickled(self._tickle_hz)
        self._settled_until_s = now_s
        self._changes, self._due_s = 0, now_s
        self._amplitudes = np.zeros(3)  # m
        self._amplitude_squared_m2 = 0.0
        self._step_s = _FIRST_STEP_S
        self._lost_at_s: float | None = None
        self._why = "none was loaded"

    def load(self, now_s: float) -> None:
        """An ion a micrometre from the centre; whether it stays is up to its own equation."""
        with self._lock:
            self.advance(now_s)
            self._state = np.zeros(SIZE)
            self._state[POSITION] = _LOADED_M
            self._amplitudes = np.full(3, _LOADED_M)
            self._amplitude_squared_m2 = 3.0 * _LOADED_M**2
            self._step_s, self._lost_at_s, self._why = _FIRST_STEP_S, None, ""

    def lose(self, now_s: float) -> None:
        with self._lock:
            self.advance(now_s)
            if self._state is not None:
                self._lost("taken out by hand")

    def state(self, now_s: float) -> IonState:
        with self._lock:
            self.advance(now_s)
            x, y, z = map(float, self._amplitudes)
            present = self._state is not None
            return IonState(present=present, amplitude_m=(x, y, z), lost_at_s=self._lost_at_s, why=self._why)

    def line_hz(self, axis: int, now_s: float) -> float:
        return line_hz(Trap(self._surroundings.at(now_s).constants), axis)

    def watch(self, gate: Gate) -> None:
        """Fill ``gate`` from now on, and bring it up to date whenever it asks."""
        with self._lock:
            self.advance(gate.start_s)
            gate.add(gate.start_s, self._time_s, self._rate_per_s())  # what was followed while the gate was waiting
            gate.fill = lambda: self.advance(gate.end_s)
            self._gates.append(gate)

    def keep_up(self, now_s: float) -> None:
        """`advance` unless nothing has happened that could not wait."""
        with self._lock:
            quiet = self._step_s > _CALM_S and now_s < self._time_s + self._step_s and not self._news(now_s)
            if self._state is not None and not quiet:
                self.advance(now_s)

    def advance(self, until_s: float) -> None:
        with self._lock, np.errstate(all="ignore"):  # an orbit that runs away overflows
            while self._state is not None and self._time_s < until_s:
                self._follow(self._state, until_s)
            self._pass(max(self._time_s, until_s), self._rate_per_s())

    def _follow(self, state: Array, until_s: float) -> None:
        """One step with constant surroundings."""
        news = self._news(self._time_s)
        if news or self._time_s >= self._settled_until_s:
            self._changes = self._bench.changes()
            self._step_s = _FIRST_STEP_S if news else self._step_s
            settled = self._meet(state, self._surroundings.at(self._time_s))
            self._settled_until_s = self._time_s + (_LOOK_S if settled and not news else 0.0)
        end_s = self._step_end_s(until_s)
        periods = round((end_s - self._time_s) * self._trap.constants.drive_hz)
        damping = 1.0 / (1.0 + self._amplitude_squared_m2 / self._settings.cooling_half_m**2)
        self._state = self._map.after(state, periods, damping)
        before_m2, before_per_s = self._amplitude_squared_m2, self._rate_per_s()
        self._time_s, started_s = end_s, self._time_s
        self._look(self._map.track(self._state, _DOUBLINGS, damping))
        self._fill(started_s, end_s, 0.5 * (before_per_s + self._rate_per_s()))
        change_m2 = abs(self._amplitude_squared_m2 - before_m2)
        calm = change_m2 <= 1e-3 * before_m2 + self._settings.rest_m**2
        self._step_s = 8.0 * self._step_s if calm else min(2.0 * self._step_s, _STEP_S)

    def _step_end_s(self, until_s: float) -> float:
        borders_s = [one_s for gate in self._gates for one_s in (gate.start_s, gate.end_s) if one_s > self._time_s]
        if self._gates:
            borders_s.append(self._light.next_change_s(self._time_s))
        self._due_s = self._bench.next_change_s(self._time_s)
        return min(until_s, self._time_s + self._step_s, self._due_s, *borders_s)

    def _meet(self, state: Array, moment: Moment) -> bool:
        """Bring map, tickle and field of the state to ``moment``; whether nothing has moved since the one before."""
        before, self._moment = self._moment, moment
        moved = moment.trap_change(before.constants)
        self._renew_map(moment, min(max(10.0 * moved, _FINE), _COARSE))
        if moved > _MOVING:
            self._step_s = min(self._step_s, _STEP_S)
            if self._amplitude_squared_m2 < self._settings.rest_m**2:
                state[POSITION] += self._settings.rest_m / math.sqrt(3.0)
        length_v = math.hypot(*state[TICKLE])
        state[TICKLE] = state[TICKLE] * (moment.tickle_v / length_v) if length_v else (moment.tickle_v, 0.0)
        pushed = self._follow_field(state, moment.field_v_per_m)
        return moved <= _FINE and not pushed and abs(moment.tickle_v - before.tickle_v) <= 1e-6 * moment.tickle_v

    def _follow_field(self, state: Array, field_v_per_m: Array) -> bool:
        """Carry the ion along with its centre, as electrodes that are slow beside its motion do; whether it moved."""
        change_v_per_m = field_v_per_m - state[FIELD]
        state[FIELD] = field_v_per_m
        if np.abs(change_v_per_m).max() < _FIELD_V_PER_M:
            return False
        one = self._map.one(1.0)
        with suppress(np.linalg.LinAlgError):  # no centre: what becomes of the ion, its equation says
            state[:6] += np.linalg.solve(np.eye(6) - one[:6, :6], one[:6, FIELD] @ change_v_per_m)
        return True

    def _news(self, now_s: float) -> bool:
        """Whether something was changed since the last look, or was due to change by ``now_s``."""
        return self._due_s <= now_s or self._changes != self._bench.changes()

    def _renew_map(self, moment: Moment, tolerance: float) -> None:
        stale = moment.trap_change(self._trap.constants) > tolerance
        if stale:
            self._trap = Trap(moment.constants)
        if stale or (moment.tickle_v and moment.tickle_hz != self._tickle_hz):
            self._tickle_hz = moment.tickle_hz
            self._map = self._trap.tickled(self._tickle_hz)

    def _look(self, track_m: Array) -> None:
        """Amplitudes, or the loss, from the orbit of the next periods, (3, periods)."""
        reach_m = np.abs(track_m).max(axis=1)
        if not np.isfinite(reach_m).all():
            self._lost("its orbit grew without bound")
        elif (reach_m > self._settings.escape_m).any():
            axis = int(np.argmax(reach_m / self._settings.escape_m))
            self._lost(f"left the trap along {'xyz'[axis]}: {reach_m[axis] * 1e3:.3g} mm from the centre")
        else:
            center_m = track_m @ self._window
            self._amplitudes = np.sqrt(2.0 * ((track_m - center_m[:, None]) ** 2 @ self._window))
            self._amplitude_squared_m2 = float(self._amplitudes @ self._amplitudes)

    def _lost(self, why: str) -> None:
        self._state, self._amplitudes = None, np.zeros(3)
        self._lost_at_s, self._why = self._time_s, why

    def _rate_per_s(self) -> float:
        if self._state is None:
            return self._settings.dark_per_s
        return self._light.rate_per_s(self._amplitude_squared_m2, self._time_s)

    def _pass(self, end_s: float, rate_per_s: float) -> None:
        self._fill(self._time_s, end_s, rate_per_s)
        self._time_s = end_s

    def _fill(self, start_s: float, end_s: float, rate_per_s: float) -> None:
        for gate in self._gates:
            gate.add(start_s, end_s, rate_per_s)
        self._gates = [gate for gate in self._gates if end_s < gate.end_s and not gate.dropped]
