"""What scans found, for people: a finding in one line and its flags explained; measured beside predicted frequencies."""

from __future__ import annotations

from collections.abc import Iterable

from trapd.cli.amounts import hertz, with_uncertainty
from trapd.cli.answer import Data
from trapd.cli.terminal import CAREFUL, FAINT, GOOD, say, table
from trapd.cli.words import utc
from trapd.scans.flags import FLAGS

_STYLES = {"found": GOOD, "none": GOOD, "unclear": CAREFUL, "vanished": CAREFUL}


def finding_words(data: Data) -> str:
    """``2.155021 MHz ± 48 Hz, predicted 2.155 MHz ± 12 kHz: +21 Hz, +0.0 σ``, or why there is no number."""
    if data["state"] != "found":
        return str(data["message"]).rstrip(".")
    found = with_uncertainty(data["frequency_hz"], data["uncertainty_hz"])
    off = _difference(data["frequency_hz"] - data["predicted_hz"], data["difference_sigma"])
    return f"{found}, predicted {_predicted(data)}: {off}"


def show_finding(finding: Data) -> None:
    """One line, with the entry of the request; and each flag with what it means and asks for."""
    flags = f"; {', '.join(finding['flags'])}" if finding["flags"] else ""
    state = finding["state"]
    say((state, _STYLES.get(state, CAREFUL)), f"  {finding_words(finding)}{flags} (entry {finding['request']})")
    for flag in finding["flags"]:
        say((flag, CAREFUL), f"  {FLAGS.get(flag, '')}", indent=2)


def show_frequencies(frequencies: Iterable[Data]) -> None:
    """Every configured scan, as /v1/status compares them."""
    rows = [_row(one) for one in frequencies]
    table(("scan", "predicted", "measured", "off by", "when (UTC)"), rows, wrapping=2)
    if any(row[-1].endswith("*") for row in rows):
        say(("* at other setpoints; the difference is to what was predicted there", FAINT))


def _row(one: Data) -> tuple[str, ...]:
    scan = f"{one['scan']}: {one['mode']} of {one['species'] or '?'}"
    predicted = "-" if one["predicted_hz"] is None else _predicted(one)
    if one["measured_hz"] is None:
        return scan, predicted, "-", "-", "never"
    measured = with_uncertainty(one["measured_hz"], one["uncertainty_hz"])
    off = _difference(one["difference_hz"], one["difference_sigma"])
    when = utc(one["at_us"]).removesuffix(" UTC")[:-3] + ("" if one["same_setpoints"] else " *")
    return scan, predicted, measured, off, when


def _predicted(data: Data) -> str:
    return with_uncertainty(data["predicted_hz"], data["predicted_uncertainty_hz"])


def _difference(difference_hz: float, sigma: float | None) -> str:
    return hertz(difference_hz, signed=True) + ("" if sigma is None else f", {sigma:+.1f} σ")
