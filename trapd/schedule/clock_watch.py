"""Whether the wall clock stepped against the monotonic one."""

from __future__ import annotations

from trapd.clock import Clock

STEP_S = 0.1
"""Less is the clock being steered."""

_TOGETHER_NS = 20_000_000


class ClockWatch:
    """Ask `read_step_s` about once a second."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._ahead_ns: int | None = None
        self.read_step_s()

    def read_step_s(self) -> float:
        """How far the wall clock stepped since the last look, negative: back; 0 when it did not."""
        before_ns, wall_us, now_ns = self._clock.monotonic_ns(), self._clock.now_us(), self._clock.monotonic_ns()
        if now_ns - before_ns > _TOGETHER_NS:  # held up between the two: a step still shows at the next look
            return 0.0
        ahead_ns = wall_us * 1000 - now_ns
        step_s = 0.0 if self._ahead_ns is None else (ahead_ns - self._ahead_ns) / 1e9
        self._ahead_ns = ahead_ns
        return step_s if abs(step_s) >= STEP_S else 0.0
