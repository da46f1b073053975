"""Killed anywhere in a large import, it ends where an undisturbed one ends: all parcels, once.

As in `test_crashes.py`, a child process runs the real command line and dies at a named point
(`crashing.py`); then the real service starts on what is left, and nobody sends the file again.
"""

import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest
from sqlalchemy import func, select

from service.clock import now
from service.jobs.parcel_files import FEATURES_AT_ONCE
from service.jobs.upkeep import ORPHAN_SECONDS
from service.store.job_tables import Job
from service.store.tables import Base, Boundary, CropSeason, Parcel
from tests.conftest import fresh_settings
from tests.faults.test_crashes import Deployment
from tests.hooks import comes_true
from tests.outline_files import field_at, geopackage
from tests.serving import Service

PARCELS = 12_000
WAIT_SECONDS = 60
WAITS = 5


@pytest.fixture(scope="module")
def file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    drawn = (
        field_at(f"P{n}", col=12 * (n % 120), row=12 * (n // 120), grown="maize")
        for n in range(PARCELS)
    )
    return geopackage(tmp_path_factory.mktemp("sent") / "a.gpkg", *drawn)


@pytest.fixture(scope="module")
def small_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A file of a few more parcels than a request takes."""
    drawn = (
        field_at(f"P{n}", col=12 * (n % 120), row=12 * (n // 120))
        for n in range(FEATURES_AT_ONCE + 1)
    )
    return geopackage(tmp_path_factory.mktemp("small") / "a.gpkg", *drawn)


@pytest.fixture(params=["sqlite"])
def deployment(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Deployment]:
    made = Deployment(fresh_settings(request, request.param, tmp_path / "data"), tmp_path)
    made.add_key()
    yield made
    made.sessions.engine.dispose()


def send(service: Service, file: Path) -> httpx.Response:
    return service.call(
        "POST",
        "/v1/parcels/import",
        data={"ref_field": "ref", "crop_field": "grown"},
        files={"file": file.read_bytes()},
    )


def ask_to_the_end(service: Service, address: str) -> None:
    """Ask for the job until the service dies of it."""
    while True:
        job = service.get(address, headers={"Prefer": f"wait={WAIT_SECONDS}"})
        assert job["state"] in ("queued", "running"), job


def crash(deployment: Deployment, file: Path, point: str) -> None:
    with deployment.started(point) as (child, service):
        try:
            answer = send(service, file)
        except httpx.TransportError:
            assert child.killed(), child.log.read_text("utf-8")
            return
        assert answer.status_code == 202, answer.text
        with pytest.raises(httpx.TransportError):
            ask_to_the_end(service, answer.headers["Location"])
        assert child.killed(), child.log.read_text("utf-8")


def counts(deployment: Deployment) -> dict[str, int]:
    tables: tuple[type[Base], ...] = (Parcel, Boundary, CropSeason, Job)
    with deployment.sessions.reading() as session:
        return {
            table.__tablename__: session.scalar(select(func.count()).select_from(table)) or 0
            for table in tables
        }


def the_job(deployment: Deployment) -> tuple[str, str, dict[str, Any] | None]:
    with deployment.sessions.reading() as session:
        row = session.scalars(select(Job)).one()
        return row.public_id, row.state, row.result


NOTHING = {"parcel": 0, "boundary": 0, "crop_season": 0, "job": 1}
ALL = {"parcel": PARCELS, "boundary": PARCELS, "crop_season": PARCELS, "job": 1}


def ended(service: Service, address: str) -> Any:
    """Return a job once it has ended; a busy machine takes more than one wait."""
    for _ in range(WAITS):
        job = service.get(address, headers={"Prefer": f"wait={WAIT_SECONDS}"})
        if job["state"] not in ("queued", "running"):
            break
    return job


@pytest.mark.parametrize(
    ("deployment", "point"),
    [
        ("sqlite", "before-import"),
        ("sqlite", "half-a-file"),
        ("sqlite", "parcels-not-committed"),
        ("sqlite", "import-not-noted"),
        ("postgresql", "half-a-file"),
        ("postgresql", "parcels-not-committed"),
    ],
    indirect=["deployment"],
)
def test_killed_in_an_import_of_12_000_parcels_it_has_them_all_once_after_the_next_start(
    deployment: Deployment, file: Path, point: str
) -> None:
    crash(deployment, file, point)
    job_id, state, _ = the_job(deployment)
    is_committed = point == "import-not-noted"
    assert counts(deployment) == (ALL if is_committed else NOTHING)
    assert state == {"before-import": "queued", "import-not-noted": "done"}.get(point, "running")
    with deployment.started() as (child, service):
        job = ended(service, f"/v1/jobs/{job_id}")
        assert (job["state"], job["progress"]) == ("done", 1.0), child.log.read_text("utf-8")
        result = job["result"]
        told = [result[name] for name in ("created", "updated", "unchanged", "rejected")]
        assert told == [PARCELS, 0, 0, 0]
        assert counts(deployment) == ALL
        # Sent again it changes nothing.
        again = ended(service, send(service, file).headers["Location"])
        assert again["result"]["unchanged"] == PARCELS, again
        assert counts(deployment) == {**ALL, "job": 2}


def test_a_file_that_kills_the_service_three_times_fails_and_nothing_of_it_lands(
    deployment: Deployment, small_file: Path
) -> None:
    crash(deployment, small_file, "parcels-not-committed")
    job_id, _, _ = the_job(deployment)
    for _ in range(2):
        with deployment.started("parcels-not-committed") as (child, _):
            assert child.killed(), child.log.read_text("utf-8")
    with deployment.started("never") as (child, service):
        job = ended(service, f"/v1/jobs/{job_id}")
        assert job["state"] == "failed", job
        assert job["failure"]["type"] == "/problems/internal-error"
        assert "ended three times" in job["failure"]["detail"]
        assert counts(deployment) == NOTHING
        assert child.process.poll() is None


def test_the_file_of_a_promised_import_is_kept_however_old_and_goes_when_it_is_done(
    deployment: Deployment, file: Path
) -> None:
    crash(deployment, file, "before-import")
    (kept,) = deployment.kept()
    long_ago = now().timestamp() - ORPHAN_SECONDS - 60
    os.utime(kept, (long_ago, long_ago))
    # Tidying comes with the start, long before the import is through half of the file.
    with deployment.started("half-a-file") as (child, _):
        assert child.killed(), child.log.read_text("utf-8")
    assert kept.read_bytes() == file.read_bytes()
    job_id, _, _ = the_job(deployment)
    with deployment.started("never") as (_, service):
        job = ended(service, f"/v1/jobs/{job_id}")
        assert job["state"] == "done", job
        assert comes_true(lambda: not kept.exists())
