"""The command line: speaks HTTP through `trapd.client`, or computes offline. One file a command, or a small group of them.

Nothing heavy is imported before a command needs it: `trapd judge` is timed.
"""

from __future__ import annotations

import sys
from typing import NoReturn


def main() -> NoReturn:
    """The program ``trapd``."""
    from trapd.cli.program import PROGRAM

    PROGRAM.main(prog_name="trapd")
    sys.exit(0)  # not reached: click leaves with the exit code of the command
