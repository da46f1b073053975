"""A receiver that is down for two hours loses no event, gets each once, and holds up nobody.

The hours are simulated: the setting that stretches the waits between attempts shrinks them, so
that two hours of a receiver's being down, and of the service's patience, pass in seconds.
"""

import threading
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from standardwebhooks import Webhook

from service.settings import Settings
from tests.hooks import (
    comes_true,
    deliveries,
    hooked,
    open_to_loopback,
    ping,
    register,
)
from tests.receiving import Behaviour, Connection, Request, answering
from tests.serving import SCENE, Service, serving, square, uniform_scene

SCALE = 0.0005
OUTAGE_SECONDS = 2 * 3600 * SCALE
PINGS = 3
SCENES = 2


@pytest.fixture
def service(settings: Settings) -> Iterator[Service]:
    """The service, for which an hour of waiting is 1.8 s."""
    with serving(open_to_loopback(settings, wait_scale=SCALE)) as running:
        yield running


@dataclass(slots=True)
class Outage:
    """A receiver's way of being down: first it hangs, then it fails in several ways."""

    ends_at: float = float("inf")
    hung: threading.Event = field(default_factory=threading.Event)
    let_go: threading.Event = field(default_factory=threading.Event)
    refused: list[Request] = field(default_factory=list)
    taken: list[Request] = field(default_factory=list)

    def begin(self) -> None:
        """Let the two hours begin."""
        self.ends_at = time.monotonic() + OUTAGE_SECONDS
        self.let_go.set()

    def decide(self, request: Request) -> Behaviour:
        """Fail until the outage is over."""
        if not self.let_go.is_set():
            self.hung.set()
            self.let_go.wait(15)
        if time.monotonic() >= self.ends_at:
            self.taken.append(request)
            return answering("204 No Content")
        self.refused.append(request)
        ways = (answering("503 Down"), hang_up, answering("302 Elsewhere"), answering("429 Slow"))
        return ways[len(self.refused) % len(ways)]


def hang_up(_connection: Connection) -> None:
    """Cut the connection without an answer, as a server that dies does."""


def ids_of(requests: list[Request]) -> Counter[str]:
    return Counter(request.headers["webhook-id"] for request in requests)


def test_a_receiver_down_for_two_hours_gets_each_event_once_and_holds_up_nobody(
    service: Service, tmp_path: Path
) -> None:
    outage = Outage()
    with hooked(outage.decide) as broken, hooked() as sound:
        down = register(service, broken.url, "scene.done")
        up = register(service, sound.url, "scene.done")
        for _ in range(PINGS):
            ping(service, down)
            ping(service, up)
        assert outage.hung.wait(15)
        measure_scenes(service, tmp_path)

        # While the first receiver keeps a POST of its own hanging, the other one has it all.
        events = PINGS + SCENES
        assert len({sound.next().headers["webhook-id"] for _ in range(events)}) == events
        assert outage.refused == []

        outage.begin()
        promised = {row["event_id"] for row in deliveries(service, down)}
        assert len(promised) == events
        assert comes_true(
            lambda: {row["state"] for row in deliveries(service, down)} == {"delivered"}, seconds=45
        ), deliveries(service, down)
        # Whatever would come again had time to: one more event goes all the way.
        last = ping(service, down)
        assert comes_true(lambda: deliveries(service, down)[0]["state"] == "delivered")

    assert ids_of(outage.taken) == dict.fromkeys([*promised, last["event_id"]], 1)
    refusals = ids_of(outage.refused)
    assert set(refusals) == promised
    repeats_are_the_same_signed_anew(outage, down["secret"])
    for row in deliveries(service, down):
        statuses = [attempt["status"] for attempt in row["attempts"]]
        assert statuses[-1] == 204
        assert len(statuses) == refusals[row["event_id"]] + 1
    assert service.get(f"/v1/webhooks/{down['id']}")["state"] == "active"
    assert sound.waiting() == []
    for row in deliveries(service, up):
        assert (row["state"], len(row["attempts"])) == ("delivered", 1)


def repeats_are_the_same_signed_anew(outage: Outage, secret: str) -> None:
    bodies = {request.headers["webhook-id"]: request.body for request in outage.taken}
    for request in [*outage.refused, *outage.taken]:
        assert request.body == bodies[request.headers["webhook-id"]]
        Webhook(secret).verify(request.body, request.headers)


def measure_scenes(service: Service, folder: Path) -> None:
    service.put_parcels(square("A", col=5, row=5))
    for number in range(1, SCENES + 1):
        files = uniform_scene(folder / f"s{number}", {"red": 0.04, "nir": 0.42})
        scene = {**SCENE, "ref": f"s{number}", "acquired_at": f"2024-06-0{number}T10:10:31Z"}
        assert service.post_scene(scene, files).json()["state"] == "done"
