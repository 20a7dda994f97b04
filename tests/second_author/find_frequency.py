"""find_frequency.py CENTER_HZ HALF_SPAN_HZ tickle=PORT counter=PORT [--switch-on rf=PORT dc=PORT control=PORT]

Prints "FREQUENCY UNCERTAINTY" (Hz): where the photons dip. By a second author, with nothing of this project.
"""

import sys
from socket import create_connection
from time import sleep

import numpy as np
import pyvisa
from scipy.optimize import curve_fit

NOTHING = "no frequency was found"


def ask(name, message):
    try:
        *answers, error = instruments[name].query(message + ";:SYST:ERR?").split(";")
    except (pyvisa.Error, OSError) as failure:  # a refused port opens all the same
        sys.exit(f"{name} does not answer {message!r}: {failure}; {NOTHING}")
    if int(error.split(",")[0]) != 0:
        sys.exit(f"{name} answers {message!r} with {error}; expected no error; {NOTHING}")
    return answers


def count(frequency_hz):
    """The frequency that the tickle says it has, and the photons of one gate inside one burst."""
    (told_hz,) = ask("tickle", f"FREQ {frequency_hz:.3f};:VOLT 0.0005;:BURS:STAT ON;:BURS:DUR 2;:FREQ?")
    ask("tickle", "OUTP ON;:INIT")
    ask("counter", "TOT:GATE:TIME 0.02;:INIT")
    while int(ask("counter", "STAT:OPER:COND?")[0]) & 16:
        sleep(0.001)
    assert ask("tickle", "BURS:ACT?;:OUTP OFF") == ["1"], f"the burst ended before its count; {NOTHING}"
    return float(told_hz), int(ask("counter", "FETC?")[0])


def dip(f, middle, width, contrast, level):
    return level * (1 - contrast / (1 + (2 * (f - middle) / width) ** 2))


ports = dict(word.split("=") for word in sys.argv[3:] if "=" in word)
visa, line_end = pyvisa.ResourceManager("@py"), {"read_termination": "\n", "write_termination": "\n"}
places = {name: f"TCPIP::127.0.0.1::{port}::SOCKET" for name, port in ports.items() if name != "control"}
instruments = {name: visa.open_resource(place, timeout=2000, **line_end) for name, place in places.items()}
if "--switch-on" in sys.argv:
    ask("rf", f"FREQ 21E6;:VOLT {260 / 38:.5f};:OUTP ON")
    ask("dc", "SOUR1:VOLT 120;:SOUR2:VOLT 1;:OUTP1 ON;:OUTP2 ON")
    with create_connection(("127.0.0.1", int(ports["control"])), timeout=10) as rack, rack.makefile("rw") as line:
        print('{"do": "load"}', file=line, flush=True)
        assert '"ok": true' in line.readline(), f"no ion was loaded; {NOTHING}"
grid = float(sys.argv[1]) + float(sys.argv[2]) * np.random.default_rng().permutation(np.linspace(-1, 1, 121))
f, n = np.array(sorted(map(count, grid))).T
found = (f[2 + np.argmin(np.convolve(n, np.ones(5), "valid"))], 2e3, 0.4, np.median(n))
for _ in range(4):  # Poisson: the variance is what the line itself expects, not what was counted
    found, covariance = curve_fit(dip, f, n, found, sigma=np.sqrt(dip(f, *found)), absolute_sigma=True)
errors = np.sqrt(np.diag(covariance) * max(1.0, np.sum((n - dip(f, *found)) ** 2 / dip(f, *found)) / (len(f) - 4)))
assert found[2] > 5 * errors[2], f"there is no dip; {NOTHING}"
print(f"{found[0]:.1f} {errors[0]:.1f}")
