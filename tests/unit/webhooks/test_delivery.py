"""One attempt, from our signature to a receiver that verifies it by the reference libraries."""

from datetime import UTC, datetime, timedelta

import pytest
from cloudevents.core.bindings.http import HTTPMessage, from_structured
from cloudevents.core.formats.json import JSONFormat
from standardwebhooks import Webhook, WebhookVerificationError

from service.egress.client import TIMED_OUT, UNREACHABLE, GuardedTransport
from service.egress.targets import FORBIDDEN
from service.webhooks.delivery import LIMITS, REDIRECTED, REFUSED, Outcome, Verdict, deliver
from service.webhooks.events import EventName, event_body
from service.webhooks.signing import is_genuine, secret_of
from tests.receiving import (
    SHORT,
    Connection,
    Receiver,
    answering,
    receiving,
    transport,
)

OLD, NEW = secret_of(bytes(range(32))), secret_of(bytes(range(1, 33)))


def delivered(
    receiver: Receiver, *, client: GuardedTransport | None = None, sent_at: datetime | None = None
) -> Outcome:
    """Deliver one event with two secrets in force."""
    now = sent_at or datetime.now(UTC)
    body = event_body(
        EventName.ALERT_OPENED,
        prefix="org.example.fields",
        source="https://fields.example/",
        event_id="evt_1",
        occurred_at=now,
        subject="alert-7",
        data={"parcel": "Ährenfeld 1"},
    )
    return deliver(
        client or transport(limits=LIMITS),
        url=receiver.url,
        secrets=[NEW, OLD],
        event_id="evt_1",
        body=body,
        sent_at=now,
    )


def test_the_reference_libraries_verify_and_read_a_delivery() -> None:
    with receiving(answering("204 No Content")) as receiver:
        outcome = delivered(receiver)
    (request,) = receiver.requests
    for secret in (OLD, NEW):
        Webhook(secret).verify(request.body, request.headers)
        assert is_genuine(secret, headers=request.headers, body=request.body, now=datetime.now(UTC))
    with pytest.raises(WebhookVerificationError):
        Webhook(OLD).verify(request.body + b" ", request.headers)
    event = from_structured(HTTPMessage(headers=request.headers, body=request.body), JSONFormat())
    assert event.get_type() == "org.example.fields.alert.opened"
    assert event.get_id() == request.headers["webhook-id"] == "evt_1"
    assert event.get_data() == {"parcel": "Ährenfeld 1"}
    assert request.line == "POST /hook HTTP/1.1"
    assert request.headers["content-type"] == "application/cloudevents+json"
    assert (outcome.status, outcome.verdict, outcome.error) == (204, Verdict.DELIVERED, None)


@pytest.mark.parametrize(
    ("status", "verdict", "error"),
    [
        ("200 OK", Verdict.DELIVERED, None),
        ("202 Accepted", Verdict.DELIVERED, None),
        ("299 Odd", Verdict.DELIVERED, None),
        ("301 Moved", Verdict.FAILED, REDIRECTED),
        ("304 Same", Verdict.FAILED, REDIRECTED),
        ("308 Moved", Verdict.FAILED, REDIRECTED),
        ("400 Bad", Verdict.FAILED, REFUSED),
        ("410 Gone", Verdict.GONE, REFUSED),
        ("429 Slow", Verdict.FAILED, REFUSED),
        ("500 Broken", Verdict.FAILED, REFUSED),
        ("999 Odd", Verdict.FAILED, REFUSED),
    ],
)
def test_a_2xx_is_delivered_a_410_gone_and_all_else_failed(
    status: str, verdict: Verdict, error: str | None
) -> None:
    with receiving(answering(status)) as receiver:
        outcome = delivered(receiver)
    assert (outcome.verdict, outcome.error) == (verdict, error)
    assert outcome.status == int(status[:3])
    assert (outcome.detail is None) == (error is None)


def test_the_first_kib_of_the_answer_is_kept_as_text_that_any_database_takes() -> None:
    with receiving(answering("500 No", body=b"caf\xc3\xa9 \0 \xff" + b"x" * 5_000)) as receiver:
        outcome = delivered(receiver)
    assert outcome.answer.startswith("café � �xxx")
    assert len(outcome.answer) == 1024 - 1


def test_a_receiver_may_ask_to_wait_by_seconds_or_date() -> None:
    now = datetime.now(UTC).replace(microsecond=0)
    later = (now + timedelta(seconds=90)).strftime("%a, %d %b %Y %H:%M:%S GMT")
    for text in ("90", later):
        with receiving(answering("503 Busy", fields=(f"Retry-After: {text}",))) as receiver:
            outcome = delivered(receiver, sent_at=now)
        assert outcome.asked == timedelta(seconds=90)


def test_a_wait_asked_for_along_with_success_means_nothing() -> None:
    with receiving(answering("200 OK", fields=("Retry-After: 90",))) as receiver:
        assert delivered(receiver).asked is None


def test_a_receiver_that_is_silent_closed_or_off_limits_is_an_outcome() -> None:
    def silent(connection: Connection) -> None:
        connection.pause(10)

    with receiving(silent) as receiver:
        outcome = delivered(receiver, client=transport(limits=SHORT))
    assert (outcome.status, outcome.error, outcome.verdict) == (None, TIMED_OUT, Verdict.FAILED)
    assert SHORT.seconds <= outcome.seconds < 5
    assert delivered(receiver).error == UNREACHABLE
    shut = GuardedTransport(allowed=[], limits=LIMITS)
    outcome = delivered(receiver, client=shut)
    assert (outcome.error, outcome.verdict) == (FORBIDDEN, Verdict.FAILED)
    assert outcome.detail


def test_an_attempt_takes_at_most_fifteen_seconds_and_keeps_one_kib() -> None:
    # The figures of the API's documentation.
    assert (LIMITS.seconds, LIMITS.answer_bytes) == (15.0, 1024)
