"""What may be the matter with a scan's result, and what to do about it."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

FLAGS: Mapping[str, str] = MappingProxyType(
    {
        "low_confidence": "The line stands only a little above chance. Scan again, or longer, before relying on it.",
        "at_the_edge": "The line is within one width of the window's edge, or beyond it. Move or widen the window.",
        "broadened": "The line is more than 1.5 times as wide as expected: two modes close together, a strong tickle, or a"
        " drifting frequency. Scan with half the tickle and compare.",
        "narrowed": "The line is less than 0.6 times as wide as expected, as when the motion runs away. Scan with half the"
        " tickle and compare.",
        "poor_fit": "The counts scatter more than one line on a slow drift allows. The uncertainty is widened to match, or"
        " no number is given. Look for unsteady light, a second mode or a tickle that is too strong.",
        "two_lines": "A second line stands in the window, so which mode this is cannot be told. Narrow the window around one.",
        "drifting_rate": "The count rate drifted by more than one percent during the scan; the fit allows for it. Check laser"
        " power and lock.",
        "counts_vanished": "The counts fell to about the dark rate. Count with the tickle off, cool again, and only then"
        " call the ion lost.",
        "deep": "The dip takes more than half of the counts: the tickle may be too strong, which shifts and distorts"
        " the line. Scan with half the tickle and compare.",
        "not_excluded": "A line of the least contrast asked for could still hide in the counts. Scan longer.",
        "identity_ambiguous": "Another mode is expected close enough to be the one that answered. Scan that one too, or move"
        " the trap so that they lie apart.",
        "timeout": "The scan took longer than its plan allowed and ended with what it had. Look for an instrument that answers"
        " slowly.",
        "too_few_points": "There are too few points to judge. Scan on.",
    }
)
