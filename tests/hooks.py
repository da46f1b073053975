"""A receiver of events: it answers as a test says and hands over what arrives."""

import json
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from itertools import chain, repeat
from queue import Queue
from typing import Any

from cloudevents.core.bindings.http import HTTPMessage, from_structured
from cloudevents.core.formats.json import JSONFormat
from standardwebhooks import Webhook

from service.settings import Settings
from tests.receiving import LOOPBACK, Behaviour, Connection, Request, answering, receiving
from tests.serving import Service

PUBLIC_URL = "https://fields.example"
ALL_EVENTS = ["alert.opened", "alert.changed", "alert.closed", "scene.done", "scene.failed", "ping"]
SECONDS = 20.0
Decide = Callable[[Request], Behaviour]


@dataclass(frozen=True, slots=True, kw_only=True)
class Hook:
    """What a test sees of its receiver."""

    url: str
    arrivals: Queue[Request] = field(default_factory=Queue)

    def next(self) -> Request:
        """Return the next request, waiting for it."""
        return self.arrivals.get(timeout=SECONDS)

    def event(self) -> dict[str, Any]:
        """Return the body of the next request."""
        document: dict[str, Any] = json.loads(self.next().body)
        return document

    def waiting(self) -> list[Request]:
        """Return what arrived and was not looked at yet."""
        return [self.arrivals.get_nowait() for _ in range(self.arrivals.qsize())]


def in_turn(*answers: Behaviour) -> Decide:
    """Answer requests by these in turn, and by the last one from then on."""
    turns = chain(answers, repeat(answers[-1]))
    lock = threading.Lock()

    def decide(_request: Request) -> Behaviour:
        with lock:
            return next(turns)

    return decide


@contextmanager
def hooked(decide: Decide | None = None) -> Iterator[Hook]:
    """Run a receiver that takes whatever comes, or decides by request."""
    chosen = decide or in_turn(answering("204 No Content"))
    arrivals: Queue[Request] = Queue()

    def behave(connection: Connection) -> None:
        request = connection.request()
        arrivals.put(request)
        chosen(request)(connection)

    with receiving(behave, reads="nothing") as receiver:
        yield Hook(url=receiver.url, arrivals=arrivals)


def open_to_loopback(settings: Settings, *, wait_scale: float = 1.0) -> Settings:
    """Return settings whose operator lets webhooks reach this machine."""
    return settings.model_copy(
        update={
            "webhook_networks": (str(LOOPBACK),),
            "public_url": PUBLIC_URL,
            "delivery_wait_scale": wait_scale,
        }
    )


def register(
    service: Service, url: str, *events: str, key: str | None = None, **more: Any
) -> dict[str, Any]:
    """Register a receiver; return the answer, with the secret."""
    sent = {"url": url, "events": list(events or ALL_EVENTS), **more}
    answer = service.call("POST", "/v1/webhooks", json=sent, key=key)
    assert answer.status_code == 201, answer.text
    made: dict[str, Any] = answer.json()
    return made


def ping(service: Service, webhook: dict[str, Any]) -> dict[str, Any]:
    """Ask for a ping; return its delivery."""
    answer = service.call("POST", f"/v1/webhooks/{webhook['id']}/ping")
    assert answer.status_code == 202, answer.text
    delivery: dict[str, Any] = answer.json()
    return delivery


def deliveries(service: Service, webhook: dict[str, Any]) -> list[dict[str, Any]]:
    """Return a receiver's deliveries, newest first."""
    found: list[dict[str, Any]] = service.get(
        f"/v1/webhooks/{webhook['id']}/deliveries", params={"limit": 1000}
    )["deliveries"]
    return found


def comes_true(holds: Callable[[], bool], *, seconds: float = SECONDS) -> bool:
    """Look again and again, for so long; return whether it came true."""
    over = threading.Event()
    watch = threading.Timer(seconds, over.set)
    watch.start()
    try:
        while not holds():
            if over.wait(0.02):
                return False
        return True
    finally:
        watch.cancel()


def in_state(
    service: Service, webhook: dict[str, Any], state: str, *, attempts: int
) -> dict[str, Any]:
    """Return the newest delivery once it has come to a state after so many attempts."""

    def is_there() -> bool:
        newest = deliveries(service, webhook)[0]
        return (newest["state"], len(newest["attempts"])) == (state, attempts)

    assert comes_true(is_there), deliveries(service, webhook)[0]
    return deliveries(service, webhook)[0]


def read_by_the_libraries(request: Request, secret: str) -> Any:
    """Return an event as the CloudEvents library reads it, once Standard Webhooks' verified it."""
    Webhook(secret).verify(request.body, request.headers)
    message = HTTPMessage(headers=request.headers, body=request.body)
    return from_structured(message, JSONFormat())
