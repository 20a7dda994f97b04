"""The demo's folder: an invented trap, its file, and where its record will be."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from trapd.errors import BadRequest

_HEAD = "# Written by `trapd demo`, and written anew by the next one in this folder."

_TRAP = """\

[trap]
name = "north bench"
geometry = "linear"
r0 = "0.50 mm"                   # centre to rod surface
z0 = "2.5 mm"                    # half the distance between the endcaps
kappa = 0.29                     # axial geometric factor
phases = 1                       # one rod pair driven, the other grounded

[[species]]
ion = "40Ca+"
[[species]]
ion = "88Sr+"

[drive]
instrument = "rf"
waveform = "sine"
frequency = { min = "20.90 MHz", max = "21.10 MHz", slew = "20 kHz/s", step = "1 kHz" }
amplitude = { max = "420 V", slew = "80 V/s", step = "2 V" }      # at the electrode, zero to peak

[drive.resonator]
center = "21.00 MHz"
center_uncertainty = "2 kHz"
loaded_q = 200
gain = "38 V/V"                  # electrode volts per synthesizer volt on resonance
gain_uncertainty = "2 %"
level_max = "12 V"               # never ask more of the synthesizer

[electrodes.endcaps]
kind = "endcap"
instrument = "dc"
channel = 1
voltage = { min = "0 V", max = "900 V", slew = "50 V/s", step = "5 V" }
lag = "3 ms"
[electrodes.rods]
kind = "rods"
instrument = "dc"
channel = 2
voltage = { min = "-10 V", max = "10 V", slew = "5 V/s", step = "0.5 V" }
[electrodes.shim_x]
kind = "other"
instrument = "dc"
channel = 3
field = [310.0, 0.0, 0.0]        # field per volt at the ion, 1/m
voltage = { min = "-20 V", max = "20 V", slew = "5 V/s", step = "1 V" }

[guard]
margin = "5 %"
min_secular_frequency = "100 kHz"
min_depth = "0.2 eV"

[points.work]
"drive.frequency" = "21.00 MHz"
"drive.amplitude" = "260 V"
endcaps = "120 V"
rods = "1 V"

[record]
file = "trapd.sqlite"

[server]
listen = "127.0.0.1:0"           # any free port
socket = "trapd.sock"            # in this folder, so that no other daemon is mistaken for this one
"""

_INSTRUMENT = """
[instruments.{name}]
driver = "{driver}"
resource = "TCPIP::127.0.0.1::{port}::SOCKET"
"""

DRIVERS = {"rf": "scpi-rf-source", "dc": "scpi-dc-supply"}


@dataclass(frozen=True)
class Folder:
    """Where everything of one demo lies."""

    path: Path

    @classmethod
    def make(cls, path: Path | None) -> Folder:
        """``path`` None: a new one for temporary files. Refuses a folder with somebody's own trap file."""
        if path is None:
            return cls(Path(tempfile.mkdtemp(prefix="trapd-demo-")))
        try:
            path.mkdir(parents=True, exist_ok=True)
            file = path / "trap.toml"
            if file.exists() and not file.read_text(encoding="utf-8").startswith(_HEAD):
                raise BadRequest(f"{file} was not written by `trapd demo`; choose another --dir; nothing was started")
        except (OSError, UnicodeDecodeError) as error:
            raise BadRequest(f"--dir {path}: {error}; nothing was started") from error
        return cls(path.resolve())

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
        self.trap_file.write_text(_HEAD + "\n" + _TRAP + instruments, encoding="utf-8")
