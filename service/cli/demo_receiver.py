"""The demo's receiver of webhooks: a small HTTP server that believes only what is signed."""

import json
import threading
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from http import HTTPStatus
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any, Final

from service.clock import now
from service.webhooks.events import MAX_BODY_BYTES
from service.webhooks.signing import ID_HEADER, is_genuine

READ_SECONDS: Final = 10.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """An event as it was told: `alert.opened` and its kind, what it is about, its data."""

    id: str
    name: str
    subject: str
    data: Mapping[str, Any]


class Receiver:
    """What has arrived: events by their id, and how many messages were not genuine."""

    def __init__(self) -> None:
        self.forged = 0
        self._secret: str | None = None
        self._events: dict[str, Event] = {}
        self._shown = 0
        self._arrived = threading.Condition()

    @property
    def events(self) -> list[Event]:
        """Every event once, in order of arrival."""
        with self._arrived:
            return list(self._events.values())

    def trust(self, secret: str) -> None:
        """Believe what is signed with this secret from now on."""
        self._secret = secret

    def take(self, headers: Mapping[str, str], body: bytes) -> HTTPStatus:
        """Take a message if its signature is genuine; one that came before changes nothing."""
        message = {name.lower(): text for name, text in headers.items()}
        is_known = self._secret is not None and is_genuine(
            self._secret, headers=message, body=body, now=now()
        )
        with self._arrived:
            if is_known:
                self._events.setdefault(message[ID_HEADER], _event_in(body))
            else:
                self.forged += 1
            self._arrived.notify_all()
        return HTTPStatus.NO_CONTENT if is_known else HTTPStatus.UNAUTHORIZED

    def waits_for(self, name: str, subject: str, *, seconds: float) -> bool:
        """Wait for an event about something; return whether it has come."""

        def has_come() -> bool:
            return any(
                event.name == name and event.subject == subject for event in self._events.values()
            )

        with self._arrived:
            return self._arrived.wait_for(has_come, timeout=seconds)

    def news(self, *, seconds: float = 0.0) -> list[Event]:
        """Return what has not been returned before, waiting up to so long for something."""
        with self._arrived:
            self._arrived.wait_for(lambda: len(self._events) > self._shown, timeout=seconds)
            fresh = list(self._events.values())[self._shown :]
            self._shown += len(fresh)
        return fresh


def _event_in(body: bytes) -> Event:
    """Return the event of a CloudEvents body, its name without the deployment's prefix."""
    told: dict[str, Any] = json.loads(body)
    name = ".".join(told["type"].rsplit(".", 2)[-2:])
    return Event(id=told["id"], name=name, subject=told["subject"], data=told["data"])


class _Server(ThreadingHTTPServer):
    daemon_threads = True

    def __init__(self, receiver: Receiver) -> None:
        self.receiver = receiver
        super().__init__(("127.0.0.1", 0), _Handler)


class _Handler(BaseHTTPRequestHandler):
    server: _Server
    timeout = READ_SECONDS

    def do_POST(self) -> None:
        length = self.headers.get("Content-Length", "")
        if not length.isdecimal() or int(length) > MAX_BODY_BYTES:
            status = HTTPStatus.REQUEST_ENTITY_TOO_LARGE
        else:
            body = self.rfile.read(int(length))
            status = self.server.receiver.take(dict(self.headers.items()), body)
        self.send_response(status)
        self.send_header("Content-Length", "0")
        self.end_headers()

    def log_message(self, *_: object) -> None:
        """Say nothing on stderr; what arrived is told by the demo."""


@contextmanager
def receiving() -> Iterator[tuple[str, Receiver]]:
    """Run a receiver on a free loopback port until the block ends; yield its URL and itself."""
    receiver = Receiver()
    with _Server(receiver) as server:
        thread = threading.Thread(target=server.serve_forever, daemon=True)
        thread.start()
        try:
            yield f"http://127.0.0.1:{server.server_port}/alerts", receiver
        finally:
            server.shutdown()
            thread.join()
