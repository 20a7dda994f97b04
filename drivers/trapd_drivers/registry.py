"""Which drivers there are: classes registered under the entry-point group ``trapd.drivers``, by name.

A registered class is an `interfaces.Instrument` with two class methods of its own: ``open`` and ``scales``.
"""

from __future__ import annotations

from collections.abc import Mapping
from importlib.metadata import EntryPoint, entry_points
from typing import Protocol, cast

from trapd_drivers.errors import ProfileError
from trapd_drivers.interfaces import Instrument, Scale

GROUP = "trapd.drivers"


class DriverClass(Protocol):
    """What a registered class offers beside the instrument's own methods."""

    def open(self, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Instrument:
        """Connect, and change nothing. `ProfileError`, `Unreachable` or `Malformed` when that fails."""

    def scales(self, profile: str) -> Mapping[tuple[str, int], Scale]:
        """Scales by (quantity, channel) as far as the profile states them, without an instrument.

        Quantities are "voltage" of a DC supply's channel; with channel 0 "frequency", "level" and, where there are
        bursts, "burst" of an RF source, and "gate" of a photon counter. A limit that only the instrument knows is
        infinite.
        """


def driver_names() -> tuple[str, ...]:
    """The registered names, sorted."""
    return tuple(sorted(_registered()))


def driver_class(name: str) -> DriverClass:
    """The class registered as ``name``."""
    registered = _registered()
    if name not in registered:
        known = ", ".join(sorted(registered)) or "none, the package is not installed"
        raise ProfileError(f"driver {name!r}: unknown; registered are {known}; nothing was opened")
    entry = registered[name]
    try:
        loaded = entry.load()
    except (ImportError, AttributeError) as error:
        raise ProfileError(f"driver {name!r}: {entry.value} cannot be loaded ({error}); nothing was opened") from error
    if not (isinstance(loaded, type) and issubclass(loaded, Instrument)):
        raise ProfileError(f"driver {name!r}: {entry.value} is no Instrument class; nothing was opened")
    return cast(DriverClass, loaded)


def open_instrument(name: str, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Instrument:
    """Connect to ``resource`` with the driver ``name``."""
    return driver_class(name).open(resource, profile=profile, timeout_s=timeout_s)


def scales_of(name: str, profile: str = "plain") -> Mapping[tuple[str, int], Scale]:
    """What the profile alone says of each quantity (see `DriverClass.scales`); nothing is opened."""
    return driver_class(name).scales(profile)


def _registered() -> dict[str, EntryPoint]:
    found = entry_points(group=GROUP)
    named = {one.name: one for one in found}
    for name in named:
        values = sorted({one.value for one in found if one.name == name})
        if len(values) > 1:
            raise ProfileError(
                f"driver {name!r}: registered more than once, as {', '.join(values)}; nothing was opened"
            )
    return named
