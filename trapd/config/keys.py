"""Every key a trap file may hold, section by section. NAME and SETPOINT stand for names of the file's own."""

from __future__ import annotations

from collections.abc import Mapping

SECTIONS: Mapping[str, tuple[str, ...]] = {
    "trap": ("name", "geometry", "r0", "z0", "kappa", "phases", "escape"),
    "species": ("ion", "name", "mass", "charge", "damping"),
    "drive": (
        "instrument",
        "waveform",
        "frequency",
        "amplitude",
        "curvature",
        "resonator",
        "gain",
        "gain_uncertainty",
        "level_max",
        "warm_up",
    ),
    "drive.frequency": ("min", "max", "slew", "step"),
    "drive.amplitude": ("min", "max", "slew", "step"),
    "drive.resonator": ("center", "center_uncertainty", "loaded_q", "gain", "gain_uncertainty", "level_max"),
    "electrodes": ("NAME",),
    "electrodes.NAME": ("kind", "instrument", "channel", "weight", "voltage", "lag", "curvature", "field"),
    "electrodes.NAME.voltage": ("min", "max", "slew", "step"),
    "interlocks": ("NAME",),
    "interlocks.NAME": (
        "instrument",
        "warn_above",
        "trip_above",
        "warn_below",
        "trip_below",
        "for",
        "deadband",
        "unreadable",
        "action",
    ),
    "instruments": ("NAME",),
    "instruments.NAME": ("driver", "resource", "profile", "timeout"),
    "guard": ("margin", "min_secular_frequency", "min_depth"),
    "loading": ("expires",),
    "tickle": ("instrument", "level_max"),
    "counter": ("instrument", "floor"),
    "scans": ("NAME",),
    "scans.NAME": (
        "mode",
        "species",
        "tickle",
        "span",
        "dwell",
        "target",
        "width",
        "passes",
        "min_contrast",
        "model_uncertainty",
    ),
    "schedule": ("scan", "cron", "name"),
    "points": ("NAME",),
    "points.NAME": ("SETPOINT",),
    "record": ("file",),
    "server": ("listen", "socket"),
}

TOP: tuple[str, ...] = tuple(dict.fromkeys(section.split(".")[0] for section in SECTIONS))
"""The keys of the file itself, whose section is ""."""

LATER: Mapping[str, tuple[str, ...]] = {
    "": ("purge", "crystal", "calibrations"),
    "drive": ("duty", "coupling", "harmonics"),
}
"""Keys by section (top level: "") that are decided and not built yet in this version."""

LATER_WAVEFORMS: tuple[str, ...] = ("square", "rotating")

KEYS: tuple[str, ...] = tuple(f"{section}.{key}" for section, keys in SECTIONS.items() for key in keys if key != "NAME")
