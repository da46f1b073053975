"""Delivering events: one short workflow per attempt, the next one enqueued with a delay."""

import ipaddress
import random
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from functools import lru_cache
from typing import Final

import structlog
from dbos import DBOS, SetEnqueueOptions, SetWorkflowID
from sqlalchemy.orm import Session

from service.clock import now
from service.egress.client import GuardedTransport
from service.jobs.resources import Resources, resources
from service.settings import Settings
from service.store.tables import Attempt, Delivery
from service.store.webhooks import (
    DeliveryState,
    WebhookState,
    active_secrets,
    find_delivery,
    lock_delivery,
    waiting_deliveries,
)
from service.webhooks.delivery import LIMITS, Outcome, Verdict, deliver
from service.webhooks.retries import next_wait

QUEUE: Final = "deliver"
_log = structlog.get_logger()


@dataclass(frozen=True, slots=True, kw_only=True)
class Promise:
    """A promised attempt: of which delivery, which one, to whom, and in how many seconds.

    The queue knows both by their public ids: numbers of deleted rows are given out again.
    """

    delivery_id: int
    public_id: str
    generation: int
    number: int
    webhook_id: str
    delay_seconds: float

    @property
    def workflow_id(self) -> str:
        """The id that makes promising the same attempt twice one piece of work."""
        return f"deliver:{self.public_id}:{self.generation}:{self.number}"


def promise_of(row: Delivery, *, at: datetime) -> Promise:
    """Return the attempt that a waiting delivery is due."""
    return Promise(
        delivery_id=row.id,
        public_id=row.public_id,
        generation=row.generation,
        number=row.attempts + 1,
        webhook_id=row.webhook.public_id,
        delay_seconds=max(0.0, (row.next_at - at).total_seconds()),
    )


def fresh_promises(work: Resources) -> list[Promise]:
    """Return the first attempts of deliveries that none was made of yet."""
    at = now()
    with work.sessions.reading() as session:
        rows = waiting_deliveries(session)
        return [promise_of(row, at=at) for row in rows if row.attempts == row.earlier_attempts]


def enqueue(promises: Sequence[Promise]) -> None:
    """Hand promised attempts to the queue; a slow receiver holds up only itself."""
    for promise in promises:
        with (
            SetWorkflowID(promise.workflow_id),
            SetEnqueueOptions(
                queue_partition_key=promise.webhook_id,
                delay_seconds=promise.delay_seconds if promise.delay_seconds > 0 else None,
            ),
        ):
            DBOS.enqueue_workflow(
                QUEUE, deliver_event, promise.public_id, promise.generation, promise.number
            )


@DBOS.workflow(name="deliver", max_recovery_attempts=10)
def deliver_event(public_id: str, generation: int, number: int) -> str:
    """Make one attempt, and promise the next one if it failed."""
    state = attempt(public_id, generation, number)
    if state == DeliveryState.WAITING:
        with resources().sessions.reading() as session:
            row = find_delivery(session, public_id)
            due = [promise_of(row, at=now())] if row is not None else []
        enqueue(due)
    return state


@DBOS.step(name="attempt")
def attempt(public_id: str, generation: int, number: int) -> str:
    """POST once and record what came of it; return the delivery's state, or ``left``.

    Repeated after a crash between POST and record it POSTs again under the same event id,
    by which receivers drop repeats.
    """
    work = resources()
    started_at = now()
    with work.sessions.reading() as session:
        row = find_delivery(session, public_id)
        if row is None or not _is_due(row, generation, number):
            return "left"
        is_disabled = row.webhook.state == WebhookState.DISABLED
        url, event_id, body = row.webhook.url, row.event_id, row.event.body
        signing = active_secrets(row.webhook, at=started_at)
    if is_disabled:
        return _leave_off(work, (public_id, generation, number))
    # No session is open while the other side takes its time.
    outcome = deliver(
        transport_for(work.settings.webhook_networks),
        url=url,
        secrets=signing,
        event_id=event_id,
        body=body,
        sent_at=started_at,
    )
    with work.sessions.writing() as session:
        return _record(session, work, (public_id, generation, number), outcome, at=started_at)


def _leave_off(work: Resources, promised: tuple[str, int, int]) -> str:
    """End a delivery to a receiver that was disabled meanwhile; it may be sent again later."""
    public_id, generation, number = promised
    with work.sessions.writing() as session:
        row = lock_delivery(session, public_id)
        if row is None or not _is_due(row, generation, number):
            return "left"
        row.state = DeliveryState.EXHAUSTED
        return row.state


def promise_anew(work: Resources, promise: Promise) -> list[Promise]:
    """Promise an attempt whose workflow ended without making it, unless things moved on."""
    with work.sessions.writing() as session:
        row = lock_delivery(session, promise.public_id)
        if row is None or not _is_due(row, promise.generation, promise.number):
            return []
        # A workflow that ended never runs again; another generation is another workflow.
        row.generation += 1
        return [promise_of(row, at=now())]


def _is_due(row: Delivery, generation: int, number: int) -> bool:
    is_same = row.generation == generation and row.attempts + 1 == number
    return is_same and row.state == DeliveryState.WAITING


@lru_cache(maxsize=8)
def transport_for(networks: tuple[str, ...]) -> GuardedTransport:
    """Return the way out for webhooks, with the networks that the operator allows.

    It keeps no state from request to request, but loads certificates when it is made.
    """
    allowed = [ipaddress.ip_network(text) for text in networks]
    return GuardedTransport(allowed=allowed, limits=LIMITS)


def _record(
    session: Session,
    work: Resources,
    promised: tuple[str, int, int],
    outcome: Outcome,
    *,
    at: datetime,
) -> str:
    public_id, generation, number = promised
    row = lock_delivery(session, public_id)
    if row is None or not _is_due(row, generation, number):
        return "left"
    row.attempts = number
    session.add(
        Attempt(
            delivery_id=row.id,
            number=number,
            started_at=at,
            seconds=round(outcome.seconds, 3),
            status=outcome.status,
            error=outcome.error,
            detail=outcome.detail,
            answer=outcome.answer,
        )
    )
    wait = _wait(row, outcome, work.settings, at=at)
    if outcome.verdict is Verdict.DELIVERED:
        row.state = DeliveryState.DELIVERED
        if row.webhook.state == WebhookState.FAILING:
            row.webhook.state = WebhookState.ACTIVE
    elif wait is not None:
        row.next_at = now() + wait
    else:
        row.state = DeliveryState.EXHAUSTED
        if outcome.verdict is Verdict.GONE:
            row.webhook.state = WebhookState.DISABLED
        elif row.webhook.state == WebhookState.ACTIVE:
            row.webhook.state = WebhookState.FAILING
        _log.warning("delivery exhausted", webhook=row.webhook.public_id, error=outcome.error)
    return row.state


def _wait(row: Delivery, outcome: Outcome, settings: Settings, *, at: datetime) -> timedelta | None:
    """Return the time to the next attempt of this round, None if there is none."""
    if outcome.verdict is not Verdict.FAILED:
        return None
    scale = settings.delivery_wait_scale
    made = row.attempts - row.earlier_attempts
    wait = next_wait(
        made,
        elapsed=(at - row.begun_at) / scale,
        asked=outcome.asked,
        chance=random.random(),  # noqa: S311 - spreads attempts, guards nothing
    )
    return None if wait is None else wait * scale
