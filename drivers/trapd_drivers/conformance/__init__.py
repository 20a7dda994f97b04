"""The conformance kit: whether a driver keeps the numbered contract of `trapd_drivers.interfaces`.

On the command line: ``python -m trapd_drivers.conformance DRIVER RESOURCE [--profile P] [--allow-output]``; in a test:
``assert_conforms(driver_class("my-driver"), "TCPIP::192.0.2.7::5025::SOCKET")``. It runs against a simulated rack or a
real bench. Without permission nothing is set; with it, values near zero are set, outputs are switched, and all of it
is put back. One check for each clause; a clause that cannot be tried says why.
"""

from __future__ import annotations

from collections.abc import Callable

from trapd_drivers.conformance import session_clauses, setting_clauses
from trapd_drivers.conformance.controls import Settings, read_settings, restore_settings, same_settings
from trapd_drivers.conformance.report import Report, Result
from trapd_drivers.conformance.trial import Bench, Broken, NotTried, Trial
from trapd_drivers.errors import DriverError
from trapd_drivers.registry import DriverClass

Check = Callable[[Trial], None]

CLAUSES: tuple[Check, ...] = (
    session_clauses.clause_1,
    session_clauses.clause_2,
    session_clauses.clause_3,
    session_clauses.clause_4,
    session_clauses.clause_5,
    session_clauses.clause_6,
    session_clauses.clause_7,
    session_clauses.clause_8,
    setting_clauses.clause_9,
    setting_clauses.clause_10,
    setting_clauses.clause_11,
    setting_clauses.clause_12,
    setting_clauses.clause_13,
    setting_clauses.clause_14,
    setting_clauses.clause_15,
    setting_clauses.clause_16,
)
"""One for each clause, in the contract's order; the first line of each docstring is its title."""


def run(bench: Bench) -> Report:
    """Try every clause. `DriverError` when the instrument cannot even be opened and read before the first."""
    before = _settings(bench)
    try:
        results = tuple(_try(check, number, bench) for number, check in enumerate(CLAUSES, start=1))
    finally:
        if bench.allow_output:
            _put_back(bench, before)
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
    title = (check.__doc__ or "").strip()
    trial = Trial(bench)
    try:
        check(trial)
    except NotTried as reason:
        return Result(clause=number, title=title, outcome="skipped", reason=str(reason))
    except (Broken, DriverError) as reason:
        return Result(clause=number, title=title, outcome="fail", reason=str(reason))
    except Exception as error:
        return Result(clause=number, title=title, outcome="fail", reason=f"{type(error).__name__}: {error}")
    finally:
        trial.close()
    return Result(clause=number, title=title, outcome="pass")


def _settings(bench: Bench) -> Settings:
    instrument = bench.driver.open(bench.resource, profile=bench.profile, timeout_s=bench.timeout_s)
    try:
        return read_settings(instrument)
    finally:
        instrument.close()


def _put_back(bench: Bench, before: Settings) -> None:
    instrument = bench.driver.open(bench.resource, profile=bench.profile, timeout_s=bench.timeout_s)
    try:
        if not same_settings(instrument, read_settings(instrument), before):
            restore_settings(instrument, before)
        instrument.read_status()  # the errors the kit provoked
    finally:
        instrument.close()


__all__ = ["CLAUSES", "Bench", "Report", "Result", "assert_conforms", "run"]
