"""``[instruments.NAME]``, ``[guard]``, ``[loading]``, ``[record]`` and ``[server]``."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from pathlib import Path

from trapd.config.electrodes import NAME, WANTED_NAME
from trapd.config.records import (
    ElectrodeSection,
    GuardSection,
    InstrumentSection,
    LoadingSection,
    ServerSection,
    TrapSection,
)
from trapd.config.table import Mistakes, Table

_LISTEN = re.compile(r"(?:\[(?P<v6>[0-9A-Fa-f:.]+)\]|(?P<host>[A-Za-z0-9.-]+)):(?P<port>[0-9]{1,5})")
_WHOLE = 0  # in place of a channel, which is 1 or more
_SOCKET_PATH_BYTES = 107  # sun_path of unix(7) less its closing zero


def read_instruments(table: Table, source: Path, mistakes: Mistakes) -> dict[str, InstrumentSection]:
    """``table`` is ``[instruments]`` itself, its keys the instruments' names."""
    instruments: dict[str, InstrumentSection] = {}
    for name in table.names():
        path = f"instruments.{name}"
        if not NAME.fullmatch(name):
            mistakes.note(path, f": expected {WANTED_NAME}")
            continue
        section = table.table(name, "instruments.NAME", f"a table [{path}]")
        instrument = InstrumentSection(
            name=name,
            driver=section.text("driver", 'the name of a driver such as "scpi-dc-supply"'),
            resource=section.text("resource", 'an address such as "TCPIP::127.0.0.1::5025::SOCKET"'),
            profile=_profile(section, source),
            timeout_s=section.quantity("timeout", "time", default=1.0, above=0.0),
        )
        for other in instruments.values():
            if instrument.resource and other.resource == instrument.resource:
                section.wrong("resource", f"an address of its own (instruments.{other.name} has this one)")
        instruments[name] = instrument
    return instruments


def _profile(table: Table, source: Path) -> str:
    """The name of a shipped profile, or a file's path: beside the trap file unless absolute."""
    profile = table.text("profile", 'the name of a dialect profile such as "plain"', default="plain")
    return str(source.parent / profile) if profile.endswith(".toml") else profile


def check_wiring(
    owners: Mapping[str, str | None],
    electrodes: Iterable[ElectrodeSection],
    instruments: Iterable[str],
    mistakes: Mistakes,
    gauges: Iterable[str] = (),
) -> None:
    """Notes instruments that are missing, idle or claimed twice. Only for a file that has instruments at all.

    ``owners``: by section, the instrument that it has to itself.
    """
    known, before = set(instruments), len(mistakes)
    users: dict[tuple[str, int | None], str] = {}
    for section, instrument in owners.items():
        _claim(section, instrument, _WHOLE, known, users, mistakes)
    for electrode in electrodes:
        _claim(f"electrodes.{electrode.name}", electrode.instrument, electrode.channel, known, users, mistakes)
    for gauge in gauges:  # one gauge may have several interlocks
        _claim(f"interlocks of {gauge}", gauge, _WHOLE, known, users, mistakes)
    used = {name for name, _ in users}
    for name in instruments:
        if name not in used and len(mistakes) == before:  # after a wrong name it would be told twice
            users_are = "neither the drive, an electrode, [tickle], [counter] nor an interlock"
            mistakes.note(f"instruments.{name}", f": {users_are} uses it; expected one that does")


def _claim(
    where: str,
    instrument: str | None,
    channel: int | None,
    known: set[str],
    users: dict[tuple[str, int | None], str],
    mistakes: Mistakes,
) -> None:
    if instrument is None:
        mistakes.note(f"{where}.instrument", " is missing; expected the name of one of [instruments]")
    elif instrument and instrument not in known:
        names = ", ".join(sorted(known)) or "none"
        mistakes.note(f"{where}.instrument", f' = "{instrument}"; expected one of [instruments]: {names}')
    elif (instrument, _WHOLE) in users:
        mistakes.note(f"{where}.instrument", f' = "{instrument}"; this one is the {users[instrument, _WHOLE]}\'s')
    elif (instrument, channel) in users:
        taken = f"; {users[instrument, channel]} has channel {channel} of this instrument already"
        mistakes.note(f"{where}.channel", f" = {channel}{taken}")
    else:
        users[instrument, channel] = where


def read_guard(table: Table, trap: TrapSection | None) -> GuardSection:
    margin = table.quantity("margin", "share", above=0.0)
    if margin > 0.5:
        table.wrong("margin", "more than 0 and at most 50 %")
    if trap and trap.geometry == "tensor" and trap.escape_m is None:
        table.refuse(("min_depth",), "there is no depth without [trap] escape, how far from the centre an ion is lost")
    return GuardSection(
        margin=margin,
        min_secular_frequency_hz=table.optional_quantity("min_secular_frequency", "frequency", above=0.0),
        min_depth_ev=table.optional_quantity("min_depth", "energy", above=0.0, unit="eV"),
    )


def read_loading(table: Table) -> LoadingSection:
    return LoadingSection(expires_s=table.quantity("expires", "time", default=LoadingSection().expires_s, above=0.0))


def read_record_file(table: Table, source: Path) -> Path:
    """Beside the trap file unless absolute."""
    name = table.text("file", 'a file name such as "north-bench.sqlite"', default=f"{source.stem}.sqlite")
    file = source.parent / name
    if file == source:
        table.wrong("file", "another file than this one")
    return file


def read_server(table: Table, source: Path) -> ServerSection:
    listen = table.text("listen", 'host:port such as "127.0.0.1:8417"', default="127.0.0.1:8417")
    match = _LISTEN.fullmatch(listen)
    if listen and (match is None or int(match["port"]) > 65535):
        table.wrong("listen", 'host:port such as "127.0.0.1:8417" (port 0: any free one)')
    name = table.text("socket", 'a file name such as "trapd.sock"', default="")
    socket = source.parent / name if name else None
    if len(str(socket or "").encode()) > _SOCKET_PATH_BYTES:
        table.wrong("socket", f"a path of at most {_SOCKET_PATH_BYTES} bytes, the folder included")
    if match is None:
        return ServerSection(socket=socket)
    return ServerSection(host=match["v6"] or match["host"], port=int(match["port"]), socket=socket)
