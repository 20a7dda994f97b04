"""The conformance kit: whether a driver keeps the numbered contract of `trapd_drivers.interfaces`.

On the command line: ``python -m trapd_drivers.conformance DRIVER RESOURCE [--profile P] [--allow-output]``; in a test:
``assert_conforms(driver_class("my-driver"), "TCPIP::192.0.2.7::5025::SOCKET")``. It runs against a simulated rack or a
real bench. Without permission nothing is set; with it, values near zero are set, outputs are switched, bursts
and counts started, and all of it is put back. One check for each clause; a clause that cannot be tried says why.
"""

from __future__ import annotations

from contextlib import closing

from trapd_drivers.conformance import burst_clauses, counter_clauses, gauge_clauses, session_clauses, setting_clauses
from trapd_drivers.conformance.controls import Settings
from trapd_drivers.conformance.report import Outcome, Report, Result
from trapd_drivers.conformance.trial import Bench, Broken, Check, NotTried, Trial
from trapd_drivers.errors import DriverError
from trapd_drivers.registry import DriverClass

CLAUSES: tuple[Check, ...] = (
    *session_clauses.CLAUSES,
    *setting_clauses.CLAUSES,
    *burst_clauses.CLAUSES,
    *counter_clauses.CLAUSES,
    *gauge_clauses.CLAUSES,
)
"""One for each clause, in the contract's order; the docstring of each is its title."""


def run(bench: Bench) -> Report:
    """Try every clause. `DriverError` when the instrument cannot even be opened and read before the first."""
    with closing(bench.open()) as instrument:
        before = Settings.of(instrument)
    try:
        results = tuple(_try(check, number, bench) for number, check in enumerate(CLAUSES, start=1))
    finally:
        if bench.allow_output:
            with closing(bench.open()) as instrument:
                if not before.hold_at(instrument):
                    before.restore(instrument)
                instrument.read_status()  # the errors the kit provoked
    return Report(driver=getattr(bench.driver, "__name__", str(bench.driver)), resource=bench.resource, results=results)


def assert_conforms(
    driver: DriverClass, resource: str, *, profile: str = "plain", timeout_s: float = 0.5, allow_output: bool = False
) -> Report:
    """`run`, with an `AssertionError` that prints the report when a clause failed or none was tried."""
    bench = Bench(driver=driver, resource=resource, profile=profile, timeout_s=timeout_s, allow_output=allow_output)
    report = run(bench)
    if not report.conforms:
        raise AssertionError(str(report))
    return report


def _try(check: Check, number: int, bench: Bench) -> Result:
    outcome: Outcome = "pass"
    reason = ""
    trial = Trial(bench)
    try:
        check(trial)
    except NotTried as why:
        outcome, reason = "skipped", str(why)
    except (Broken, DriverError) as why:
        outcome, reason = "fail", str(why)
    except Exception as error:
        outcome, reason = "fail", f"{type(error).__name__}: {error}"
    finally:
        trial.close()
    return Result(clause=number, title=(check.__doc__ or "").strip(), outcome=outcome, reason=reason)


__all__ = ["CLAUSES", "Bench", "Report", "Result", "assert_conforms", "run"]
