"""``python -m tests.check``: everything CI checks. Format, lint, types, import contract, tests.

Arguments go to pytest, which runs three processes: most tests wait for instruments, not for the processor. Stops at
the first failure and says which step it was.
"""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
BIN = Path(sys.executable).parent


def main() -> int:
    steps = [
        ("format", [BIN / "ruff", "format", "--check", "."]),
        ("lint", [BIN / "ruff", "check", "."]),
        ("types", [sys.executable, "-m", "mypy"]),
        ("import contract", [BIN / "lint-imports"]),
        ("tests", [sys.executable, "-m", "pytest", "-n", "3", "--dist", "loadscope", *sys.argv[1:]]),
    ]
    for name, command in steps:
        print(f"--- {name}", flush=True)
        began = time.monotonic()
        code = subprocess.run([str(word) for word in command], cwd=ROOT, check=False).returncode
        print(f"--- {name}: {'passed' if code == 0 else 'FAILED'} in {time.monotonic() - began:.0f} s", flush=True)
        if code != 0:
            return code
    return 0


if __name__ == "__main__":
    sys.exit(main())
