"""One valid trap file per geometry, what scans add to it, and `write`, which puts one on disk; for every test."""

from __future__ import annotations

from pathlib import Path

NORTH_BENCH = """\
[trap]
name = "north bench"
geometry = "linear"
r0 = "0.50 mm"
z0 = "2.5 mm"
kappa = 0.29
phases = 1

[[species]]
ion = "40Ca+"

[drive]
instrument = "rf"
waveform = "sine"
frequency = { min = "20.90 MHz", max = "21.10 MHz", slew = "20 kHz/s", step = "1 kHz" }
amplitude = { max = "420 V", slew = "40 V/s", step = "2 V" }

[drive.resonator]
center = "21.00 MHz"
center_uncertainty = "2 kHz"
loaded_q = 200
gain = "38 V/V"
gain_uncertainty = "2 %"
level_max = "12 V"

[electrodes.endcaps]
kind = "endcap"
instrument = "dc"
channel = 1
weight = 1.0
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
field = [310.0, 0.0, 0.0]
voltage = { min = "-20 V", max = "20 V", slew = "5 V/s", step = "1 V" }

[instruments.rf]
driver = "scpi-rf-source"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
profile = "plain"

[instruments.dc]
driver = "scpi-dc-supply"
resource = "TCPIP::127.0.0.1::5026::SOCKET"

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
file = "north-bench.sqlite"

[server]
listen = "127.0.0.1:8417"
"""

RING = """\
[trap]
name = "south ring"
geometry = "ring"
r0 = "0.70 mm"
z0 = "0.50 mm"

[[species]]
ion = "88Sr+"

[[species]]
ion = "171Yb+"

[drive]
instrument = "rf"
gain = "40 V/V"
gain_uncertainty = "1 %"
level_max = "12 V"
warm_up = "30 s"
frequency = { min = "14.00 MHz", max = "16.00 MHz", slew = "50 kHz/s", step = "5 kHz" }
amplitude = { max = "450 V", slew = "40 V/s", step = "2 V" }

[electrodes.bias]
kind = "ring"
instrument = "dc"
channel = 1
voltage = { min = "-20 V", max = "20 V", slew = "5 V/s", step = "0.5 V" }

[instruments.rf]
driver = "scpi-rf-source"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
timeout = "500 ms"

[instruments.dc]
driver = "scpi-dc-supply"
resource = "TCPIP::127.0.0.1::5026::SOCKET"

[guard]
margin = "3 %"

[loading]
expires = "5 min"

[points.work]
"drive.frequency" = "15.00 MHz"
"drive.amplitude" = "300 V"
"""

TENSOR = """\
[trap]
name = "tilted bead"
geometry = "tensor"

[[species]]
name = "bead"
mass = "2.1e-14 kg"
charge = "900 e"
damping = "40 /s"

[drive]
waveform = "sine"
gain = "100 V/V"
curvature = [2.0e6, -0.9e6, -1.1e6, 1.0e5, 0.0, 3.0e5]
frequency = { min = "0.8 kHz", max = "1.4 kHz", slew = "50 Hz/s", step = "5 Hz" }
amplitude = { max = "900 V", slew = "40 V/s", step = "2 V" }

[electrodes.top]
kind = "other"
curvature = [1.0e5, 1.0e5, -2.0e5, 0.0, 0.0, 0.0]
field = [0.0, 0.0, 120.0]
voltage = { min = "-10 V", max = "10 V", slew = "5 V/s", step = "0.5 V" }

[guard]
margin = "5 %"
min_secular_frequency = "20 Hz"

[points.work]
"drive.frequency" = "1.1 kHz"
"drive.amplitude" = "500 V"
top = "0 V"
"""

SCANS = """\

[tickle]
instrument = "tickle"
level_max = "20 mV"

[counter]
instrument = "counter"
floor = "500 /s"

[instruments.tickle]
driver = "scpi-rf-source"
resource = "TCPIP::127.0.0.1::5027::SOCKET"

[instruments.counter]
driver = "scpi-photon-counter"
resource = "TCPIP::127.0.0.1::5028::SOCKET"

[scans.x]
mode = "x"
tickle = "0.5 mV"
span = "200 kHz"
dwell = "20 ms"
target = "50 Hz"

[[schedule]]
scan = "x"
cron = "*/30 * * * *"
"""
"""Appended to `NORTH_BENCH` or `RING`: an x scan, due each half hour."""


def write(folder: Path, text: str, name: str = "trap.toml", **ports: int) -> Path:
    """Writes ``text`` to a file in ``folder``; ``rf=40001, dc=40002`` give instruments of those names their ports."""
    lines, instrument = [], ""
    for line in text.splitlines():
        if line.startswith("["):
            instrument = line.strip("[]").removeprefix("instruments.")
        if line.startswith("resource") and instrument in ports:
            line = f'resource = "TCPIP::127.0.0.1::{ports[instrument]}::SOCKET"'
        lines.append(line)
    file = folder / name
    file.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return file
