"""One attempt to deliver an event: one bounded POST, and what came of it."""

import time
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from enum import StrEnum
from http import HTTPStatus
from typing import Final

from service.egress.client import Answer, GuardedTransport, Limits, send
from service.errors import RejectedInput, Unavailable
from service.webhooks.events import CONTENT_TYPE
from service.webhooks.retries import retry_after
from service.webhooks.signing import signed_headers

LIMITS: Final = Limits(seconds=15.0, answer_bytes=1024)
REDIRECTED: Final = "redirected"
REFUSED: Final = "refused-by-receiver"


class Verdict(StrEnum):
    """What an attempt means for its delivery."""

    DELIVERED = "delivered"
    FAILED = "failed"
    GONE = "gone"


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What came of one attempt.

    `status` is None when there was no answer; `answer` is the first KiB of its body as
    text. `error` names the kind of failure, `detail` says it to people; both are None for
    a delivered event. `asked` is the wait that the receiver asked for.
    """

    status: int | None
    seconds: float
    answer: str
    error: str | None
    detail: str | None
    asked: timedelta | None

    @property
    def verdict(self) -> Verdict:
        """Delivered by any 2xx, gone by a 410, else failed."""
        if self.error is None:
            return Verdict.DELIVERED
        return Verdict.GONE if self.status == HTTPStatus.GONE else Verdict.FAILED


def deliver(
    transport: GuardedTransport,
    *,
    url: str,
    secrets: Sequence[str],
    event_id: str,
    body: bytes,
    sent_at: datetime,
) -> Outcome:
    """Sign and POST a body once; a failure of the other side is an outcome, no exception."""
    headers = signed_headers(secrets, event_id=event_id, sent_at=sent_at, body=body)
    started = time.monotonic()
    try:
        answer = send(
            transport,
            "POST",
            url,
            headers={"content-type": CONTENT_TYPE, **headers},
            content=body,
        )
    except (RejectedInput, Unavailable) as error:
        return Outcome(
            status=None,
            seconds=time.monotonic() - started,
            answer="",
            error=error.code,
            detail=error.detail,
            asked=None,
        )
    return _outcome(answer, seconds=time.monotonic() - started, now=sent_at)


def _outcome(answer: Answer, *, seconds: float, now: datetime) -> Outcome:
    error, detail = _failure(answer.status)
    return Outcome(
        status=answer.status,
        seconds=seconds,
        answer=_as_text(answer.body),
        error=error,
        detail=detail,
        asked=retry_after(answer.headers.get("retry-after"), now=now) if error else None,
    )


def _failure(status: int) -> tuple[str | None, str | None]:
    if HTTPStatus.OK <= status < HTTPStatus.MULTIPLE_CHOICES:
        return None, None
    if HTTPStatus.MULTIPLE_CHOICES <= status < HTTPStatus.BAD_REQUEST:
        return REDIRECTED, "The receiver redirects; register the address that it points to."
    if status == HTTPStatus.GONE:
        return REFUSED, "The receiver says that it is gone for good."
    return REFUSED, "The receiver answered with a status other than 2xx."


def _as_text(body: bytes) -> str:
    """Decode what may be anything; NUL can't be stored as text by every database."""
    return (
        body[: LIMITS.answer_bytes]
        .decode("utf-8", errors="replace")
        .replace("\0", "\N{REPLACEMENT CHARACTER}")
    )
