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
    except (RackError, ValueError) as error:
        print(error, file=sys.stderr)
        return 2
    except OSError as error:
        print(f"{error}; the rack was not started", file=sys.stderr)
        return 2
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m trapd_simulated", description=__doc__)
    parser.add_argument("--settings", type=Path, metavar="FILE", help="TOML or JSON; default: an RF trap's rack")
    parser.add_argument("--seed", type=int, default=0, metavar="N", help="of readback bias and noise")
    parser.add_argument("--speed", type=float, default=1.0, metavar="X", help="rack seconds per second")
    parser.add_argument("--port-base", type=int, default=0, metavar="N", help="N, N+1, ...: instruments, then control")
    parser.add_argument("--log", type=Path, metavar="FILE", help="append each received message as a JSON line")
    parser.add_argument(
        "--print-ports",
        action=argparse.BooleanOptionalAction,
        default=True,
        help="one JSON line on stdout when all ports listen",
    )
    return parser


def _with_ports(settings: RackSettings, base: int) -> RackSettings:
    if not 1 <= base <= 65535 - len(settings.instruments):
        raise RackError(
            f"--port-base {base}: {len(settings.instruments)} ports and one more do not fit; nothing started"
        )
    instruments = {
        name: replace(one, port=base + index) for index, (name, one) in enumerate(settings.instruments.items())
    }
    return replace(settings, instruments=instruments, control_port=base + len(instruments))


def _run(settings: RackSettings, options: argparse.Namespace) -> None:
    quitting = threading.Event()
    # Whoever started the rack may die: neither its terminal nor its pipe may take the rack along.
    signal.signal(signal.SIGHUP, signal.SIG_IGN)
    for end in (signal.SIGTERM, signal.SIGINT):
        signal.signal(end, lambda number, frame: quitting.set())
    with Rack(settings, seed=options.seed, speed=options.speed, log=options.log) as rack:
        control = ControlServer(rack, settings.control_port, quitting)
        if options.print_ports:
            _announce(rack, control.port)
        quitting.wait()
        control.shutdown()
        control.server_close()


def _announce(rack: Rack, control_port: int) -> None:
    kinds = rack.kinds
    instruments = {name: {"port": port, "kind": kinds[name]} for name, port in rack.ports.items()}
    line = {"instruments": instruments, "control": control_port, "pid": os.getpid(), "speed": rack.speed}
    with suppress(OSError):
        print(json.dumps(line), flush=True)


if __name__ == "__main__":
    sys.exit(main())
