"""Figures, as SVG whose text stays text. The only module that knows matplotlib, which it imports when it draws."""

from __future__ import annotations

import io
import textwrap
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from trapd.scans.flags import FLAGS

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Data = Mapping[str, Any]
Array = NDArray[np.float64]

MOST_MARKERS = 150
"""More points than that are drawn as sums of neighbours."""

_MHZ = 1e6
_TITLE_COLUMNS = 95
_ONE_SIGMA = 0.158655
"""The tail beyond one standard deviation of a normal distribution."""

_STYLE: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "trapd",
    "font.family": "sans-serif",
    "font.size": 10.0,
    "axes.formatter.useoffset": False,
    "text.parse_math": False,
}


def scan_figure(points: Sequence[Data], finding: Data, plan: Data, *, trap: str) -> str:
    """One scan as an SVG document: the count rate against the frequency of the tickle, the fitted line, the predicted and
    the measured frequency with one standard uncertainty to either side, and the rate with the tickle off.

    ``points``, ``finding`` and ``plan`` as /v1/scans/{entry} tells them; ``trap`` is the trap's name. The same scan gives
    the same text. Legible in grey; for a light background.
    """
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    with rc_context(_STYLE):
        figure = Figure(figsize=(8.0, 5.0), layout="constrained")
        axes = figure.add_subplot()
        _draw_rates(axes, points)
        _draw_frequencies(axes, finding, plan)
        _draw_line(axes, finding, plan)
        axes.set(xlabel="frequency of the tickle (MHz)", ylabel="count rate (1/s)")
        axes.set_xlim(plan["low_hz"] / _MHZ, plan["high_hz"] / _MHZ)
        axes.set_title(_title(finding, trap), fontsize=9.0, loc="left")
        figure.legend(loc="outside lower center", ncols=3, frameon=False, fontsize=9.0)
        svg = io.StringIO()
        figure.savefig(svg, format="svg", facecolor="white", metadata={"Date": None, "Creator": "trapd"})
    return svg.getvalue()


def poisson_interval(counts: Array) -> tuple[Array, Array]:
    """Ends of the central 68 % interval of the mean, for each number of counts (Garwood, Biometrika 28, 437, 1936)."""
    from scipy.special import gammaincinv

    low = np.where(counts > 0, gammaincinv(np.maximum(counts, 1.0), _ONE_SIGMA), 0.0)
    return low, gammaincinv(counts + 1, 1 - _ONE_SIGMA)


def sums(points: Sequence[Data], low_hz: float, high_hz: float) -> tuple[Array, Array, Array]:
    """Mean frequency (Hz), counts and time (s) of tickled points, neighbours together when there are many; (n,) each."""
    tickled = sorted(
        (one["frequency_hz"], one["counts"], one["dwell_s"]) for one in points if one["frequency_hz"] is not None
    )
    table = np.array(tickled, dtype=np.float64).reshape(-1, 3)
    if len(table) <= MOST_MARKERS:
        return table[:, 0], table[:, 1], table[:, 2]
    edges = np.linspace(low_hz, high_hz, MOST_MARKERS + 1)[1:-1]
    groups = [one for one in np.split(table, np.searchsorted(table[:, 0], edges)) if len(one)]
    return (
        np.array([one[:, 0].mean() for one in groups]),
        np.array([one[:, 1].sum() for one in groups]),
        np.array([one[:, 2].sum() for one in groups]),
    )


def _draw_rates(axes: Axes, points: Sequence[Data]) -> None:
    tickled = [one["frequency_hz"] for one in points if one["frequency_hz"] is not None]
    if tickled:
        frequency_hz, counts, time_s = sums(points, min(tickled), max(tickled))
        _, errors = _rates(counts, time_s)
        label = "counted, ±1 σ (Poisson)"
        axes.errorbar(
            frequency_hz / _MHZ, counts / time_s, errors, fmt="o", ms=3.5, lw=0.8, color="black", zorder=4, label=label
        )
    off = [one for one in points if one["frequency_hz"] is None]
    if off:
        counts, time_s = (np.array([float(sum(one[key] for one in off))]) for key in ("counts", "dwell_s"))
        rate, errors = _rates(counts, time_s)
        axes.axhspan(rate[0] - errors[0, 0], rate[0] + errors[1, 0], color="0.85", zorder=1, label="tickle off, ±1 σ")
        axes.axhline(rate[0], color="0.45", lw=0.8, ls=":", zorder=1)


def _rates(counts: Array, time_s: Array) -> tuple[Array, Array]:
    """Rates, and how far their error bars reach down and up; (n,) and (2, n)."""
    low, high = poisson_interval(counts)
    return counts / time_s, np.stack([counts - low, high - counts]) / time_s


def _draw_frequencies(axes: Axes, finding: Data, plan: Data) -> None:
    predicted_hz, spread_hz = plan["predicted_hz"], plan["predicted_uncertainty_hz"]
    ends = (predicted_hz - spread_hz) / _MHZ, (predicted_hz + spread_hz) / _MHZ
    axes.axvspan(*ends, facecolor="none", edgecolor="0.87", hatch="//", lw=0.0, zorder=0)
    axes.axvline(predicted_hz / _MHZ, color="0.35", lw=1.2, ls="--", zorder=4, label="predicted, ±1 σ hatched")
    if not _has_number(finding):
        return
    found_hz, sigma_hz = finding["frequency_hz"], finding["uncertainty_hz"]
    ends = (found_hz - sigma_hz) / _MHZ, (found_hz + sigma_hz) / _MHZ
    # Its edge has a width on paper: a band that is narrower than a line would not be seen.
    axes.axvspan(*ends, facecolor="lightskyblue", edgecolor="lightskyblue", lw=3.0, zorder=2, label="measured, ±1 σ")
    axes.axvline(found_hz / _MHZ, color="tab:blue", lw=0.8, zorder=3)


def _draw_line(axes: Axes, finding: Data, plan: Data) -> None:
    """As `trapd.scans.line` has it."""
    if not _has_number(finding):
        return
    frequency_hz = np.linspace(plan["low_hz"], plan["high_hz"], 1001)
    profile = 1 / (1 + (2 * (frequency_hz - finding["frequency_hz"]) / finding["width_hz"]) ** 2)
    rate = finding["rate_per_s"] * (1 - finding["contrast"] * profile)
    axes.plot(frequency_hz / _MHZ, rate, color="tab:red", lw=1.6, zorder=5, label="fitted line")


def _title(finding: Data, trap: str) -> str:
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=finding["at_us"])
    what = f"scan {finding['scan']} ({finding['mode']} of {finding['species']})"
    lines = [f"{trap}, {what}, {moment:%Y-%m-%d %H:%M:%S} UTC, entry {finding['request']}"]
    said, apart = finding["message"], finding.get("difference_sigma")
    if apart is not None and _has_number(finding):
        said += f" {finding['frequency_hz'] - finding['predicted_hz']:+.0f} Hz, {apart:+.1f} σ from the prediction."
    for words in (said, *(f"{flag}: {FLAGS.get(flag, '')}" for flag in finding["flags"])):
        lines += textwrap.wrap(words, _TITLE_COLUMNS)
    return "\n".join(lines)


def _has_number(finding: Data) -> bool:
    """Of a scan that lost its counts none is shown, whatever was seen before."""
    return finding["frequency_hz"] is not None and finding["state"] != "vanished"
