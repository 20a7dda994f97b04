"""``python -m tests.bench [NAME ...] [--json]``: each figure beside its peer in the same run, and its goal.

Every module of this folder with a function ``measure`` gives rows ``name, value, unit, peer, ratio, goal, met``: ``value`` is
ours, ``peer`` the same work done the obvious way, ``ratio`` what the goal is about. Timing on a shared machine is noisy:
a figure that decides something is run three times.
"""

from __future__ import annotations

import argparse
import importlib
import json
import pkgutil
import sys
from typing import Any

import tests.bench


def main() -> int:
    names = [one.name for one in pkgutil.iter_modules(tests.bench.__path__) if one.name != "__main__"]
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description="Figures beside their peers.")
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"which: {', '.join(names)} (default: all)")
    parser.add_argument("--json", action="store_true", help="one JSON object a line")
    arguments = parser.parse_args()
    unknown = set(arguments.names) - set(names)
    if unknown:
        parser.error(f"no bench {', '.join(sorted(unknown))}; there are: {', '.join(names)}")
    met = True
    for name in arguments.names or names:
        for row in importlib.import_module(f"tests.bench.{name}").measure():
            met = met and row["met"] is not False
            print(json.dumps(row) if arguments.json else _line(row), flush=True)
    return 0 if met else 1


def _line(row: dict[str, Any]) -> str:
    peer = "-" if row["peer"] is None else f"{row['peer']:.4g}"
    ratio = "-" if row["ratio"] is None else f"{row['ratio']:.3g}"
    verdict = {True: "met", False: "MISSED", None: "for information"}[row["met"]]
    figures = f"{row['value']:>9.4g} {row['unit']:<9} peer {peer:>9}  ratio {ratio:>7}"
    return f"{row['name']:<72} {figures}  goal {row['goal']}: {verdict}"


if __name__ == "__main__":
    sys.exit(main())
