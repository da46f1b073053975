"""Webhooks: receivers registered, tried, changed; deliveries looked at and sent again."""

import secrets
from datetime import datetime
from ipaddress import ip_network
from typing import Annotated, Literal

from fastapi import Request, Response
from pydantic import BaseModel, Field
from sqlalchemy.orm import Session

from service.api.context import Caller, Context, Ctx, Steward
from service.api.once import OnceOnly, json_answer
from service.api.paging import Cursor, Limit, link_next, place_in
from service.api.routes import contract_router
from service.api.wire import InstantOut, Ref, Sent
from service.clock import now
from service.egress.targets import check_address
from service.errors import Conflict, RejectedInput, Unavailable
from service.jobs.announce import announce_ping
from service.jobs.deliver import promise_of
from service.store.tables import Attempt, Delivery, Webhook
from service.store.webhooks import (
    WebhookState,
    add_webhook,
    attempts_of,
    check_enabled,
    get_delivery,
    get_webhook,
    list_deliveries,
    list_webhooks,
    send_again,
)
from service.webhooks.events import EventName
from service.webhooks.signing import OLD_SECRET_HOLDS, SECRET_BYTES, secret_of

router = contract_router("", "webhooks")
Severity = Literal["low", "medium", "high"]
_OF_ALL_HOLDINGS = (
    EventName.SCENE_DONE,
    EventName.SCENE_FAILED,
    EventName.REGION_OPENED,
    EventName.REGION_CLOSED,
)


class WebhookSent(Sent):
    """A receiver and what it is to be told."""

    url: Annotated[str, Field(min_length=1, max_length=2000)]
    events: Annotated[list[EventName], Field(min_length=1)]
    holdings: Annotated[list[Ref], Field(min_length=1, max_length=1000)] | None = None
    min_severity: Severity | None = None


class WebhookChange(Sent):
    """What is to be changed of a receiver; the rest stays."""

    url: Annotated[str, Field(min_length=1, max_length=2000)] | None = None
    events: Annotated[list[EventName], Field(min_length=1)] | None = None
    min_severity: Severity | None = None
    state: Literal["active", "disabled"] | None = None


class WebhookOut(BaseModel):
    """A receiver without its secret."""

    id: str
    url: str
    events: list[str]
    holdings: list[str] | None
    min_severity: str | None
    state: WebhookState
    created_at: InstantOut


class WebhookWithSecret(WebhookOut):
    """A receiver with its signing secret, which is shown this once."""

    secret: str


class WebhooksOut(BaseModel):
    """All receivers."""

    webhooks: list[WebhookOut]


class AttemptOut(BaseModel):
    """One POST, and the first KiB of what came back."""

    number: int
    started_at: InstantOut
    seconds: float
    status: int | None
    error: str | None
    detail: str | None
    answer: str


class DeliveryOut(BaseModel):
    """One event for one receiver."""

    id: str
    event: str
    event_id: str
    subject: str
    state: str
    next_attempt_at: InstantOut | None
    attempts: list[AttemptOut]


class DeliveriesOut(BaseModel):
    """A page of deliveries, newest first."""

    deliveries: list[DeliveryOut]


def _out(row: Webhook) -> WebhookOut:
    return WebhookOut(
        id=row.public_id,
        url=row.url,
        events=row.events,
        holdings=row.holdings,
        min_severity=row.min_severity,
        state=WebhookState(row.state),
        created_at=row.created_at,
    )


@router.post("/webhooks", status_code=201, response_model=WebhookWithSecret)
def register_webhook(sent: WebhookSent, caller: Steward, context: Ctx, once: OnceOnly) -> Response:
    """Register a receiver; its signing secret is in this answer and nowhere else."""
    holdings = _holdings_of(sent, caller)
    _check_url(sent.url, context)
    fingerprint = sent.model_dump_json()
    secret = _new_secret()
    with context.sessions.writing() as session:
        if once.replay(session, caller, fingerprint) is not None:
            raise Conflict(
                "secret-shown",
                "This request registered a webhook already and showed its secret; no second one "
                "was made.",
            )
        row = add_webhook(
            session,
            secret=secret,
            at=now(),
            url=sent.url,
            events=[str(name) for name in dict.fromkeys(sent.events)],
            holdings=holdings,
            min_severity=sent.min_severity,
        )
        once.keep(session, caller, fingerprint, json_answer(_out(row), 201))
        made = WebhookWithSecret(**_out(row).model_dump(), secret=secret)
    return json_answer(made, 201, Location=f"/v1/webhooks/{made.id}")


def _holdings_of(sent: WebhookSent, caller: Caller) -> list[str] | None:
    holdings = sent.holdings
    if caller.holdings is not None:
        holdings = holdings or sorted(caller.holdings)
        if not set(holdings) <= caller.holdings:
            raise RejectedInput.at("/holdings", "Your own key is limited; name its holdings only.")
    if holdings is not None and set(sent.events) & set(_OF_ALL_HOLDINGS):
        raise RejectedInput.at(
            "/events",
            "Scenes and regional notices concern all holdings; a webhook limited to some is not "
            "told of them.",
        )
    return holdings


def _check_url(url: str, context: Context) -> None:
    allowed = [ip_network(text) for text in context.settings.webhook_networks]
    try:
        check_address(url, allowed)
    except (RejectedInput, Unavailable) as error:
        raise RejectedInput.at("/url", error.detail, code="webhook-address") from error


def _new_secret() -> str:
    return secret_of(secrets.token_bytes(SECRET_BYTES))


