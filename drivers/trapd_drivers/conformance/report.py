"""What the kit found: one result for each clause, none left out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Outcome = Literal["pass", "fail", "skipped"]


@dataclass(frozen=True, kw_only=True)
class Result:
    """One clause of the contract in `trapd_drivers.interfaces`. ``reason`` is empty when it passed."""

    clause: int
    title: str
    outcome: Outcome
    reason: str = ""

    def __str__(self) -> str:
        return f"{self.clause:3}  {self.outcome:8}{self.title}" + (f": {self.reason}" if self.reason else "")


@dataclass(frozen=True, kw_only=True)
class Report:
    """All clauses, in order, for one driver at one resource."""

    driver: str
    resource: str
    results: tuple[Result, ...]

    @property
    def conforms(self) -> bool:
        """Nothing failed and something passed; a report of nothing but skipped clauses is no conformance."""
        outcomes = {result.outcome for result in self.results}
        return "fail" not in outcomes and "pass" in outcomes

    def clauses(self, outcome: Outcome) -> tuple[int, ...]:
        return tuple(result.clause for result in self.results if result.outcome == outcome)

    def __str__(self) -> str:
        verdict = "conforms" if self.conforms else "does not conform"
        skipped = self.clauses("skipped")
        left_out = f" ({len(skipped)} of {len(self.results)} clauses were not tried)" if skipped else ""
        head = f"{self.driver} at {self.resource} {verdict}{left_out}"
        return "\n".join([head, *map(str, self.results)])
