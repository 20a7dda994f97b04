"""``python -m trapd_drivers.conformance DRIVER RESOURCE``: 0 conforms, 1 does not, 2 a mistake, 5 not reachable."""

from __future__ import annotations

import argparse
import sys

from trapd_drivers.conformance import Bench, run
from trapd_drivers.errors import DriverError, ProfileError
from trapd_drivers.registry import driver_class


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(
        prog="python -m trapd_drivers.conformance",
        description="Try every clause of the driver contract on one instrument and print what was found.",
    )
    parser.add_argument("driver", help="a name registered under trapd.drivers")
    parser.add_argument("resource", help="TCPIP::HOST::PORT::SOCKET")
    parser.add_argument("--profile", default="plain", help="dialect profile: a shipped name or a .toml file")
    parser.add_argument("--timeout", type=float, default=0.5, metavar="S", help="the driver's timeout in seconds")
    parser.add_argument(
        "--allow-output",
        action="store_true",
        help="set values near zero, switch outputs, start bursts and counts; put back",
    )
    chosen = parser.parse_args(arguments)
    try:
        bench = Bench(
            driver=driver_class(chosen.driver),
            resource=chosen.resource,
            profile=chosen.profile,
            timeout_s=chosen.timeout,
            allow_output=chosen.allow_output,
        )
        report = run(bench)
    except DriverError as error:
        print(error, file=sys.stderr)
        return 2 if isinstance(error, ProfileError) else 5
    print(report)
    return 0 if report.conforms else 1


if __name__ == "__main__":
    sys.exit(main())
