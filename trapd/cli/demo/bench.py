"""The demo's folder: an invented trap, its file, and where its record will be."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from trapd.address import answers
from trapd.errors import BadRequest

TRAP = Path(__file__).with_name("trap.toml")
"""The trap file without its instruments, whose ports are known when the rack runs."""

_INSTRUMENT = """
[instruments.{name}]
driver = "{driver}"
resource = "TCPIP::127.0.0.1::{port}::SOCKET"
"""

DRIVERS = {
    "rf": "scpi-rf-source",
    "dc": "scpi-dc-supply",
    "tickle": "scpi-rf-source",
    "counter": "scpi-photon-counter",
    "vacuum": "scpi-gauge",
}


@dataclass(frozen=True)
class Folder:
    """Where everything of one demo lies."""

    path: Path

    @classmethod
    def make(cls, path: Path | None) -> Folder:
        """``path`` None: a new one for temporary files. Refuses a folder with somebody's own trap file."""
        folder = cls(Path(tempfile.mkdtemp(prefix="trapd-demo-")) if path is None else path.resolve())
        ours = TRAP.read_text(encoding="utf-8").splitlines()[0]
        try:
            folder.path.mkdir(parents=True, exist_ok=True)
            file = folder.trap_file
            if file.exists() and not file.read_text(encoding="utf-8").startswith(ours):
                raise BadRequest(f"{file} was not written by `trapd demo`; choose another --dir; nothing was started")
            if (folder.path / "trapd.sock").exists() and answers(folder.path / "trapd.sock"):
                raise BadRequest(f"a daemon runs in {folder.path} already; choose another --dir; nothing was started")
        except (OSError, UnicodeDecodeError) as error:
            raise BadRequest(f"--dir {path}: {error}; nothing was started") from error
        return folder

    @property
    def trap_file(self) -> Path:
        return self.path / "trap.toml"

    @property
    def record(self) -> Path:
        return self.path / "trapd.sqlite"

    @property
    def log(self) -> Path:
        return self.path / "daemon.log"

    def write_trap_file(self, ports: Mapping[str, int]) -> None:
        """``ports`` by instrument, as the rack chose them."""
        instruments = "".join(
            _INSTRUMENT.format(name=name, driver=driver, port=ports[name]) for name, driver in DRIVERS.items()
        )
        self.trap_file.write_text(TRAP.read_text(encoding="utf-8") + instruments, encoding="utf-8")
