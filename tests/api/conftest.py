"""Fixtures of tests over HTTP: the judged land, at any stage."""

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from tests.conftest import fresh_settings
from tests.judged_land import Filled, Land, fill
from tests.quiet_seasons import history, running, send, settle
from tests.serving import Service


@pytest.fixture(scope="session")
def stages(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> Callable[[str, str], Filled]:
    """Deployments by kind of database and stage: ``settled``, ``remembering``, ``judged``."""
    made: dict[tuple[str, str], Filled] = {}

    def stage(kind: str, name: str) -> Filled:
        if (kind, name) not in made:
            data = tmp_path_factory.mktemp("stages") / f"{kind}-{name}"
            if name == "settled":
                made[kind, name] = fill(fresh_settings(request, kind, data), settle)
            elif name == "remembering":
                settings = stage(kind, "settled").copy(data)
                made[kind, name] = fill(settings, lambda s: send(s, history(), assess=False))
            else:
                settings = stage(kind, "remembering").copy(data)
                made[kind, name] = fill(settings, lambda s: send(s, running()))
        return made[kind, name]

    return stage


@pytest.fixture(params=["sqlite", "postgresql"])
def land(
    request: pytest.FixtureRequest, tmp_path: Path, stages: Callable[[str, str], Filled]
) -> Land:
    """The land on each kind of database."""
    return Land(kind=request.param, folder=tmp_path, stages=stages)


@pytest.fixture
def judged(land: Land) -> Iterator[Service]:
    """A service that has judged the whole story."""
    with land.at("judged") as service:
        yield service
