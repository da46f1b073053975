"""The database: engine, sessions, migrations."""

import hashlib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import fasteners
from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, Engine, create_engine, event, make_url, text
from sqlalchemy.exc import OperationalError
from sqlalchemy.orm import Session, sessionmaker

from service.errors import Unavailable

_HERE = Path(__file__).resolve().parent


class Sessions:
    """Opens sessions on one database.

    `reading` sessions see one consistent state. `writing` sessions commit at the end of their
    block or not at all; on SQLite they take the write lock at once, so that two of them never
    fail half-way on each other.
    """

    def __init__(self, engine: Engine) -> None:
        self.engine = engine
        self._read = sessionmaker(engine, expire_on_commit=False, autoflush=False)
        writing = engine.execution_options(furrowlight_writes=True)
        self._write = sessionmaker(writing, expire_on_commit=False)

    @contextmanager
    def reading(self) -> Iterator[Session]:
        """Open a session that is rolled back at the end."""
        with self._read() as session:
            yield session

    @contextmanager
    def writing(self) -> Iterator[Session]:
        """Open a session that commits at the end, or rolls back if an error leaves the block."""
        with self._write.begin() as session:
            yield session

    @contextmanager
    def trying(self) -> Iterator[Session]:
        """Open a session that works as a writing one does, and is rolled back at the end."""
        with self._write() as session:
            yield session


def open_engine(url: str) -> Engine:
    """Return an engine with this service's rules: on SQLite WAL, full sync, real transactions."""
    if make_url(url).get_backend_name() != "sqlite":
        return create_engine(url, pool_pre_ping=True)
    engine = create_engine(url, connect_args={"timeout": 60})
    event.listen(engine, "connect", _prepare_sqlite)
    event.listen(engine, "begin", _begin_sqlite)
    return engine


def _prepare_sqlite(connection: Any, _record: object) -> None:
    # The driver would start transactions late and commit before DDL; `_begin_sqlite` does it.
    connection.isolation_level = None
    cursor = connection.cursor()
    for pragma in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON"):
        cursor.execute(f"PRAGMA {pragma}")
    cursor.close()


def _begin_sqlite(connection: Connection) -> None:
    writes = connection.get_execution_options().get("furrowlight_writes", False)
    connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")


def serialise(session: Session, what: str) -> None:
    """Let one transaction at a time decide about `what`; on SQLite a writer is alone anyway."""
    if session.get_bind().dialect.name == "postgresql":
        session.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": _lock_key(what)})


def _lock_key(what: str) -> int:
    return int.from_bytes(hashlib.sha256(what.encode()).digest()[:8], "big", signed=True)


def hold_database(engine: Engine, what: str) -> Callable[[], None] | None:
    """Hold a database for one purpose while this process lives; return what lets go of it.

    Returns None if another process holds it. On SQLite the data folder's lock does this.
    """
    if engine.dialect.name != "postgresql":
        return lambda: None
    connection = engine.connect().execution_options(isolation_level="AUTOCOMMIT")

    def release() -> None:
        # Closing alone would give the connection, and with it the lock, back to the pool.
        connection.invalidate()
        connection.close()

    held = text("SELECT pg_try_advisory_lock(:key)")
    if connection.scalar(held, {"key": _lock_key(f"hold {what}")}):
        return release
    release()
    return None


def migrations_folder() -> Path:
    """Return the folder of migrations: inside an installed copy, or beside it in a checkout."""
    shipped = _HERE / "migrations"
    return shipped if shipped.is_dir() else _HERE.parent.parent / "migrations"


def _alembic() -> Config:
    config = Config()
    config.set_main_option("script_location", str(migrations_folder()).replace("%", "%%"))
    config.set_main_option("path_separator", "os")
    return config


def migrate(engine: Engine, *, lock_folder: Path) -> None:
    """Bring the schema up to date, one process at a time.

    Each migration and the note that it ran commit together, so a crash leaves the schema at
    one version or the next. A start that finds nothing to do writes nothing.

    Raises
    ------
    Unavailable
        The database can't be reached.
    """
    with fasteners.InterProcessLock(lock_folder / "migrate.lock"):
        try:
            if is_migrated(engine):
                return
        except OperationalError as error:
            raise Unavailable(
                "not-ready", "The database can't be reached. Is it running, and is its URL right?"
            ) from error
        with engine.execution_options(furrowlight_writes=True).begin() as connection:
            if connection.dialect.name == "postgresql":
                connection.execute(
                    text("SELECT pg_advisory_xact_lock(:key)"), {"key": _lock_key("migrate")}
                )
            config = _alembic()
            config.attributes["connection"] = connection
            command.upgrade(config, "head")


def is_migrated(engine: Engine) -> bool:
    """Whether the schema is the one that this release works with."""
    head = ScriptDirectory.from_config(_alembic()).get_current_head()
    with engine.connect() as connection:
        return MigrationContext.configure(connection).get_current_revision() == head
