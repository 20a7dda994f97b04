"""Random input runs when it is asked for; what it found before runs always."""

from __future__ import annotations

import os

collect_ignore = (
    [] if "TRAPD_FUZZ_S" in os.environ else ["test_api.py", "test_trap_file.py", "test_replies.py", "test_damage.py"]
)
