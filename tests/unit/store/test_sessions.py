"""The schema is what the models say, on each database, however often it is migrated."""

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Engine, event, inspect, select

from service.errors import Unavailable
from service.store.sessions import Sessions, is_migrated, migrate, open_engine
from service.store.tables import Base, Holding


@contextmanager
def statements(engine: Engine) -> Iterator[list[str]]:
    """Collect the statements that reach a database."""
    said: list[str] = []

    def note(_connection: Any, _cursor: Any, statement: str, *_rest: Any) -> None:
        said.append(statement.strip().split()[0].upper())

    event.listen(engine, "before_cursor_execute", note)
    yield said
    event.remove(engine, "before_cursor_execute", note)


def test_the_migrations_make_what_the_models_say(sessions: Sessions) -> None:
    with sessions.engine.connect() as connection:
        context = MigrationContext.configure(
            connection, opts={"compare_type": True, "compare_server_default": True}
        )
        assert compare_metadata(context, Base.metadata) == []
        tables = set(inspect(connection).get_table_names())
    assert tables == {"alembic_version", *Base.metadata.tables}


def test_a_difference_between_models_and_schema_is_found(sessions: Sessions) -> None:
    with sessions.engine.begin() as connection:
        connection.exec_driver_sql("ALTER TABLE holding ADD COLUMN stray INTEGER")
    with sessions.engine.connect() as connection:
        (found,) = compare_metadata(MigrationContext.configure(connection), Base.metadata)
    assert found[0] == "remove_column"


def test_migrating_again_changes_nothing(sessions: Sessions, tmp_path: Path) -> None:
    with sessions.writing() as session:
        session.add(Holding(ref="Quillmere Growers"))
    assert is_migrated(sessions.engine)
    with statements(sessions.engine) as said:
        migrate(sessions.engine, lock_folder=tmp_path)
    assert set(said) <= {"BEGIN", "SELECT", "PRAGMA"}
    with sessions.reading() as session:
        assert session.scalars(select(Holding.ref)).all() == ["Quillmere Growers"]


def test_several_that_migrate_an_empty_database_at_once_make_one_schema(tmp_path: Path) -> None:
    """As a service and a command beside it do on their very first start."""
    url = f"sqlite:///{tmp_path / 'app.sqlite'}"
    together = threading.Barrier(4)
    ended: list[bool] = []

    def start() -> None:
        engine = open_engine(url)
        together.wait(timeout=30)
        migrate(engine, lock_folder=tmp_path)
        ended.append(is_migrated(engine))
        engine.dispose()

    threads = [threading.Thread(target=start) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=60)
    assert ended == [True] * 4


def test_a_migration_that_is_cut_short_leaves_nothing_behind(tmp_path: Path) -> None:
    engine = open_engine(f"sqlite:///{tmp_path / 'app.sqlite'}")
    made = 0

    def fail_in_the_midst(*_: Any) -> None:
        nonlocal made
        made += 1
        if made == 20:
            raise InterruptedError

    event.listen(engine, "before_cursor_execute", fail_in_the_midst)
    with pytest.raises(InterruptedError):
        migrate(engine, lock_folder=tmp_path)
    event.remove(engine, "before_cursor_execute", fail_in_the_midst)
    assert inspect(engine).get_table_names() == []
    migrate(engine, lock_folder=tmp_path)
    assert is_migrated(engine)
    engine.dispose()


def test_a_writing_session_lands_whole_or_not_at_all(sessions: Sessions) -> None:
    def add_two() -> None:
        with sessions.writing() as session:
            session.add(Holding(ref="one"))
            session.flush()
            raise InterruptedError

    with pytest.raises(InterruptedError):
        add_two()
    with sessions.reading() as session:
        session.add(Holding(ref="two"))
        session.flush()
    with sessions.reading() as session:
        assert session.scalars(select(Holding.ref)).all() == []


def test_a_database_that_cannot_be_reached_is_unavailable(tmp_path: Path) -> None:
    engine = open_engine("postgresql+psycopg://127.0.0.1:1/none")
    with pytest.raises(Unavailable, match="can't be reached"):
        migrate(engine, lock_folder=tmp_path)
    engine.dispose()
