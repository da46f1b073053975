"""Killed at any point, the service ends where an undisturbed run ends.

A child process runs the real command line and dies at a named point (`crashing.py`). Then the
real service starts on what is left, and is asked as a scheduled job would ask.
"""

import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
from sqlalchemy import func, select

from service.clock import now
from service.jobs import ingest
from service.jobs.resources import Resources
from service.jobs.upkeep import ORPHAN_SECONDS, tidy
from service.settings import Settings
from service.spectral.indices import INDICES
from service.store.keys import add_key
from service.store.scenes import lock_scene
from service.store.sessions import Sessions, open_engine
from service.store.tables import Base, Latest, Layout, Observation, Scene, SceneFile, Write
from service.tiles.archive import Archive
from service.tiles.plans import Plans
from tests.conftest import fresh_settings
from tests.serving import ALL_SCOPES, SCENE, Service, serving, square, write_band

LAUNCHER = Path(__file__).with_name("crashing.py")
PARCELS = [
    square("A", col=2.3, row=3.6),
    square("B", col=20, row=20, size=7.5),
    square("C", col=35, row=-4, size=12),
    square("D", col=400, row=400),
]
"""Two within the tile, one half outside, one far from it."""
IN_FOOTPRINT = 3
BANDS = ("blue", "green", "red", "nir", "swir16")
WATCHED = ",".join(index.id for index in INDICES.values() if index.watched)
QUESTIONS: dict[str, dict[str, Any]] = {
    "indices": {"index": WATCHED, "stat": "mean,sd,min,p10,p50,p90,max,valid_share,pixels"},
    "bands": {"index": ",".join(BANDS), "stat": "mean,sd,valid_share,pixels"},
}
START_SECONDS = 60.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Child:
    """A service in a process of its own, its address once it answers, and its log."""

    process: subprocess.Popen[str]
    address: str
    log: Path

    def killed(self) -> bool:
        """Wait for its end; whether it was killed rather than ended."""
        return self.process.wait(timeout=START_SECONDS) == -signal.SIGKILL


@contextmanager
def started(settings: Settings, log: Path, *, point: str | None = None) -> Iterator[Child]:
    """Start the service, to die at a point or not; an address that never came is empty."""
    program = ["-m", "service.cli"] if point is None else [str(LAUNCHER), point]
    serve = ["serve", "--data", str(settings.data), "--port", "0"]
    with (
        log.open("wb") as log_file,
        subprocess.Popen(
            [sys.executable, *program, *serve],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=log_file,
            env={**os.environ, **environment(settings)},
            text=True,
        ) as process,
    ):
        watch = threading.Timer(START_SECONDS, process.kill)
        watch.start()
        try:
            assert process.stdout is not None
            address = process.stdout.readline().strip()
            watch.cancel()
            yield Child(process=process, address=address, log=log)
        finally:
            watch.cancel()
            process.kill()


def environment(settings: Settings) -> dict[str, str]:
    return {
        "FURROWLIGHT_DATABASE_URL": settings.database_url,
        "FURROWLIGHT_DISK_RESERVE_BYTES": "0",
        "FURROWLIGHT_QUEUE_POLLING_SECONDS": "0.02",
        "FURROWLIGHT_DRAIN_SECONDS": "0",
    }


class Deployment:
    """A data folder and its database, with or without a service at work on them."""

    def __init__(self, settings: Settings, folder: Path) -> None:
        self.settings = settings
        self.folder = folder
        self.files = scene_files(folder / "sent")
        self.sessions = Sessions(open_engine(settings.app_url))
        self.secret = ""
        self._starts = 0

    def add_key(self) -> None:
        with self.sessions.writing() as session:
            _, self.secret = add_key(
                session,
                label="test",
                scopes=ALL_SCOPES,
                holdings=None,
                expires_at=None,
                created_at=now(),
            )

    @contextmanager
    def started(self, point: str | None = None) -> Iterator[tuple[Child, Service]]:
        """Start the service and give what asks it."""
        self._starts += 1
        log = self.folder / f"log-{self._starts}.jsonl"
        with started(self.settings, log, point=point) as child:
            address = child.address or "http://127.0.0.1:9"
            with httpx.Client(base_url=address, timeout=180, trust_env=False) as client:
                service = Service.__new__(Service)
                service.client, service.settings = client, self.settings
                service.sessions, service.secret = self.sessions, self.secret
                yield child, service

    def crash_on_a_scene(self, point: str) -> None:
        """Send parcels and a scene to a service that dies at the point."""
        with self.started(point) as (child, service):
            assert service.put_parcels(*PARCELS).json()["created"] == len(PARCELS)
            with pytest.raises(httpx.TransportError):
                service.post_scene(SCENE, self.files)
            assert child.killed(), child.log.read_text("utf-8")

    def crash_at_start(self, point: str) -> None:
        with self.started(point) as (child, _):
            assert child.killed(), child.log.read_text("utf-8")
            assert child.address == ""

    def counts(self) -> dict[str, int]:
        """Count what must never be double."""
        tables: tuple[type[Base], ...] = (Scene, SceneFile, Layout, Write, Observation, Latest)
        with self.sessions.reading() as session:
            return {
                table.__tablename__: session.scalar(select(func.count()).select_from(table)) or 0
                for table in tables
            }

    def state(self) -> str | None:
        with self.sessions.reading() as session:
            return session.scalar(select(Scene.state))

    def kept(self) -> list[Path]:
        return list((self.settings.data / "files" / "archive").glob("??/*"))


