"""Killed anywhere between a look and the record of its alert's delivery, it still tells of it.

As in `test_crashes.py`, a child process runs the real command line and dies at a named point
(`crashing.py`); then the real service starts on what is left, and nobody asks it for anything.
"""

import json
import shutil
from collections import Counter
from collections.abc import Iterator, Mapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
from sqlalchemy import func, select
from standardwebhooks import Webhook

from service.settings import Settings
from service.store.alert_tables import AlertRow
from service.store.tables import Delivery, Event
from tests.conftest import fresh_settings
from tests.departing import BREAK, EVERY, FALL, FIRST, HOLDINGS, USUAL, depart, settle
from tests.faults.test_crashes import Deployment
from tests.hooks import (
    PUBLIC_URL,
    Hook,
    comes_true,
    deliveries,
    hooked,
    in_turn,
    open_to_loopback,
    register,
)
from tests.receiving import LOOPBACK, Request, answering
from tests.serving import Service, serving, write_band

FALLS = {"P2": FALL, "P5": FALL}
Told = Mapping[str, tuple[str, str, Mapping[str, Any]]]
"""Type, subject and data of events, by id."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Settled:
    """A data folder in which all is ready for parcels to depart, and a key to it."""

    settings: Settings
    secret: str

    def copied_to(self, data: Path) -> Settings:
        shutil.copytree(self.settings.data, data)
        return self.settings.model_copy(update={"data": data})


@pytest.fixture(scope="module")
def settled(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Settled:
    folder = tmp_path_factory.mktemp("settled")
    return settled_on(fresh_settings(request, "sqlite", folder / "data"))


def settled_on(settings: Settings) -> Settled:
    with serving(settings) as service:
        settle(service)
        return Settled(settings=settings, secret=service.secret)


@pytest.fixture(scope="module")
def undisturbed(settled: Settled, tmp_path_factory: pytest.TempPathFactory) -> Told:
    """What is told when nothing dies."""
    settings = settled.copied_to(tmp_path_factory.mktemp("undisturbed") / "data")
    with serving(open_to_loopback(settings)) as service, hooked() as hook:
        register(service, hook.url, "alert.opened")
        depart(service, FALLS)
        told = told_by([hook.next() for _ in FALLS])
    assert {data["parcel"] for _, _, data in told.values()} == set(FALLS)
    return told


def told_by(requests: list[Request]) -> Told:
    """Return what events say, less the times of the clock."""
    found = {}
    for request in requests:
        event = json.loads(request.body)
        assert event["id"] == request.headers["webhook-id"]
        data = {name: value for name, value in event["data"].items() if name != "recorded_at"}
        found[event["id"]] = (event["type"], event["subject"], data)
    return found


@pytest.fixture(params=["sqlite"])
def deployment(
    request: pytest.FixtureRequest, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> Iterator[Deployment]:
    """A deployment where all is ready for parcels to depart, on a database that a test names."""
    monkeypatch.setenv("FURROWLIGHT_WEBHOOK_NETWORKS", str(LOOPBACK))
    monkeypatch.setenv("FURROWLIGHT_PUBLIC_URL", PUBLIC_URL)
    monkeypatch.setenv("FURROWLIGHT_DELIVERY_WAIT_SCALE", "0.001")
    if request.param == "sqlite":
        ready: Settled = request.getfixturevalue("settled")
        settings = ready.copied_to(tmp_path / "data")
    else:
        settings = fresh_settings(request, request.param, tmp_path / "data")
        ready = settled_on(settings)
    made = Deployment(settings, tmp_path)
    made.secret = ready.secret
    yield made
    made.sessions.engine.dispose()


def crash_on_a_departure(deployment: Deployment, hook: Hook, point: str) -> dict[str, Any]:
    """Send looks in which parcels depart to a service that dies; return the webhook."""
    with deployment.started(point) as (child, service):
        webhook = register(service, hook.url, "alert.opened")
        # The answer may come before the end, or not.
        with suppress(httpx.TransportError):
            depart(service, FALLS, wait=0)
        assert child.killed(), child.log.read_text("utf-8")
    return webhook


def forget_the_queue(deployment: Deployment) -> None:
    """Leave the sweep alone with the promises: no workflow is there to be resumed."""
    for path in deployment.settings.data.glob("engine.sqlite*"):
        path.unlink()


def counts(deployment: Deployment) -> tuple[int, int, int]:
    """Count alerts, events and deliveries."""
    with deployment.sessions.reading() as session:
        alerts, events, sent = (
            session.scalar(select(func.count()).select_from(table)) or 0
            for table in (AlertRow, Event, Delivery)
        )
    return alerts, events, sent


def arrived_at(
    deployment: Deployment, hook: Hook, webhook: dict[str, Any], *, events: int
) -> list[Request]:
    """Start the service again and return all that the receiver ever got, once all is settled."""
    with deployment.started() as (_, service):

        def is_settled() -> bool:
            found = deliveries(service, webhook)
            return len(found) == events and {row["state"] for row in found} == {"delivered"}

        assert comes_true(is_settled), deliveries(service, webhook)
        requests = hook.waiting()
    for request in requests:
        Webhook(webhook["secret"]).verify(request.body, request.headers)
    return requests


def repeats(requests: list[Request]) -> list[int]:
    """Return how often each event came, in order of frequency."""
    return sorted(Counter(request.headers["webhook-id"] for request in requests).values())


@pytest.mark.parametrize(
    ("deployment", "point", "is_queue_lost", "before"),
    [
        ("postgresql", "looks-not-judged", False, (0, 0, 0)),
        ("sqlite", "alert-not-committed", True, (0, 0, 0)),
        ("sqlite", "alert-not-told", True, (2, 2, 2)),
    ],
    indirect=["deployment"],
)
def test_killed_between_looks_and_delivery_it_judges_and_tells_at_the_next_start(
    deployment: Deployment,
    undisturbed: Told,
    point: str,
    is_queue_lost: bool,  # noqa: FBT001 - a case of the table above
    before: tuple[int, int, int],
) -> None:
    with hooked() as hook:
        webhook = crash_on_a_departure(deployment, hook, point)
        assert counts(deployment) == before
        assert hook.waiting() == []
        if is_queue_lost:
            forget_the_queue(deployment)
        requests = arrived_at(deployment, hook, webhook, events=len(FALLS))
        assert told_by(requests) == undisturbed
        assert repeats(requests) == [1, 1]
        assert counts(deployment) == (2, 2, 2)


@pytest.mark.parametrize("deployment", ["sqlite", "postgresql"], indirect=True)
def test_killed_between_post_and_record_it_posts_again_under_the_same_id(
    deployment: Deployment, undisturbed: Told
) -> None:
    with hooked() as hook:
        webhook = crash_on_a_departure(deployment, hook, "posted-not-recorded")
        first = hook.next()
        assert hook.waiting() == []
        again = arrived_at(deployment, hook, webhook, events=len(FALLS))
        assert told_by([first, *again]) == undisturbed
        assert repeats([first, *again]) == [1, 2]
        assert repeats(again) == [1, 1]
        (second,) = (
            request
            for request in again
            if request.headers["webhook-id"] == first.headers["webhook-id"]
        )
        assert second.body == first.body


def test_killed_between_a_refusal_and_the_next_promise_it_tries_again(
    deployment: Deployment, undisturbed: Told
) -> None:
    with hooked(in_turn(answering("503 Busy"), answering("204 No Content"))) as hook:
        webhook = crash_on_a_departure(deployment, hook, "next-not-promised")
        refused = hook.next()
        forget_the_queue(deployment)
        again = arrived_at(deployment, hook, webhook, events=len(FALLS))
        assert told_by(again) == undisturbed
        assert repeats([refused, *again]) == [1, 2]


def scene_of_the_break(folder: Path) -> tuple[dict[str, Any], dict[str, Path]]:
    """Return a scene in which the departing parcels have lost their green."""
    folder.mkdir()
    ndvi = np.full((40, 20 * len(HOLDINGS)), USUAL)
    for ref, fall in FALLS.items():
        col = 20 * list(HOLDINGS).index(ref)
        ndvi[:, col : col + 20] -= fall
    # Red and near infrared of one sum have any NDVI there is.
    files = {
        role: write_band(
            folder / f"{role}.tif", np.round(2_500 * (1 + sign * ndvi)).astype(np.uint16) + 1_000
        )
        for role, sign in (("red", -1), ("nir", 1))
    }
    classes = np.full((20, 10 * len(HOLDINGS)), 4, dtype=np.uint8)
    files["quality"] = write_band(folder / "quality.tif", classes, cell_m=20)
    scene = {
        "ref": "of the break",
        "sensor": "sentinel-2-l2a",
        "acquired_at": (FIRST + BREAK * EVERY).isoformat(),
        "processing_baseline": "05.10",
    }
    return scene, files


@pytest.mark.parametrize("point", ["looks-not-judged", "alert-not-told"])
def test_killed_with_a_scene_half_told_it_finishes_the_scene_and_tells_all_of_it(
    deployment: Deployment, tmp_path: Path, point: str
) -> None:
    scene, files = scene_of_the_break(tmp_path / "scene")
    with hooked() as hook:
        with deployment.started(point) as (child, service):
            webhook = register(service, hook.url, "alert.opened", "scene.done", "scene.failed")
            accepted = post(service, scene, files)
            assert accepted in (None, 202)
            assert child.killed(), child.log.read_text("utf-8")
        assert hook.waiting() == []
        requests = arrived_at(deployment, hook, webhook, events=3)
        told = [json.loads(request.body) for request in requests]
        assert repeats(requests) == [1, 1, 1]
        opened = [event["data"]["parcel"] for event in told if "alert" in event["type"]]
        assert sorted(opened) == sorted(FALLS)
        (done,) = (event for event in told if event["type"].endswith("scene.done"))
        assert done["subject"] == scene["ref"]
        with deployment.started() as (_, service):
            answer = service.get(f"/v1/scenes/{scene['ref']}")
            assert (answer["state"], answer["alerts_opened"]) == ("done", 2)


def post(service: Service, scene: dict[str, Any], files: dict[str, Path]) -> int | None:
    """Post a scene to a service that may be gone before it answers."""
    with suppress(httpx.TransportError):
        return service.post_scene(scene, files, wait=0).status_code
    return None
