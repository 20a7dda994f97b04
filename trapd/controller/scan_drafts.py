"""What the controller writes down of scans, of the schedule, and of claims. Pure."""

from __future__ import annotations

from dataclasses import asdict
from math import hypot
from typing import Any

from trapd.controller.registering import Origin
from trapd.record import Draft, SameCommit
from trapd.scans.estimate import FIT_VERSION, Finding
from trapd.scans.plan import Plan
from trapd.setpoint import Due, Request

LATE_S = 10.0
"""A due run that begins later than this after it was due is late."""


def plan_draft(request: Request, plan: Plan) -> Draft:
    """For the commit in which the request is the first draft."""
    return Draft(kind="plan", actor=request.author, data={"request": SameCommit(0), **asdict(plan)})


def due_run_draft(due: Due, now_us: int) -> Draft:
    """A due run that begins, for the commit in which its request is the first draft."""
    late_s = (now_us - due.due_us) / 1e6
    state = "late" if late_s > LATE_S else "run"
    data = {
        **asdict(due),
        "state": state,
        "late_s": late_s,
        "request": SameCommit(0),
        "reason": "it waited its turn" if state == "late" else "",
    }
    return Draft(kind="due_run", actor="trapd", data=data)


def estimate_draft(origin: Origin, pass_number: int, points: int, finding: Finding) -> Draft:
    """What is known after a pass."""
    data = {"request": origin.request, "pass_number": pass_number, "points": points, **asdict(finding)}
    return Draft(kind="estimate", actor=origin.author, data=data)


def finding_drafts(
    origin: Origin, plan: Plan, finding: Finding, *, began_us: int, passes: int, points: int, first: int
) -> list[Draft]:
    """How a scan ended, the ``first``-th draft of its commit (from 0); and the secular frequency, when there is one."""
    found = finding.state == "found" and finding.frequency_hz is not None and finding.uncertainty_hz is not None
    at_us = began_us + round((finding.at_s or 0.0) * 1e6)
    shared: dict[str, Any] = {
        "request": origin.request,
        "scan": plan.scan,
        "species": plan.species,
        "mode": plan.mode,
        "predicted_hz": plan.predicted_hz,
        "predicted_uncertainty_hz": plan.predicted_uncertainty_hz,
        "method": plan.method,
        "fit_version": FIT_VERSION,
        "why": origin.why,
        "points": points,
        "at_us": at_us,
    }
    told = {
        **asdict(finding),
        **shared,
        "passes": passes,
        "min_contrast": plan.min_contrast,
        "difference_sigma": _difference_sigma(plan, finding) if found else None,
    }
    drafts = [Draft(kind="finding", actor=origin.author, data=told)]
    if found:
        assert finding.interval_95_hz is not None
        measured = {
            **shared,
            "finding": SameCommit(first),
            "frequency_hz": finding.frequency_hz,
            "uncertainty_hz": finding.uncertainty_hz,
            "low_95_hz": finding.interval_95_hz[0],
            "high_95_hz": finding.interval_95_hz[1],
            "width_hz": finding.width_hz,
            "contrast": finding.contrast,
            "likelihood_ratio": finding.likelihood_ratio,
            "calibration": None,
            "flags": " ".join(finding.flags),
        }
        drafts.append(Draft(kind="secular_frequency", actor=origin.author, data=measured))
    return drafts


def _difference_sigma(plan: Plan, finding: Finding) -> float:
    """Measured minus predicted, in standard uncertainties of that difference."""
    assert finding.frequency_hz is not None
    assert finding.uncertainty_hz is not None
    sigma_hz = hypot(finding.uncertainty_hz, plan.predicted_uncertainty_hz)
    return (finding.frequency_hz - plan.predicted_hz) / sigma_hz
