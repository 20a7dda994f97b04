"""A trap file to one `Config`. Each mistake is one line of one `ConfigError`, naming file, key, found and expected."""

from __future__ import annotations

import tomllib
from pathlib import Path

from trapd.config.catalogue import read_species
from trapd.config.drive import read_drive
from trapd.config.electrodes import read_electrodes
from trapd.config.geometry import read_trap
from trapd.config.interlocks import read_interlocks
from trapd.config.points import read_points, sweeps_of
from trapd.config.records import Config, TrapSection
from trapd.config.scans import read_counter, read_scans, read_schedule, read_tickle
from trapd.config.service import (
    check_wiring,
    read_guard,
    read_instruments,
    read_loading,
    read_record_file,
    read_server,
)
from trapd.config.table import Mistakes, Table
from trapd.errors import ConfigError

_LARGEST_BYTES = 1_000_000


def read(path: str | Path) -> Config:
    """The trap file at ``path``; raises `ConfigError`, whose ``details["mistakes"]`` lists every one found."""
    file = Path(path)
    text = _text_of(file)
    return parse(text, file)


def parse(text: str, file: Path) -> Config:
    """As `read`, from the file's text; ``file`` names it in messages and anchors relative paths."""
    mistakes = Mistakes(file)
    root = Table(_toml(text, file), "", mistakes)
    source = file.absolute()

    trap = read_trap(root.table("trap", "trap", "a table [trap]"))
    geometry = trap.geometry if trap else None
    species = read_species(root)
    drive = read_drive(root.table("drive", "drive", "a table [drive]"), geometry)
    electrodes = read_electrodes(root.optional_table("electrodes"), geometry, mistakes)
    instruments = read_instruments(root.optional_table("instruments"), source, mistakes)
    tickle, counter, interlocks = read_tickle(root), read_counter(root), read_interlocks(root)
    if "instruments" in root and "drive" in root:
        alone = {"drive": drive, "tickle": tickle, "counter": counter}
        owners = {section: owner.instrument for section, owner in alone.items() if owner}
        check_wiring(
            owners, electrodes.values(), instruments, mistakes, {one.instrument for one in interlocks.values()}
        )
    scans = read_scans(root, species, tickle)
    config = Config(
        source=source,
        text=text,
        trap=trap or TrapSection(name="", geometry="tensor"),
        species=species,
        drive=drive,
        electrodes=electrodes,
        instruments=instruments,
        guard=read_guard(root.table("guard", "guard", "a table [guard]"), trap),
        points=read_points(root.optional_table("points"), sweeps_of(drive, electrodes), mistakes),
        record_file=read_record_file(root.optional_table("record"), source),
        server=read_server(root.optional_table("server"), source),
        loading=read_loading(root.optional_table("loading")),
        tickle=tickle,
        counter=counter,
        scans=scans,
        schedule=read_schedule(root, scans),
        interlocks=interlocks,
    )
    mistakes.raise_if_any()
    return config


def _text_of(file: Path) -> str:
    try:
        if not file.is_file():
            found = "is a folder" if file.is_dir() else "is no ordinary file" if file.exists() else "does not exist"
            raise ConfigError(f"{file}: {found}; expected a trap file", {"file": str(file)})
        with file.open("rb") as stream:
            content = stream.read(_LARGEST_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) else str(error)
        raise ConfigError(f"{file}: cannot be read ({reason}); expected a trap file", {"file": str(file)}) from error
    if len(content) > _LARGEST_BYTES:
        raise ConfigError(f"{file}: more than {_LARGEST_BYTES} bytes; expected a trap file", {"file": str(file)})
    try:
        return content.decode("utf-8")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        message = f"{file}: byte {content[error.start]:#04x} in line {line} is not UTF-8; expected UTF-8 text"
        raise ConfigError(message, {"file": str(file)}) from error


def _toml(text: str, file: Path) -> dict[str, object]:
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # also integers of thousands of digits, and nesting as deep
        reason = str(error) or "nested too deep"
        raise ConfigError(f"{file}: not TOML: {reason}; expected a trap file", {"file": str(file)}) from error