def scene_files(folder: Path) -> dict[str, Path]:
    """Write a scene whose every cell differs, with some cloud."""
    folder.mkdir(parents=True)
    rng = np.random.default_rng(20240603)
    numbers = {role: rng.integers(1_050, 6_000, (40, 40), dtype=np.uint16) for role in BANDS}
    files = {role: write_band(folder / f"{role}.tif", grid) for role, grid in numbers.items()}
    classes = rng.choice(np.array([4, 5, 9], dtype=np.uint8), (20, 20), p=[0.6, 0.3, 0.1])
    files["quality"] = write_band(folder / "quality.tif", classes, cell_m=20)
    return files


def answers(service: Service) -> dict[str, Any]:
    """Return all that the service says of the scene and its parcels, less what the clock does."""
    scene = service.get("/v1/scenes/s1")
    report = {name: scene[name] for name in scene if name.startswith("parcels_")}
    series = {
        f"{feature['properties']['ref']} {kind}": service.get(
            f"/v1/parcels/{feature['properties']['ref']}/series",
            params={**question, "min_valid": 0},
        )
        for feature in PARCELS
        for kind, question in QUESTIONS.items()
    }
    return {
        "state": scene["state"],
        "report": {**report, "indices": scene["indices"]},
        "parcels": service.get("/v1/scenes/s1/parcels"),
        "overview": service.get("/v1/overview", params={"index": "ndmi"}),
        **series,
    }


@dataclass(frozen=True, slots=True, kw_only=True)
class Undisturbed:
    """What a run without a crash ends with."""

    answers: Mapping[str, Any]
    counts: Mapping[str, int]


