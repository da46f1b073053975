"""The receiver that the README shows takes what the service signs, once, and nothing else."""

import json
import os
import re
import subprocess
import sys
import urllib.error
import urllib.request
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import IO

import pytest

from service.webhooks.signing import secret_of, signed_headers

README = Path(__file__).parents[2] / "README.md"
SERVING = 'HTTPServer(("127.0.0.1", 8081), Receiver).serve_forever()\n'
ON_A_FREE_PORT = (
    'server = HTTPServer(("127.0.0.1", 0), Receiver)\n'
    "print(server.server_port, flush=True)\n"
    "server.serve_forever()\n"
)
SECRET = secret_of(b"0123456789abcdefghijklmnopqrstuv")
OTHER = secret_of(b"vutsrqponmlkjihgfedcba9876543210")


@pytest.fixture
def receiver() -> Iterator[tuple[str, IO[str]]]:
    """URL and stdout of the README's receiver, run as a person would but on a free port."""
    (shown,) = re.findall(
        r"cat > tour/receiver\.py <<'END'\n(.*?)^END$", README.read_text("utf-8"), re.M | re.S
    )
    assert shown.endswith(SERVING)
    running = subprocess.Popen(
        [sys.executable, "-W", "error", "-c", shown.removesuffix(SERVING) + ON_A_FREE_PORT],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        env={**os.environ, "SECRET": SECRET},
        text=True,
    )
    with running:
        assert running.stdout is not None
        try:
            yield f"http://127.0.0.1:{running.stdout.readline().strip()}/", running.stdout
        finally:
            running.terminate()


def post(url: str, event_id: str, *, secret: str = SECRET, age: timedelta = timedelta(0)) -> int:
    """Post a signed event; return the status of the answer."""
    event = {"type": "app.furrowlight.alert.opened", "subject": f"alert-of-{event_id}"}
    body = json.dumps({**event, "data": {"parcel": "A", "cause": {"kind": "flood"}}}).encode()
    at = datetime.now(UTC) - age
    headers = signed_headers([secret], event_id=event_id, sent_at=at, body=body)
    asked = urllib.request.Request(url, data=body, headers=headers, method="POST")  # noqa: S310
    try:
        with urllib.request.urlopen(asked, timeout=10) as answer:  # noqa: S310
            return int(answer.status)
    except urllib.error.HTTPError as error:
        with error:
            return error.code


def test_the_receiver_of_the_readme_prints_each_genuine_event_once(
    receiver: tuple[str, IO[str]],
) -> None:
    url, printed = receiver
    assert [post(url, "evt_1"), post(url, "evt_1")] == [204, 204]
    assert post(url, "evt_2", secret=OTHER) == 401
    assert post(url, "evt_3", age=timedelta(minutes=10)) == 401
    assert post(url, "evt_4") == 204
    assert [printed.readline() for _ in range(2)] == [
        "app.furrowlight.alert.opened alert-of-evt_1 A flood\n",
        "app.furrowlight.alert.opened alert-of-evt_4 A flood\n",
    ]
