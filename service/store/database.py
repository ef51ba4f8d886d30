"""The database of scans and jobs: engine, transactions, schema."""

from __future__ import annotations

import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any, Final

import sqlalchemy as sa
from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory

_MIGRATIONS = Path(__file__).parent / "migrations"
#: How long a process that nobody waits for waits for its turn to write.
_PATIENCE_SECONDS: Final = 30.0
#: The first SQLite that knows fractions of a second, which the queue engine asks for on Python 3.12 and later.
_SUBSECOND_SQLITE: Final = (3, 42)


def make_engine(url: str, *, patience_seconds: float = _PATIENCE_SECONDS) -> sa.Engine:
    """Make an engine; with SQLite one that loses nothing and waits for its turn to write.

    Write-ahead log, full synchronisation, patience for a lock, and transactions that take the write lock when they
    begin: one that reads first and writes later could not get it any more.

    Parameters
    ----------
    url : str
        Of SQLAlchemy.
    patience_seconds : float
        How long a transaction waits for a lock that another process holds.
    """
    # Threads bound the number of connections: those that wait to write must not keep others from reading.
    engine = sa.create_engine(url, max_overflow=-1)
    if engine.dialect.name == "sqlite":
        sa.event.listen(engine, "connect", partial(_prepare_connection, patience_seconds))
        sa.event.listen(engine, "begin", _begin)
    return engine


def _prepare_connection(patience_seconds: float, connection: Any, record: object) -> None:
    if isinstance(connection, sqlite3.Connection):
        # The driver would begin transactions on its own, and too late.
        connection.isolation_level = None
        if sqlite3.sqlite_version_info < _SUBSECOND_SQLITE:
            connection.create_function("unixepoch", 1, _unixepoch)
    cursor = connection.cursor()
    cursor.execute(f"PRAGMA busy_timeout={round(1000 * patience_seconds)}")
    cursor.execute("PRAGMA journal_mode=WAL")
    cursor.execute("PRAGMA synchronous=FULL")
    cursor.execute("PRAGMA foreign_keys=ON")
    cursor.close()


def _unixepoch(modifier: str) -> float | None:
    """What newer versions of SQLite answer to `unixepoch('subsec')`; the older ones answer NULL."""
    return round(time.time(), 3) if modifier == "subsec" else None


def _begin(connection: sa.Connection) -> None:
    is_read = connection.get_execution_options().get("fallow_read", False)
    connection.exec_driver_sql("BEGIN" if is_read else "BEGIN IMMEDIATE")


class Database:
    """Transactions on the metadata.

    Parameters
    ----------
    url : str
        Of SQLAlchemy.
    patience_seconds : float
        How long a transaction waits for its turn to write.
    """

    def __init__(self, url: str, *, patience_seconds: float = _PATIENCE_SECONDS) -> None:
        self.engine = make_engine(url, patience_seconds=patience_seconds)
        self._reading = self.engine.execution_options(fallow_read=True)

    @contextmanager
    def read(self) -> Iterator[sa.Connection]:
        """One consistent view; waits for no writer."""
        with self._reading.connect() as connection, connection.begin():
            yield connection

    @contextmanager
    def write(self) -> Iterator[sa.Connection]:
        """One transaction that may write; committed at the end, undone on an exception."""
        with self.engine.begin() as connection:
            yield connection

    def close(self) -> None:
        """Close every connection."""
        self.engine.dispose()

    def migrate(self) -> None:
        """Bring the schema to the newest revision; call it from one process at a time."""
        config = _alembic()
        with self.engine.connect() as connection:
            config.attributes["connection"] = connection
            command.upgrade(config, "head")

    def is_current(self) -> bool:
        """Whether the schema is the one that this version works with."""
        head = ScriptDirectory.from_config(_alembic()).get_current_head()
        with self.read() as connection:
            return MigrationContext.configure(connection).get_current_revision() == head


def _alembic() -> Config:
    config = Config()
    config.set_main_option("script_location", str(_MIGRATIONS).replace("%", "%%"))
    return config