@router.get("/webhooks")
def get_webhooks(caller: Steward, context: Ctx) -> WebhooksOut:
    """List receivers without their secrets."""
    with context.sessions.reading() as session:
        rows = list_webhooks(session, holdings=caller.holdings)
    return WebhooksOut(webhooks=[_out(row) for row in rows])


@router.get("/webhooks/{webhook_id}")
def get_one_webhook(webhook_id: str, caller: Steward, context: Ctx) -> WebhookOut:
    """Answer one receiver."""
    with context.sessions.reading() as session:
        return _out(get_webhook(session, webhook_id, holdings=caller.holdings))


@router.patch("/webhooks/{webhook_id}")
def change_webhook(
    webhook_id: str, sent: WebhookChange, caller: Steward, context: Ctx
) -> WebhookOut:
    """Change what a receiver is told, and where; `active` takes up a failing one again."""
    if sent.url is not None:
        _check_url(sent.url, context)
    given = sent.model_dump(exclude_unset=True, mode="json")
    for name in ("url", "events", "state"):
        if name in given and given[name] is None:
            raise RejectedInput.at(f"/{name}", "This can be changed, but not taken away.")
    with context.sessions.writing() as session:
        row = get_webhook(session, webhook_id, holdings=caller.holdings)
        if row.holdings is not None and set(given.get("events", [])) & set(_OF_ALL_HOLDINGS):
            raise RejectedInput.at(
                "/events", "A webhook limited to holdings is not told of scenes."
            )
        for name, value in given.items():
            setattr(row, name, value)
        return _out(row)


@router.delete("/webhooks/{webhook_id}")
def delete_webhook(webhook_id: str, caller: Steward, context: Ctx) -> WebhookOut:
    """Forget a receiver and its deliveries."""
    with context.sessions.writing() as session:
        row = get_webhook(session, webhook_id, holdings=caller.holdings)
        gone = _out(row)
        session.delete(row)
        return gone


@router.post("/webhooks/{webhook_id}/rotate", response_model=WebhookWithSecret)
def rotate_secret(webhook_id: str, caller: Steward, context: Ctx, once: OnceOnly) -> Response:
    """Replace the signing secret; the old one signs beside it for 24 hours."""
    at = now()
    with context.sessions.writing() as session:
        if once.replay(session, caller, webhook_id) is not None:
            raise Conflict(
                "secret-shown", "This request replaced the secret and showed it already."
            )
        row = get_webhook(session, webhook_id, holdings=caller.holdings)
        row.old_secret, row.old_secret_until = row.secret, at + OLD_SECRET_HOLDS
        row.secret = _new_secret()
        once.keep(session, caller, webhook_id, json_answer(_out(row)))
        return json_answer(WebhookWithSecret(**_out(row).model_dump(), secret=row.secret))


@router.post("/webhooks/{webhook_id}/ping", status_code=202, response_model=DeliveryOut)
def ping_webhook(webhook_id: str, caller: Steward, context: Ctx, once: OnceOnly) -> Response:
    """Send a `ping` event to one receiver."""
    at = now()
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, webhook_id)) is not None:
            return first
        row = get_webhook(session, webhook_id, holdings=caller.holdings)
        check_enabled(row)
        promised = announce_ping(session, context.settings, row, key=secrets.token_hex(8), at=at)
        made = _delivery(session, promised[0].delivery_id)
        answer = once.keep(session, caller, webhook_id, json_answer(made, 202))
    context.promise_deliveries(promised)
    return answer


@router.get("/webhooks/{webhook_id}/deliveries")
def get_deliveries(
    webhook_id: str,
    caller: Steward,
    context: Ctx,
    request: Request,
    response: Response,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> DeliveriesOut:
    """List a receiver's deliveries with their attempts, newest first."""
    place = place_in(cursor, int)
    with context.sessions.reading() as session:
        webhook = get_webhook(session, webhook_id, holdings=caller.holdings)
        rows = list_deliveries(
            session, webhook, before_id=place[0] if place else None, limit=limit + 1
        )
        attempts = attempts_of(session, [row.id for row in rows])
        page = [_delivery_out(row, attempts[row.id]) for row in rows[:limit]]
    if len(rows) > limit:
        link_next(request, response, rows[limit - 1].id)
    return DeliveriesOut(deliveries=page)


@router.post("/deliveries/{delivery_id}/resend", status_code=202, response_model=DeliveryOut)
def resend_delivery(delivery_id: str, caller: Steward, context: Ctx, once: OnceOnly) -> Response:
    """Try a delivery again that was delivered or given up."""
    at = now()
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, delivery_id)) is not None:
            return first
        row = get_delivery(session, delivery_id, holdings=caller.holdings)
        send_again(session, row, at=at)
        answer = once.keep(
            session, caller, delivery_id, json_answer(_delivery(session, row.id), 202)
        )
        promised = [promise_of(row, at=at)]
    context.promise_deliveries(promised)
    return answer


def _delivery(session: Session, delivery_id: int) -> DeliveryOut:
    row = session.get_one(Delivery, delivery_id)
    return _delivery_out(row, attempts_of(session, [delivery_id])[delivery_id])


def _delivery_out(row: Delivery, attempts: list[Attempt]) -> DeliveryOut:
    return DeliveryOut(
        id=row.public_id,
        event=row.event.name,
        event_id=row.event_id,
        subject=row.event.subject,
        state=row.state,
        next_attempt_at=_next(row),
        attempts=[
            AttemptOut(
                number=attempt.number,
                started_at=attempt.started_at,
                seconds=attempt.seconds,
                status=attempt.status,
                error=attempt.error,
                detail=attempt.detail,
                answer=attempt.answer,
            )
            for attempt in attempts
        ],
    )


def _next(row: Delivery) -> datetime | None:
    return row.next_at if row.state == "waiting" else None
