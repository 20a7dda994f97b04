"""A scan on its way: how far it is, what was counted, and what happened that is not written down yet."""

from __future__ import annotations

from concurrent.futures import Future
from dataclasses import dataclass, field

import numpy as np

from trapd.controller.carry_out import Carried
from trapd.controller.counting import Counted
from trapd.controller.desk import Desk
from trapd.controller.registering import Origin
from trapd.controller.situation import Scanning, Situation
from trapd.record import Draft
from trapd.scans.plan import Plan
from trapd.scans.points import Points
from trapd.setpoint import Due


@dataclass
class Course:
    """``began_ns``: the middle of the first count, from which the points' times run. ``happened``: drafts for the next
    commit. ``intent``, ``job``, ``burst_ns`` (monotonic): the last burst's. ``looked_ns``: when the instruments were
    last looked at, and found as in ``judged``."""

    desk: Desk
    origin: Origin
    plan: Plan
    due: Due | None
    tickle: str
    judged: Situation
    began_us: int
    began_ns: int
    pass_number: int = 1
    point: int = 0
    intent: int = 0
    job: Future[Carried] | None = None
    burst_ns: int = 0
    looked_ns: int = 0
    counted: list[Counted] = field(default_factory=list)
    happened: list[Draft] = field(default_factory=list)

    def take_happened(self) -> list[Draft]:
        happened, self.happened = self.happened, []
        return happened

    def keep(self, counted: Counted) -> None:
        """Count it as a point, and write it down with whatever comes next."""
        self.counted.append(counted)
        level_v = 0.0 if counted.frequency_hz is None else self.plan.level_v
        data = {
            "request": self.origin.request,
            "intent": None if counted.frequency_hz is None else self.intent,
            "pass_number": self.pass_number,
            "point": self.point,
            "frequency_hz": counted.frequency_hz,
            "level_v": level_v,
            "dwell_s": counted.dwell_s,
            "counts": counted.counts,
            "at_us": counted.at_us,
            "rate_per_s": counted.rate_per_s,
        }
        self.happened.append(Draft(kind="scan_point", actor=self.origin.author, data=data))
        self.point += 1

    @property
    def seconds(self) -> float:
        return (self.desk.clock.monotonic_ns() - self.began_ns) / 1e9

    def points(self) -> Points:
        """All of them, as arrays for the estimator."""
        return Points(
            frequency_hz=np.array([np.nan if one.frequency_hz is None else one.frequency_hz for one in self.counted]),
            dwell_s=np.array([one.dwell_s for one in self.counted]),
            counts=np.array([float(one.counts) for one in self.counted]),
            time_s=np.array([(one.at_ns - self.began_ns) / 1e9 for one in self.counted]),
        )

    def tell(self) -> None:
        """How far it is, for whoever looks."""
        plan = self.plan
        scanning = Scanning(
            request=self.origin.request,
            author=self.origin.author,
            scan=plan.scan,
            species=plan.species,
            mode=plan.mode,
            low_hz=plan.low_hz,
            high_hz=plan.high_hz,
            predicted_hz=plan.predicted_hz,
            pass_number=self.pass_number,
            passes=plan.passes,
            point=self.point,
            points=plan.points,
            due=self.due,
        )
        self.desk.change(scanning=scanning)
