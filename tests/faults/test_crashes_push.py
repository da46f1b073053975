"""Killed twice in the middle of ten products, `push` sends each once when it is run again."""

import signal
import subprocess
import sys
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest
from sqlalchemy import select

from service.store.tables import Scene, Write
from tests.conftest import fresh_settings
from tests.faults.test_crashes import LAUNCHER, Deployment
from tests.products_made import SENSED_AT, write_safe
from tests.pushing import COMMAND_SECONDS, environment, pushed
from tests.serving import Service, square

PRODUCTS = 10
DAYS = 5
SURFACE = {"red": 0.05, "green": 0.08, "nir": 0.40}


@pytest.fixture
def deployment(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Deployment]:
    made = Deployment(fresh_settings(request, request.param, tmp_path / "data"), tmp_path)
    made.add_key()
    yield made
    made.sessions.engine.dispose()


@pytest.fixture
def inbox(tmp_path: Path) -> Path:
    """Ten products of one tile, five days apart, each darker in red than the one before."""
    folder = tmp_path / "in"
    for number in range(PRODUCTS):
        surface = {**SURFACE, "red": 0.15 - 0.01 * number}
        write_safe(folder, surface, sensed_at=SENSED_AT + timedelta(days=DAYS * number))
    return folder


def killed(service: Service, folder: Path, inbox: Path, point: str) -> str:
    """Push in a process that dies at a point; return what it told until then."""
    done = subprocess.run(
        [sys.executable, str(LAUNCHER), point, "push", str(inbox)],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env=environment(folder, url=str(service.client.base_url), secret=service.secret),
        text=True,
        timeout=COMMAND_SECONDS,
        check=False,
    )
    assert done.returncode == -signal.SIGKILL, done.stderr
    return done.stderr


def refs(deployment: Deployment) -> list[str]:
    with deployment.sessions.reading() as session:
        return list(session.scalars(select(Scene.ref).order_by(Scene.id)))


def sent_once(deployment: Deployment) -> bool:
    """Whether each scene was promised once and measured once."""
    with deployment.sessions.reading() as session:
        generations = session.scalars(select(Scene.generation)).all()
        writes = session.scalars(select(Write.scene_id)).all()
    return set(generations) == {1} and len(writes) == len(set(writes)) == PRODUCTS


@pytest.mark.parametrize("deployment", ["sqlite", "postgresql"], indirect=True)
def test_push_killed_twice_and_run_again_has_each_scene_once_and_documented_codes(
    deployment: Deployment, inbox: Path, tmp_path: Path
) -> None:
    products = sorted(path.stem for path in inbox.iterdir())
    with deployment.started("never") as (_, service):
        assert service.put_parcels(square("A", col=6, row=6, size=12)).status_code == 200
        first = killed(service, tmp_path, inbox, "half-a-body")
        assert first.count("  sent") == 3
        assert refs(deployment) == products[:3]
        second = killed(service, tmp_path, inbox, "answered-not-told")
        assert (second.count("  already there"), second.count("  sent")) == (3, 3)
        assert refs(deployment) == products[:7]

        whole = pushed(service, tmp_path, inbox, "--wait")
        assert whole.code == 0, whole.told
        assert whole.outcomes == ["already-there"] * 7 + ["sent"] * 3
        assert [line["report"]["state"] for line in whole.lines] == ["done"] * PRODUCTS
        assert refs(deployment) == products
        assert sent_once(deployment)
        wanted = [0.15 - 0.01 * number for number in range(PRODUCTS)]
        assert service.series("A", "red")["mean"] == pytest.approx(wanted, abs=5e-5)

        again = pushed(service, tmp_path, inbox)
        assert (again.code, again.outcomes) == (0, ["already-there"] * PRODUCTS)
        # Nothing of the interrupted uploads is left in the archive.
        kept = {path.name.partition(".")[0] for path in deployment.kept()}
        assert kept == _digests(service, products)

        write_safe(inbox, SURFACE, baseline="99.99", sensed_at=SENSED_AT - timedelta(days=DAYS))
        mixed = pushed(service, tmp_path, inbox)
        assert (mixed.code, mixed.outcomes[0]) == (3, "refused")
        assert mixed.outcomes[1:] == ["already-there"] * PRODUCTS
        assert sent_once(deployment)


def _digests(service: Service, products: list[str]) -> set[str]:
    contents = (service.get(f"/v1/scenes/{ref}/content")["files"] for ref in products)
    return {file["sha256"] for files in contents for file in files.values()}


@pytest.mark.parametrize("deployment", ["sqlite"], indirect=True)
def test_a_service_killed_while_products_are_pushed_gets_the_rest_when_it_is_back(
    deployment: Deployment, inbox: Path, tmp_path: Path
) -> None:
    with deployment.started("row-not-committed") as (child, service):
        away = pushed(service, tmp_path, inbox, "--patience", "0")
        assert child.killed()
    assert (away.code, away.outcomes) == (4, ["unavailable"]), away.told
    assert away.told.splitlines()[-1] == f"1 unavailable, {PRODUCTS - 1} not tried."
    with deployment.started("never") as (_, service):
        back = pushed(service, tmp_path, inbox, "--wait")
        assert (back.code, back.outcomes) == (0, ["sent"] * PRODUCTS), back.told
        assert refs(deployment) == sorted(path.stem for path in inbox.iterdir())
