"""``python -m trapd_simulated``: a rack in its own process, alive until it is told to end."""

from __future__ import annotations

import argparse
import json
import os
import signal
import sys
import threading
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import replace
from pathlib import Path

from trapd_simulated.control import ControlServer
from trapd_simulated.errors import RackError
from trapd_simulated.rack import Rack
from trapd_simulated.settings import RackSettings
from trapd_simulated.settings_file import load


def main(arguments: Sequence[str] | None = None) -> int:
    options = _parser().parse_args(arguments)
    try:
        settings = load(options.settings) if options.settings else RackSettings()
        if options.port_base:
            settings = _with_ports(settings, options.port_base)
        _run(settings, options)
    except (RackError, ValueError, OSError) as error:
        print(f"{error}; the rack was not started" if isinstance(error, OSError) else error, file=sys.stderr)
        return 2
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m trapd_simulated", description=__doc__)
    parser.add_argument("--settings", type=Path, metavar="FILE", help="TOML or JSON; default: an RF trap's rack")
    parser.add_argument("--seed", type=int, default=0, metavar="N", help="of readback bias and noise")
    parser.add_argument("--speed", type=float, default=1.0, metavar="X", help="rack seconds per second")
    parser.add_argument("--port-base", type=int, default=0, metavar="N", help="N, N+1, ...: instruments, then control")
    parser.add_argument("--log", type=Path, metavar="FILE", help="append each received message as a JSON line")
    told = "one JSON line on stdout when all ports listen"
    parser.add_argument("--print-ports", action=argparse.BooleanOptionalAction, default=True, help=told)
    return parser


def _with_ports(settings: RackSettings, base: int) -> RackSettings:
    count = len(settings.instruments)
    if not 1 <= base <= 65535 - count:
        raise RackError(f"--port-base {base}: {count} ports and one more do not fit; nothing started")
    instruments = {name: replace(one, port=base + at) for at, (name, one) in enumerate(settings.instruments.items())}
    return replace(settings, instruments=instruments, control_port=base + count)


def _run(settings: RackSettings, options: argparse.Namespace) -> None:
    quitting = threading.Event()
    # Whoever started the rack may die: neither its terminal nor its pipe may take the rack along.
    signal.signal(signal.SIGHUP, signal.SIG_IGN)
    for end in (signal.SIGTERM, signal.SIGINT):
        signal.signal(end, lambda number, frame: quitting.set())
    with Rack(settings, seed=options.seed, speed=options.speed, log=options.log) as rack:
        control = ControlServer(rack, settings.control_port, quitting)
        if options.print_ports:
            with suppress(OSError):
                print(json.dumps({**rack.describe(), "control": control.port, "pid": os.getpid()}), flush=True)
        quitting.wait()
        control.shutdown()
        control.server_close()


if __name__ == "__main__":
    sys.exit(main())
