"""The control port of a rack process: a JSON object a line in, a JSON object a line out.

``{"do": "front_panel", "instrument": "rf", "command_text": "VOLT 3"}`` is answered by ``{"ok": true, "result": ...}``
or ``{"ok": false, "error": "..."}``. What can be done is in `ACTIONS`; requests of one connection are done in turn.
"""

from __future__ import annotations

import inspect
import json
import socket
import socketserver
import threading
from collections.abc import Callable, Mapping
from dataclasses import asdict, fields
from typing import Any

from trapd_simulated.errors import RackError, RackUseError
from trapd_simulated.faults import Fault, fault_kind
from trapd_simulated.rack import Rack
from trapd_simulated.server import HOST


def _describe(rack: Rack) -> dict[str, Any]:
    return {**rack.describe(), "seed": rack.seed, "time_s": rack.clock.now_s()}


def _received(rack: Rack, after: int = 0) -> list[dict[str, Any]]:
    """Messages with index ``after`` and up."""
    return [asdict(one) for one in rack.received_after(after)]


def _electrodes(rack: Rack, t: float | None = None) -> dict[str, Any]:
    return asdict(rack.electrodes(t))


def _ion_state(rack: Rack) -> dict[str, Any]:
    return asdict(rack.ion_state())


def _inject(rack: Rack, instrument: str, kind: str, **rest: Any) -> None:
    """``rest``: times, delay_s, value, text, channel."""
    known = {one.name for one in fields(Fault)}
    for name in rest:
        if name not in known:
            raise RackUseError(f"a fault has no {name!r}: there are {', '.join(sorted(known))}; nothing was injected")
    rack.inject(instrument, Fault(kind=fault_kind(kind), **rest))


ACTIONS: Mapping[str, Callable[..., Any]] = {
    "describe": _describe,
    "received": _received,
    "electrodes": _electrodes,
    "inject": _inject,
    "clear": Rack.clear,
    "front_panel": Rack.front_panel,
    "power_off": Rack.power_off,
    "power_on": Rack.power_on,
    "power_cycle": Rack.power_cycle,
    "set_pressure": Rack.set_pressure,
    "load": Rack.load_ion,
    "lose": Rack.lose_ion,
    "ion": _ion_state,
    "spectrum": Rack.spectrum,
}


class ControlServer(socketserver.ThreadingTCPServer):
    """Serves `ACTIONS` and ``quit``, which sets ``quitting``."""

    allow_reuse_address = True
    daemon_threads = True

    def __init__(self, rack: Rack, port: int, quitting: threading.Event) -> None:
        super().__init__((HOST, port), _Conversation)
        self.rack = rack
        self.quitting = quitting
        self.port: int = self.server_address[1]
        threading.Thread(target=self.serve_forever, args=(0.05,), name="control", daemon=True).start()

    def answer(self, line: bytes) -> dict[str, Any]:
        try:
            return {"ok": True, "result": self._do(line)}
        except (RackError, ValueError, TypeError) as error:  # the last two: a value of the wrong kind in the request
            return {"ok": False, "error": str(error)}

    def _do(self, line: bytes) -> Any:
        request = json.loads(line)
        if not isinstance(request, dict) or "do" not in request:
            raise RackUseError('expected an object with "do"; nothing was done')
        name = request.pop("do")
        if name == "quit":
            self.quitting.set()
            return None
        if name not in ACTIONS:
            raise RackUseError(f"cannot do {name!r}: there are {', '.join(ACTIONS)} and quit; nothing was done")
        action = ACTIONS[name]
        try:
            inspect.signature(action).bind(self.rack, **request)
        except TypeError as error:
            raise RackUseError(f"{name}: {error}; nothing was done") from None
        return action(self.rack, **request)


class _Conversation(socketserver.StreamRequestHandler):
    server: ControlServer
    disable_nagle_algorithm = True

    def handle(self) -> None:
        try:
            for line in self.rfile:
                self.wfile.write(json.dumps(self.server.answer(line)).encode() + b"\n")
        except OSError:
            return  # the other side has gone; nothing of it is needed


def ask(port: int, do: str, *, timeout_s: float = 10.0, **arguments: Any) -> Any:
    """One request to the control port of a running rack; its result, or `RackUseError` with what it said."""
    with socket.create_connection((HOST, port), timeout=timeout_s) as sock, sock.makefile("rwb") as file:
        file.write(json.dumps({"do": do, **arguments}).encode() + b"\n")
        file.flush()
        answer = json.loads(file.readline())
    if not answer["ok"]:
        raise RackUseError(answer["error"])
    return answer["result"]
