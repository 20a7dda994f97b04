"""Which schema a file has, and bringing it to ours. Alembic is imported only when something must be migrated."""

from __future__ import annotations

from pathlib import Path

from sqlalchemy import Connection

import trapd
from trapd.errors import ConfigError, RecordDamaged

SCHEMA = "0002"
"""The newest migration: what this trapd reads and writes."""

APPLICATION_ID = 1953653104
"""SQLite's application_id of a record: "trap" in ASCII."""


def schema_of(connection: Connection, path: Path) -> str | None:
    """The file's schema, None for an empty file. Raises `ConfigError` for a file that is no record of ours,
    `RecordDamaged` for one that does not say which schema it has."""
    application = connection.exec_driver_sql("PRAGMA application_id").scalar_one()
    tables = connection.exec_driver_sql("SELECT count(*) FROM sqlite_schema").scalar_one()
    if application == 0 and tables == 0:
        return None
    if application != APPLICATION_ID:
        raise ConfigError(
            f"{path} is a database of another program (application id {application}, expected {APPLICATION_ID}); "
            "nothing was changed"
        )
    schemas = connection.exec_driver_sql("SELECT version_num FROM alembic_version").scalars().all()
    if len(schemas) != 1:
        raise RecordDamaged(f"{path} names {len(schemas)} schemas, expected one; nothing was changed")
    schema = str(schemas[0])
    if schema > SCHEMA:
        raise ConfigError(
            f"{path} was written by a newer trapd (schema {schema}, this one knows {SCHEMA}); nothing was changed"
        )
    return schema


def demand_current(connection: Connection, path: Path) -> None:
    """Raise `ConfigError` unless the file has our schema. For readers, which never migrate."""
    schema = schema_of(connection, path)
    if schema is None:
        raise ConfigError(f"{path} is empty: no record was ever written there")
    if schema < SCHEMA:
        raise ConfigError(f"{path} has the older schema {schema}, expected {SCHEMA}: start the daemon on it once")


def migrate(connection: Connection, to: str = "head") -> None:
    """Bring the file to schema ``to`` in one transaction of ``connection``."""
    from alembic import command
    from alembic.config import Config

    configuration = Config()
    configuration.set_main_option("script_location", str(migrations()).replace("%", "%%"))
    configuration.attributes["connection"] = connection
    with connection.begin():
        command.upgrade(configuration, to)


def migrations() -> Path:
    """The folder of the migrations: inside the package when installed, beside it in a checkout."""
    package = Path(trapd.__file__).resolve().parent
    installed = package / "_migrations"
    return installed if installed.is_dir() else package.parent / "migrations"
