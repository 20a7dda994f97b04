"""Rows of the record for `trapd record`: the same ones from a file and from a daemon."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence, Set
from dataclasses import asdict
from datetime import datetime
from functools import partial
from pathlib import Path
from typing import Any

from trapd.cli.answer import Data
from trapd.client import Client

Rows = list[dict[str, Any]]

MOMENTS: Mapping[str, str] = {"frequencies": "at_us", "due": "due_us"}
"""Which of its times a row is about, where that is not when it was written."""

_MOST = 1000
"""Rows asked for at once; verdicts and results looked through for refusals."""

Page = Callable[[int | None, int], Rows]
"""Rows after an entry, or the newest, at most so many."""


def from_file(
    file: Path, view: str, *, since: datetime | None, limit: int, points: bool, **only: str | None
) -> tuple[Rows, int]:
    """Rows in order, the newest last, every one with its ``seq`` and ``time`` (RFC 3339, UTC). ``only``: "kind" and "who".

    Without ``points`` nothing of single points of scans; the second number says how many rows that left out.
    """
    from trapd.record import Reader, rfc3339

    asked: dict[str, Any] = {"since_us": since and round(since.timestamp() * 1e6)}
    if view == "entries":
        asked["actor"] = only.pop("who")
    asked |= {key: value for key, value in only.items() if value is not None}
    moment = MOMENTS.get(view, "time_us")
    with Reader.open(file) as reader:
        views: Mapping[str, Callable[..., Sequence[Any]]] = {
            "entries": reader.entries,
            "setpoints": reader.setpoints,
            "refusals": reader.refusals,
            "scans": reader.scans,
            "frequencies": reader.secular_frequencies,
            "due": reader.due_runs,
        }

        def page(after: int | None, most: int) -> Rows:
            found = views[view](after=after or 0, newest=after is None, limit=most, **asked)
            return [{"seq": one.seq, "time": rfc3339(getattr(one, moment)), **asdict(one)} for one in found]

        return (page(None, limit), 0) if points else _without_points(page, limit)


def from_daemon(
    at: str | None, view: str, *, since: datetime | None, limit: int, points: bool, **only: str | None
) -> tuple[Rows, int]:
    """The same rows."""
    kind, who = only["kind"], only["who"]
    with Client(at) as client:
        if view == "refusals":
            return _refusals(client, who, limit, since), 0
        views: Mapping[str, Callable[..., Rows]] = {
            "entries": partial(client.entries, kind=kind, actor=who),
            "setpoints": partial(client.setpoints, who=who),
            "scans": partial(client.scans_made, who=who),
            "frequencies": client.frequencies,
            "due": lambda **asked: client.due(**asked)["due"],
        }

        def page(after: int | None, most: int) -> Rows:
            return views[view](after=after, limit=most, since=since)

        return (page(None, limit), 0) if points else _without_points(page, limit)


def _without_points(page: Page, limit: int) -> tuple[Rows, int]:
    """The newest rows that are not those of a point, and how many were left out among them. Goes back as far as it must."""
    found = page(None, _MOST)
    shown: Rows = []
    left_out: list[int] = []
    bursts: set[int] = set()
    goes_on = len(found) == _MOST
    while True:
        bursts |= {one["data"]["intent"] for one in found if one.get("kind") == "scan_point"}
        bursts |= {one["seq"] for one in found if _quantity(one) == "burst"}
        left_out += [one["seq"] for one in found if _is_of_a_point(one, bursts)]
        shown = [one for one in found if not _is_of_a_point(one, bursts)] + shown
        if len(shown) >= limit:
            shown = shown[-limit:]
            return shown, sum(seq > shown[0]["seq"] for seq in left_out)
        if not goes_on:
            return shown, len(left_out)
        first = found[0]["seq"]
        after = max(first - 1 - _MOST, 0)
        found = [one for one in page(after, _MOST) if one["seq"] < first] if first > 1 else []
        goes_on = bool(found)


def _quantity(one: Data) -> str | None:
    """Of a row of `setpoints`, or of an entry of kind "intent"."""
    quantity: str | None = one.get("data", one).get("quantity")
    return quantity


def _is_of_a_point(one: Data, bursts: Set[int]) -> bool:
    if one["seq"] in bursts or one.get("kind") in ("scan_point", "estimate"):
        return True
    return one.get("kind") == "outcome" and one["data"]["intent"] in bursts


def _refusals(client: Client, who: str | None, limit: int, since: datetime | None) -> Rows:
    """The rows that the record's own view `refusals` gives."""
    verdicts = client.entries(kind="verdict", actor=who, limit=_MOST, since=since)
    results = client.entries(kind="result", actor=who, limit=_MOST, since=since)
    refused = [one for one in verdicts if not one["data"]["accepted"]]
    refused += [one for one in results if _was_never_judged(one)]
    newest = sorted(refused, key=lambda one: one["seq"])[-limit:]
    return [row for one in newest for row in _reasons(one, client.entry(one["data"]["request"]))][-limit:]


def _was_never_judged(result: Data) -> bool:
    """A request and its result stand beside each other where no verdict came between."""
    data = result["data"]
    return bool(data["code"] == "conflict" and data["state"] == "failed" and data["request"] == result["seq"] - 1)


def _reasons(said: Data, request: Data) -> Rows:
    head = {key: said[key] for key in ("seq", "time", "time_us")}
    head |= {"request": request["seq"], "who": request["actor"], "why": request["data"]["why"]}
    conflict = {**dict.fromkeys(_NUMBERS), "rule": "conflict", "message": said["data"].get("error")}
    return [{**head, **reason} for reason in said["data"].get("reasons", [conflict])]


_NUMBERS = ("quantity", "unit", "found", "bound", "nearest", "species", "mode")
