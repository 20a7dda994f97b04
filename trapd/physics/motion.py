"""The motion of one species in one state: the record every verdict carries."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Motion:
    """The motion of one species in one state, exact (Floquet).

    ``secular_frequencies_hz`` belong to the modes closest to x, y, z in that order, ``degenerate`` when that order is
    arbitrary (equal frequencies, or directions equally close to two axes). Both they and ``beta`` are None when the
    motion is not stable. ``beta`` is unfolded: in (0, 1) in the first region; beyond it, known only for modes that do
    not couple, else None. A mode that damping has locked has beta 0 or 1. ``a`` and ``q`` are per axis when the trap is
    not tilted (length 3), else 3x3. ``depth_ev`` is a pseudopotential figure, None where no escape distance is known.
    ``growth_per_s`` is the fastest growth of the displacement, None when nothing grows.
    """

    ion: str
    stable: bool
    first_region: bool
    secular_frequencies_hz: tuple[float, ...] | None
    degenerate: bool
    beta: tuple[float, ...] | None
    a: tuple[float, ...] | tuple[tuple[float, ...], ...]
    q: tuple[float, ...] | tuple[tuple[float, ...], ...]
    depth_ev: float | None
    growth_per_s: float | None
