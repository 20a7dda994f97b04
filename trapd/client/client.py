"""`Client`: one method for each thing that a daemon can be asked or told to do."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from urllib.parse import quote

from trapd.client.following import Json, JsonEntry, Progress
from trapd.client.questions import Questions, Time, given, rfc3339
from trapd.errors import BadRequest
from trapd.setpoint import Values

_LONGEST_WHY = 500


class Client(Questions):
    """Talks to one daemon: asks (`Questions`) and acts. Not to be shared between threads. Answers are the JSON of the
    HTTP interface.

    Every method may raise `DaemonUnreachable` and what the daemon answers: `GuardRefused` with the verdict in
    ``details["verdict"]``, `NotPermitted`, `Conflict`, ...: see `trapd.errors`.
    """

    # What moves the trap. ``wait``: until it is done: the entry that says so; else the answer that it has begun.
    # ``interrupt``: stop what runs for somebody else, and go over somebody else's claim.

    def set(
        self,
        values: Values,
        why: str,
        *,
        interrupt: bool = False,
        wait: bool = True,
        progress: Progress | None = None,
    ) -> Json:
        body = {"values": dict(values), "why": why, "interrupt": interrupt}
        return self._move("/v1/set", body, wait, progress)

    def go(
        self, point: str, why: str, *, interrupt: bool = False, wait: bool = True, progress: Progress | None = None
    ) -> Json:
        return self._move("/v1/go", {"point": point, "why": why, "interrupt": interrupt}, wait, progress)

    def back(self, why: str, *, interrupt: bool = False, wait: bool = True, progress: Progress | None = None) -> Json:
        """To the state before the last completed move."""
        return self._move("/v1/back", {"why": why, "interrupt": interrupt}, wait, progress)

    def on(
        self,
        point: str | None = None,
        *,
        why: str,
        interrupt: bool = False,
        wait: bool = True,
        progress: Progress | None = None,
    ) -> Json:
        """Only from an empty trap. ``point``: the first of the trap file when None."""
        body = given({"point": point, "why": why, "interrupt": interrupt})
        return self._move("/v1/on", body, wait, progress)

    def empty(
        self,
        point: str | None = None,
        *,
        why: str,
        stay_off: bool = False,
        interrupt: bool = False,
        wait: bool = True,
        progress: Progress | None = None,
    ) -> Json:
        """Let go of every ion, then to ``point``, or back to where it was, or not (``stay_off``)."""
        body = given({"point": point, "why": why, "stay_off": stay_off, "interrupt": interrupt})
        return self._move("/v1/empty", body, wait, progress)

    def ions(
        self,
        presence: str,
        ions: Mapping[str, int] | None = None,
        incoming: Sequence[str] = (),
        *,
        why: str,
        interrupt: bool = False,
    ) -> Json:
        """Say what is in the trap: "held", "unknown", "none" or "loading"."""
        said = {"presence": presence, "ions": dict(ions or {}), "incoming": list(incoming)}
        return self._post("/v1/ions", {**said, "why": why, "interrupt": interrupt}, within_s=None)

    def off(self, why: str = "") -> Json:
        """Everything off, now. See "off" in the answer: False when an instrument did not confirm."""
        return self._post("/v1/off", {"why": _printable(why)})

    def stop(self, why: str = "") -> Json:
        """Stop the move or the scan in progress where it is; the outputs hold, the tickle goes off."""
        return self._post("/v1/stop", {"why": _printable(why)})

    # Scans: secular frequencies, measured

    def scan(
        self,
        scan: str,
        *,
        why: str = "",
        interrupt: bool = False,
        wait: bool = True,
        progress: Progress | None = None,
    ) -> Json:
        """Measure now; its finding, which may be that there is no resonance (see its "state").

        Without ``wait`` the answer that it has begun, with its plan. ``progress`` sees each point and estimate. Raises
        what ended it before its time: `Superseded` (a stop, a person's move, off), `NotConfirmed`, ...
        """
        body = {"scan": scan, "why": why, "interrupt": interrupt}
        begun = self._post("/v1/scans", body, within_s=None)
        return self.wait_finding(begun["entry"], progress) if wait else begun

    def wait_finding(self, request: int, progress: Progress | None = None) -> Json:
        """The finding of a scan under way, which is named by the entry of its request; "seq" is its own entry."""
        findings: list[JsonEntry] = []

        def note(entry: JsonEntry) -> None:
            if entry["kind"] == "finding" and entry["data"]["request"] == request:
                findings.append(entry)
            if progress is not None:
                progress(entry)

        self.wait(request, note)
        return {"seq": findings[-1]["seq"], **findings[-1]["data"]}

    # Who has the trap, and whether the schedule rests

    def claim(self, why: str, until: Time | None = None, *, interrupt: bool = False) -> Json:
        """Keep the trap for yourself: others need ``interrupt``, the schedule waits. ``until`` None: no end."""
        return self._post("/v1/claim", given({"why": why, "until": rfc3339(until), "interrupt": interrupt or None}))

    def clear(self, interlock: str, why: str) -> Json:
        """Clear an interlock that has tripped; `Conflict` while its gauge still reads beyond the level."""
        return self._post("/v1/clear", {"interlock": interlock, "why": why})

    def release(self, why: str = "", *, interrupt: bool = False) -> Json:
        """End a claim; somebody else's only with ``interrupt``."""
        return self._post("/v1/release", {"why": why, "interrupt": interrupt})

    def pause(self, until: Time, why: str) -> Json:
        """Nothing of the schedule runs before ``until``."""
        return self._post("/v1/pause", given({"until": rfc3339(until), "why": why}))

    def resume(self, why: str = "") -> Json:
        """End a pause."""
        return self._post("/v1/resume", {"why": why})

    # Tokens

    def tokens(self) -> list[Json]:
        found: list[Json] = self._get("/v1/tokens")["tokens"]
        return found

    def new_token(self, name: str, role: str) -> Json:
        """``role``: "read", "operate" or "administer". The answer's "token" is shown this once."""
        return self._post("/v1/tokens", {"name": name, "role": role})

    def revoke_token(self, name: str) -> Json:
        if not name:
            raise BadRequest("name the token to revoke; nothing was revoked")
        found: Json = self._connection.ask("DELETE", f"/v1/tokens/{quote(name, safe='')}")
        return found

    def _move(self, path: str, body: Json, wait: bool, progress: Progress | None) -> Json:
        accepted = self._post(path, body, within_s=None)  # it waits its turn behind the move in progress
        return self.wait(accepted["entry"], progress) if wait else accepted


def _printable(why: str) -> str:
    """`off` and `stop` are not refused for how their reason is written."""
    return "".join(c if c.isprintable() else " " for c in why)[:_LONGEST_WHY]
