"""The demo's receiver believes what is signed, once, and counts the rest."""

import urllib.error
import urllib.request
from datetime import UTC, datetime, timedelta
from http import HTTPStatus

import pytest

from service.cli.demo_receiver import Receiver, receiving
from service.webhooks.events import EventName, event_body
from service.webhooks.signing import secret_of, signed_headers

SECRET = secret_of(b"0123456789abcdefghijklmnopqrstuv")
OTHER = secret_of(b"vutsrqponmlkjihgfedcba9876543210")


def message(
    event_id: str = "evt_1", *, secret: str = SECRET, age: timedelta = timedelta(0)
) -> tuple[dict[str, str], bytes]:
    """Return headers and body of an event as the service sends it."""
    at = datetime.now(UTC) - age
    body = event_body(
        EventName.ALERT_OPENED,
        prefix="org.example.fields",
        source="/",
        event_id=event_id,
        occurred_at=at,
        subject="alt_1",
        data={"parcel": "A"},
    )
    return signed_headers([secret], event_id=event_id, sent_at=at, body=body), body


def post(url: str, headers: dict[str, str], body: bytes) -> int:
    """Post as any client would; return the status."""
    asked = urllib.request.Request(url, data=body, headers=headers, method="POST")  # noqa: S310
    try:
        with urllib.request.urlopen(asked, timeout=10) as answer:  # noqa: S310
            return int(answer.status)
    except urllib.error.HTTPError as error:
        with error:
            return error.code


def test_a_signed_event_arrives_over_http_and_a_repeat_is_dropped() -> None:
    with receiving() as (url, receiver):
        receiver.trust(SECRET)
        assert [post(url, *message()) for _ in range(2)] == [204, 204]
        assert post(url, *message("evt_2")) == 204
        (first, second) = receiver.events
    assert (first.id, first.name, first.subject) == ("evt_1", "alert.opened", "alt_1")
    assert first.data == {"parcel": "A"}
    assert second.id == "evt_2"
    assert receiver.forged == 0


@pytest.mark.parametrize("fault", ["secret", "body", "id", "age", "none"])
def test_a_message_that_is_not_genuine_is_refused_and_counted(fault: str) -> None:
    headers, body = message(
        secret=OTHER if fault == "secret" else SECRET,
        age=timedelta(minutes=10 if fault == "age" else 0),
    )
    if fault == "body":
        body = body.replace(b'"A"', b'"B"')
    if fault == "id":
        headers["webhook-id"] = "evt_2"
    if fault == "none":
        headers = {}
    with receiving() as (url, receiver):
        receiver.trust(SECRET)
        assert post(url, headers, body) == 401
    assert (receiver.events, receiver.forged) == ([], 1)


def test_before_it_knows_the_secret_it_believes_nobody() -> None:
    receiver = Receiver()
    assert receiver.take(*message()) is HTTPStatus.UNAUTHORIZED
    assert receiver.forged == 1


def test_a_body_that_no_event_can_have_is_not_read() -> None:
    with receiving() as (url, receiver):
        assert post(url, {}, b"x" * 20_001) == 413
    assert receiver.events == []


def test_news_are_told_once_and_what_is_awaited_is_noticed() -> None:
    receiver = Receiver()
    receiver.trust(SECRET)
    assert receiver.news() == []
    receiver.take(*message())
    assert receiver.waits_for("alert.opened", "alt_1", seconds=0.0)
    assert not receiver.waits_for("alert.closed", "alt_1", seconds=0.0)
    assert [event.id for event in receiver.news()] == ["evt_1"]
    assert receiver.news() == []
