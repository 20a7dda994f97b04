"""What the ion feels at a rack time: electrodes, stray fields and their drift as constants of its equation."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from trapd_simulated.bench import Bench
from trapd_simulated.ion_settings import IonSettings
from trapd_simulated.orbit import Array, Constants


@dataclass(frozen=True, kw_only=True)
class Moment:
    """Everything the equation of motion needs of one instant."""

    constants: Constants
    field_v_per_m: Array
    tickle_hz: float
    tickle_v: float  # zero to peak

    def trap_change(self, since: Constants) -> float:
        """How far the trap is from ``since``, as a part; DC weighs more: it acts on a smaller curvature."""
        now = self.constants
        if now.drive_hz != since.drive_hz:
            return math.inf
        drive = np.abs(now.drive_curvature - since.drive_curvature).max()
        static = np.abs(now.static_curvature - since.static_curvature).max()
        size = max(np.abs(now.drive_curvature).max(), np.abs(now.static_curvature).max(), 1.0)
        return float(max(drive, 5.0 * static) / size)


class Surroundings:
    """Reads the bench; holds nothing that changes."""

    def __init__(self, settings: IonSettings, bench: Bench) -> None:
        self._settings = settings
        self._bench = bench
        self._drive = np.array(settings.drive_curvature_per_m2)
        self._tickle = np.array(settings.tickle_field_per_m)
        self._electrodes = [(name, channel) for name, channels in settings.electrodes.items() for channel in channels]
        rows = [
            (settings.stray_curvature_v_per_m2, settings.stray_field_v_per_m),
            (settings.stray_curvature_drift_v_per_m2_h, settings.stray_field_drift_v_per_m_h),
            *((one.curvature_per_m2, one.field_per_m) for at in settings.electrodes.values() for one in at.values()),
        ]
        self._static = np.array([np.append(np.ravel(curvature), field) for curvature, field in rows])

    def at(self, time_s: float) -> Moment:
        settings, electrodes, hours = self._settings, self._bench.electrodes(time_s), time_s / 3600.0
        voltages_v = [electrodes.voltages_v.get(name, {}).get(channel, 0.0) for name, channel in self._electrodes]
        static = np.array([1.0, hours, *voltages_v]) @ self._static
        amplitude_v = electrodes.drive_amplitude_v * (1.0 + settings.gain_drift_per_h * hours)
        constants = Constants(
            charge_over_mass=settings.charge_c / settings.mass_kg,
            drive_hz=electrodes.drive_frequency_hz,
            drive_curvature=amplitude_v * self._drive,
            static_curvature=static[:9].reshape(3, 3),
            tickle_field_per_v=self._tickle,
            damping_per_s=settings.damping_per_s,
        )
        return Moment(
            constants=constants,
            field_v_per_m=static[9:],
            tickle_hz=electrodes.frequencies_hz.get(settings.tickle_instrument, 0.0),
            tickle_v=electrodes.levels_v.get(settings.tickle_instrument, 0.0),
        )
