"""A scan as text: the count rate against frequency in columns of blocks, and beneath it what is predicted and estimated.

Works on points and plans as data. No colour: everything is said by a letter or a shape.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from trapd.cli.amounts import amount, duration, hertz, millivolts, rate, with_uncertainty
from trapd.cli.answer import Data
from trapd.client import JsonEntry

COLUMNS, ROWS = 64, 8
MARGIN = 12
"""Columns of text before the first column of the plot."""

_BLOCKS = " ▁▂▃▄▅▆▇█"
_EIGHTHS = len(_BLOCKS) - 1
_LEAST_SPREAD = 0.02
"""Of the rate: less than this between the lowest and the highest column is drawn no taller."""


class Picture:
    """What is known of a scan under way: fed with the record's entries, drawn as lines of text."""

    def __init__(self, plan: Data) -> None:
        self._plan = plan
        self._points: list[Data] = []
        self._estimate: dict[str, Any] | None = None
        self._pass_number = 1

    def note(self, entry: JsonEntry) -> None:
        data = entry["data"]
        if entry["kind"] == "scan_point":
            self._points.append(data)
            self._pass_number = data["pass_number"]
        elif entry["kind"] in ("estimate", "finding"):
            self._estimate = data

    @property
    def passed(self) -> bool:
        """Whether the pass that was counted last is complete: what is known after half of one is no estimate."""
        counted = [one for one in self._points if one["pass_number"] == self._pass_number]
        return bool(sum(one["frequency_hz"] is not None for one in counted) >= self._plan["points"])

    def lines(self, columns: int) -> list[str]:
        plan = self._plan
        what = f"{plan['mode']} of {plan['species']}, tickle {millivolts(plan['level_v'])}"
        heading = f"scan {plan['scan']}: {what}, {duration(plan['dwell_s'])} a point"
        drawn = spectrum(list(self._points), plan, self._estimate, columns=columns)
        return [heading, *drawn, f"{self._far()}, {self._counted()}", self._estimated()]

    def line(self) -> str:
        """``pass 3 of 12: f = 2.155021 MHz ± 48 Hz, +21 Hz from the prediction``."""
        return f"{self._far()}: {self._estimated()}"

    def _far(self) -> str:
        return f"pass {self._pass_number} of {self._plan['passes']}"

    def _counted(self) -> str:
        off = [one for one in self._points if one["frequency_hz"] is None]
        dark = (
            f"; tickle off {rate(sum(one['counts'] for one in off) / sum(one['dwell_s'] for one in off))}"
            if off
            else ""
        )
        return f"{len(self._points)} points{dark}"

    def _estimated(self) -> str:
        if self._estimate is None:
            return "no estimate yet"
        frequency_hz = self._estimate["frequency_hz"]
        if frequency_hz is None or self._estimate["state"] == "vanished":
            return str(self._estimate["message"])
        off = hertz(frequency_hz - self._plan["predicted_hz"], signed=True)
        return f"f = {with_uncertainty(frequency_hz, self._estimate['uncertainty_hz'])}, {off} from the prediction"


def spectrum(
    points: Sequence[Data], plan: Data, estimate: Data | None, *, columns: int = COLUMNS, rows: int = ROWS
) -> list[str]:
    """Lines of text, ``MARGIN + columns`` wide at most. Its bottom is not zero but near the lowest rate."""
    rates = rates_by_column(points, plan, columns)
    across = _Across(plan["low_hz"], plan["high_hz"], columns)
    return [
        *_plot(rates, columns, rows),
        _axis(across),
        _row("predicted", across.marked(plan["predicted_hz"], plan["predicted_uncertainty_hz"], "P")),
        _row("estimated", _estimated(across, estimate)),
    ]


def rates_by_column(points: Sequence[Data], plan: Data, columns: int) -> dict[int, float]:
    """Counts per second in each column that has been counted in; the tickle on."""
    across = _Across(plan["low_hz"], plan["high_hz"], columns)
    counts: dict[int, list[float]] = {}
    for point in points:
        if point["frequency_hz"] is not None:
            sums = counts.setdefault(across.column(point["frequency_hz"]), [0.0, 0.0])
            sums[0] += point["counts"]
            sums[1] += point["dwell_s"]
    return {column: found / dwell_s for column, (found, dwell_s) in counts.items()}


def _plot(rates: Mapping[int, float], columns: int, rows: int) -> list[str]:
    if not rates:
        return [_row("", "", "│") for _ in range(rows)]
    bottom, top = _range(rates)
    filled = {column: round((one - bottom) / (top - bottom) * rows * _EIGHTHS) for column, one in rates.items()}
    lines = []
    for row in reversed(range(rows)):
        blocks = "".join(
            _BLOCKS[min(max(filled[column] - row * _EIGHTHS, 0), _EIGHTHS)] if column in filled else " "
            for column in range(columns)
        )
        label = {rows - 1: rate(top), 0: rate(bottom)}.get(row, "")
        lines.append(_row(label, blocks, "┤" if label else "│"))
    return lines


def _range(rates: Mapping[int, float]) -> tuple[float, float]:
    lowest, highest = min(rates.values()), max(rates.values())
    spread = max(highest - lowest, _LEAST_SPREAD * highest, 1.0)
    return max(lowest - spread / 4, 0.0), max(highest, lowest + spread)


def _axis(across: _Across) -> str:
    ends = [amount(one, "Hz", 7) for one in (across.low_hz, across.high_hz)]
    return _row("", ends[0] + ends[1].rjust(across.columns - len(ends[0])), "└")


def _estimated(across: _Across, estimate: Data | None) -> str:
    if estimate is None or estimate["frequency_hz"] is None or estimate["state"] == "vanished":
        return "-"
    return across.marked(estimate["frequency_hz"], estimate["uncertainty_hz"], "E")


def _row(label: str, text: str, edge: str = " ") -> str:
    return f"{label:>{MARGIN - 2}} {edge}{text}".rstrip()


class _Across:
    """Where a frequency stands among so many columns."""

    def __init__(self, low_hz: float, high_hz: float, columns: int) -> None:
        self.low_hz, self.high_hz, self.columns = low_hz, high_hz, columns

    def column(self, frequency_hz: float) -> int:
        """The column of a frequency; that at the end for what lies beyond."""
        share = (frequency_hz - self.low_hz) / (self.high_hz - self.low_hz)
        return min(max(math.floor(share * self.columns), 0), self.columns - 1)

    def marked(self, frequency_hz: float, uncertainty_hz: float, letter: str) -> str:
        """``├──P──┤``: one standard uncertainty to either side, as far as it is in the window."""
        if not self.low_hz <= frequency_hz <= self.high_hz:
            return f"{letter} is outside, at {amount(frequency_hz, 'Hz', 7)}"
        low, here, high = (self.column(frequency_hz + side * uncertainty_hz) for side in (-1, 0, 1))
        marks = [" "] * low + ["─"] * (high - low + 1)
        if frequency_hz - uncertainty_hz >= self.low_hz:
            marks[low] = "├"
        if frequency_hz + uncertainty_hz <= self.high_hz:
            marks[high] = "┤"
        marks[here] = letter
        return "".join(marks)