@pytest.fixture(scope="module")
def undisturbed(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> Undisturbed:
    folder = tmp_path_factory.mktemp("undisturbed")
    deployment = Deployment(fresh_settings(request, "sqlite", folder / "data"), folder)
    with serving(deployment.settings) as service:
        service.put_parcels(*PARCELS)
        assert service.post_scene(SCENE, deployment.files).json()["state"] == "done"
        found = Undisturbed(answers=answers(service), counts=deployment.counts())
    deployment.sessions.engine.dispose()
    means = found.answers["A indices"]["indices"]["ndvi"]["mean"]
    assert len(means) == 1
    assert means[0] is not None
    assert found.counts["write"] == 1
    assert found.counts["observation"] == IN_FOOTPRINT
    return found


@pytest.fixture(params=["sqlite"])
def deployment(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Deployment]:
    """A migrated deployment: on SQLite, or on each database that a test names."""
    made = Deployment(fresh_settings(request, request.param, tmp_path / "data"), tmp_path)
    made.add_key()
    yield made
    made.sessions.engine.dispose()


def killed_at(*points: str, also_on_postgresql: str) -> pytest.MarkDecorator:
    """Run a test for each point on SQLite, and for one of them on PostgreSQL too."""
    cases = [("sqlite", point) for point in points] + [("postgresql", also_on_postgresql)]
    return pytest.mark.parametrize(("deployment", "point"), cases, indirect=["deployment"])


def holds_what_an_undisturbed_run_gave(
    deployment: Deployment, service: Service, undisturbed: Undisturbed
) -> None:
    """Assert that all answers are the same, that nothing is double, and that a repost rests."""
    assert answers(service) == undisturbed.answers
    assert deployment.counts() == undisturbed.counts
    assert len(deployment.kept()) == len(deployment.files)
    again = service.post_scene(SCENE, deployment.files)
    assert (again.status_code, again.json()["state"]) == (200, "done")
    assert deployment.counts() == undisturbed.counts


def finishes_by_itself(deployment: Deployment, undisturbed: Undisturbed) -> None:
    """Assert that the next start brings the promised scene to its end without being asked."""
    with deployment.started() as (_, service):
        scene = service.get("/v1/scenes/s1", headers={"Prefer": "wait=30"})
        assert scene["state"] == "done", scene
        holds_what_an_undisturbed_run_gave(deployment, service, undisturbed)


@pytest.mark.parametrize("point", ["before-row", "row-not-committed"])
def test_killed_with_the_file_kept_and_no_row_it_takes_the_scene_when_sent_again(
    deployment: Deployment, undisturbed: Undisturbed, point: str
) -> None:
    deployment.crash_on_a_scene(point)
    assert deployment.counts()["scene"] == 0
    assert len(deployment.kept()) == len(deployment.files)
    with deployment.started() as (_, service):
        answer = service.post_scene(SCENE, deployment.files)
        assert (answer.status_code, answer.json()["state"]) == (200, "done")
        holds_what_an_undisturbed_run_gave(deployment, service, undisturbed)


def test_a_file_kept_without_a_row_is_swept_once_it_is_old_and_may_be_sent_again(
    deployment: Deployment, undisturbed: Undisturbed
) -> None:
    deployment.crash_on_a_scene("before-row")
    with serving(deployment.settings) as service:
        work = Resources(
            settings=deployment.settings,
            sessions=deployment.sessions,
            archive=Archive(deployment.settings.data / "files"),
            plans=Plans(deployment.settings.data / "plans", limit_bytes=0),
        )
        tidy(work)
        assert len(deployment.kept()) == len(deployment.files)
        long_ago = now().timestamp() - ORPHAN_SECONDS - 60
        for path in deployment.kept():
            os.utime(path, (long_ago, long_ago))
        tidy(work)
        assert deployment.kept() == []
        assert service.post_scene(SCENE, deployment.files).json()["state"] == "done"
        for path in deployment.kept():
            os.utime(path, (long_ago, long_ago))
        tidy(work)
        holds_what_an_undisturbed_run_gave(deployment, service, undisturbed)


@killed_at("before-job", "after-job", also_on_postgresql="before-job")
def test_killed_between_the_row_and_the_answer_it_keeps_the_promise(
    deployment: Deployment, undisturbed: Undisturbed, point: str
) -> None:
    deployment.crash_on_a_scene(point)
    assert deployment.counts()["scene"] == 1
    assert deployment.counts()["observation"] == 0
    if point == "before-job":
        assert deployment.state() == "queued"
    finishes_by_itself(deployment, undisturbed)


@killed_at(
    "before-plan",
    "in-mid-plan",
    "before-pixels",
    "in-a-batch",
    "rows-inserted",
    "rows-not-committed",
    also_on_postgresql="rows-inserted",
)
def test_killed_in_mid_measure_it_measures_anew(
    deployment: Deployment, undisturbed: Undisturbed, point: str
) -> None:
    deployment.crash_on_a_scene(point)
    assert deployment.state() == "running"
    assert deployment.counts()["write"] == 0
    assert deployment.counts()["observation"] == 0
    # A plan has its name only once it is whole.
    kept = sorted(path.suffix for path in (deployment.settings.data / "plans").iterdir())
    assert kept == {"before-plan": [], "in-mid-plan": [".part"]}.get(point, [".plan"])
    finishes_by_itself(deployment, undisturbed)


@killed_at(
    "step-not-noted",
    "before-judging",
    "before-finish",
    "done-not-committed",
    also_on_postgresql="step-not-noted",
)
def test_killed_with_observations_written_and_the_scene_not_done_it_finishes_the_scene(
    deployment: Deployment, undisturbed: Undisturbed, point: str
) -> None:
    deployment.crash_on_a_scene(point)
    assert deployment.state() == "running"
    assert deployment.counts()["observation"] == IN_FOOTPRINT
    finishes_by_itself(deployment, undisturbed)


@pytest.mark.parametrize("point", ["before-engine", "engine-running"])
def test_killed_during_a_start_that_resumes_a_scene_the_next_start_resumes_it(
    deployment: Deployment, undisturbed: Undisturbed, point: str
) -> None:
    deployment.crash_on_a_scene("rows-inserted")
    deployment.crash_at_start(point)
    assert deployment.counts()["observation"] == 0
    finishes_by_itself(deployment, undisturbed)


@pytest.mark.parametrize("point", ["migrating", "before-engine", "engine-running"])
def test_killed_during_the_very_first_start_it_starts_anew(
    undisturbed: Undisturbed, tmp_path: Path, point: str
) -> None:
    settings = Settings(data=tmp_path / "data", disk_reserve_bytes=0)
    deployment = Deployment(settings, tmp_path)
    deployment.crash_at_start(point)
    with deployment.started() as (_, service):
        deployment.add_key()
        service.secret = deployment.secret
        assert service.put_parcels(*PARCELS).json()["created"] == len(PARCELS)
        assert service.post_scene(SCENE, deployment.files).json()["state"] == "done"
        holds_what_an_undisturbed_run_gave(deployment, service, undisturbed)
    deployment.sessions.engine.dispose()


def test_a_queue_that_was_lost_is_filled_again_from_the_promises(
    deployment: Deployment, undisturbed: Undisturbed
) -> None:
    deployment.crash_on_a_scene("step-not-noted")
    for path in deployment.settings.data.glob("engine.sqlite*"):
        path.unlink()
    with deployment.started() as (_, service):
        scene = service.get("/v1/scenes/s1", headers={"Prefer": "wait=30"})
        assert scene["state"] == "done", scene
        assert answers(service) == undisturbed.answers
        assert deployment.counts()["observation"] == IN_FOOTPRINT


def test_a_scene_that_kills_the_service_three_times_fails_and_may_be_tried_again(
    deployment: Deployment, undisturbed: Undisturbed
) -> None:
    deployment.crash_on_a_scene("before-pixels")
    for _ in range(2):
        with deployment.started("before-pixels") as (child, _):
            assert child.killed(), child.log.read_text("utf-8")
    with deployment.started("never") as (child, service):
        scene = service.get("/v1/scenes/s1", headers={"Prefer": "wait=30"})
        assert scene["state"] == "failed", scene
        assert scene["failure"]["type"] == "/problems/internal-error"
        assert "ended three times" in scene["failure"]["detail"]
        assert deployment.counts()["observation"] == 0
        assert child.process.poll() is None
        again = service.call("POST", "/v1/scenes/s1/retry", headers={"Prefer": "wait=30"})
        assert (again.status_code, again.json()["state"]) == (200, "done")
        holds_what_an_undisturbed_run_gave(deployment, service, undisturbed)


def test_asked_to_end_it_ends_within_seconds_and_the_next_start_resumes(
    deployment: Deployment, undisturbed: Undisturbed
) -> None:
    with deployment.started("asked-to-end") as (child, service):
        service.put_parcels(*PARCELS)
        accepted = service.post_scene(SCENE, deployment.files, wait=0)
        assert accepted.status_code == 202
        # The step that is at work never ends by itself.
        assert child.process.wait(timeout=15) == 0, child.log.read_text("utf-8")
    assert deployment.state() == "running"
    finishes_by_itself(deployment, undisturbed)


def test_the_first_line_is_the_address_of_a_service_that_answers_at_that_moment(
    tmp_path: Path,
) -> None:
    settings = Settings(data=tmp_path / "data", disk_reserve_bytes=0)
    with started(settings, tmp_path / "log") as child:
        assert child.address.startswith("http://127.0.0.1:")
        assert httpx.get(f"{child.address}/readyz", trust_env=False).status_code == 200
        child.process.terminate()
        rest, _ = child.process.communicate(timeout=15)
        assert child.process.returncode == 0
        assert rest == ""


def test_a_second_service_on_the_same_folder_is_refused_in_one_line(
    deployment: Deployment,
) -> None:
    with deployment.started() as (first, service), deployment.started() as (second, _):
        assert second.process.wait(timeout=START_SECONDS) == 4
        assert second.address == ""
        said = second.log.read_text("utf-8").splitlines()
        assert said == ["furrowlight: Another process is already serving this data folder."]
        assert first.process.poll() is None
        assert service.get("/v1/scenes") == {"scenes": []}


def test_a_scene_that_was_done_meanwhile_is_not_failed_by_a_late_sweep(service: Service) -> None:
    files = scene_files(service.settings.data / "sent")
    service.put_parcels(*PARCELS)
    assert service.post_scene(SCENE, files).json()["state"] == "done"
    with service.sessions.reading() as session:
        scene_id, generation = session.execute(select(Scene.id, Scene.generation)).one()
    assert ingest.fail(scene_id, generation, ingest.INTERNAL_FAILURE) == "left"
    with service.sessions.writing() as session:
        assert lock_scene(session, scene_id).state == "done"
