"""Receivers of events, the events, and their deliveries."""

import hashlib
import secrets
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any, Final

from sqlalchemy import delete, select
from sqlalchemy.orm import Session, lazyload

from service.errors import Conflict, NotFound
from service.store.tables import Attempt, Delivery, Event, Webhook

SEVERITIES: Final = ("low", "medium", "high")


class WebhookState(StrEnum):
    """How a receiver is doing."""

    ACTIVE = "active"
    FAILING = "failing"
    DISABLED = "disabled"


class DeliveryState(StrEnum):
    """How far a delivery has come."""

    WAITING = "waiting"
    DELIVERED = "delivered"
    EXHAUSTED = "exhausted"


@dataclass(frozen=True, slots=True, kw_only=True)
class Announcement:
    """Something to tell: to whom it may be told, and its body."""

    event_id: str
    name: str
    subject: str
    body: bytes
    holding: str | None
    severity: str | None


def event_id_of(*parts: object) -> str:
    """Return the id of an event: the same for the same thing, however often it is worked out."""
    return f"evt_{hashlib.sha256(repr(parts).encode()).hexdigest()[:32]}"


def add_webhook(session: Session, *, secret: str, at: datetime, **members: Any) -> Webhook:
    """Register a receiver."""
    row = Webhook(
        public_id="wh_" + secrets.token_hex(8),
        secret=secret,
        old_secret=None,
        old_secret_until=None,
        state=WebhookState.ACTIVE,
        created_at=at,
        **members,
    )
    session.add(row)
    session.flush()
    return row


def get_webhook(session: Session, public_id: str, *, holdings: Collection[str] | None) -> Webhook:
    """Return a receiver within the key's holdings (None: all).

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.scalar(select(Webhook).where(Webhook.public_id == public_id))
    if row is None or not _is_within(row, holdings):
        raise NotFound("webhook-not-found", "There is no webhook with this id.")
    return row


def _is_within(row: Webhook, holdings: Collection[str] | None) -> bool:
    return holdings is None or (row.holdings is not None and set(row.holdings) <= set(holdings))


def list_webhooks(session: Session, *, holdings: Collection[str] | None) -> list[Webhook]:
    """List receivers within the key's holdings, oldest first."""
    rows = session.scalars(select(Webhook).order_by(Webhook.id))
    return [row for row in rows if _is_within(row, holdings)]


def active_secrets(row: Webhook, *, at: datetime) -> list[str]:
    """Return the secrets that sign now: the present one, and one that was just replaced."""
    is_old_valid = row.old_secret_until is not None and at < row.old_secret_until
    return [row.secret, *([row.old_secret] if row.old_secret and is_old_valid else [])]


def announce(session: Session, told: Announcement, *, at: datetime) -> list[Delivery]:
    """Record an event with a promised delivery for each receiver that asked for it.

    An event that was announced before promises nothing new.
    """
    if session.get(Event, told.event_id) is not None:
        return []
    webhooks = session.scalars(select(Webhook).where(Webhook.state != WebhookState.DISABLED))
    wanted = [row for row in webhooks if _wants(row, told)]
    if not wanted:
        return []
    event = Event(
        id=told.event_id, name=told.name, subject=told.subject, body=told.body, recorded_at=at
    )
    session.add(event)
    session.flush()
    return [_promised(session, row, event, at=at) for row in wanted]


def _wants(row: Webhook, told: Announcement) -> bool:
    if told.name not in row.events:
        return False
    if row.holdings is not None and told.holding not in row.holdings:
        return False
    if row.min_severity is None or told.severity is None:
        return True
    return SEVERITIES.index(told.severity) >= SEVERITIES.index(row.min_severity)


def check_enabled(webhook: Webhook) -> None:
    """Refuse to send to a disabled receiver.

    Raises
    ------
    Conflict
        It is disabled.
    """
    if webhook.state == WebhookState.DISABLED:
        raise Conflict(
            "webhook-disabled",
            "This webhook is disabled, and nothing is sent to it. Set its state to active first.",
        )


def announce_to(
    session: Session, webhook: Webhook, told: Announcement, *, at: datetime
) -> Delivery:
    """Record an event for one receiver alone, whatever it asked for."""
    event = Event(
        id=told.event_id, name=told.name, subject=told.subject, body=told.body, recorded_at=at
    )
    session.add(event)
    session.flush()
    return _promised(session, webhook, event, at=at)


def _promised(session: Session, webhook: Webhook, event: Event, *, at: datetime) -> Delivery:
    row = Delivery(
        public_id="dlv_" + secrets.token_hex(8),
        event=event,
        webhook=webhook,
        state=DeliveryState.WAITING,
        generation=1,
        attempts=0,
        earlier_attempts=0,
        begun_at=at,
        next_at=at,
    )
    session.add(row)
    session.flush()
    return row


def find_delivery(session: Session, public_id: str) -> Delivery | None:
    """Return a delivery, None if there is none any more."""
    return session.scalar(select(Delivery).where(Delivery.public_id == public_id))


def lock_delivery(session: Session, public_id: str) -> Delivery | None:
    """Return a delivery that nobody else changes until this transaction ends."""
    query = select(Delivery).where(Delivery.public_id == public_id)
    return session.scalar(query.with_for_update(of=Delivery))


def get_delivery(session: Session, public_id: str, *, holdings: Collection[str] | None) -> Delivery:
    """Return a delivery to a receiver within the key's holdings.

    Raises
    ------
    NotFound
        There is none.
    """
    row = find_delivery(session, public_id)
    if row is None or not _is_within(row.webhook, holdings):
        raise NotFound("delivery-not-found", "There is no delivery with this id.")
    return row


def send_again(session: Session, row: Delivery, *, at: datetime) -> None:
    """Promise a new round of attempts.

    Raises
    ------
    Conflict
        Attempts are still being made, or the receiver is disabled.
    """
    check_enabled(row.webhook)
    if row.state == DeliveryState.WAITING:
        raise Conflict("still-trying", "This delivery is still being tried; wait for its end.")
    row.state = DeliveryState.WAITING
    row.generation += 1
    row.earlier_attempts = row.attempts
    row.begun_at = row.next_at = at
    session.flush()


def attempts_of(session: Session, delivery_ids: Sequence[int]) -> Mapping[int, list[Attempt]]:
    """Return the attempts by delivery, in order."""
    found: dict[int, list[Attempt]] = {delivery_id: [] for delivery_id in delivery_ids}
    query = select(Attempt).where(Attempt.delivery_id.in_(list(delivery_ids)))
    for row in session.scalars(query.order_by(Attempt.number)):
        found[row.delivery_id].append(row)
    return found


def list_deliveries(
    session: Session, webhook: Webhook, *, before_id: int | None, limit: int
) -> list[Delivery]:
    """List a receiver's deliveries, newest first."""
    query = select(Delivery).where(Delivery.webhook_id == webhook.id)
    if before_id is not None:
        query = query.where(Delivery.id < before_id)
    return list(session.scalars(query.order_by(Delivery.id.desc()).limit(limit)))


def waiting_deliveries(session: Session) -> list[Delivery]:
    """Return the deliveries that are promised an attempt."""
    # Without their events: bodies by the thousand.
    query = select(Delivery).options(lazyload(Delivery.event))
    query = query.where(Delivery.state == DeliveryState.WAITING)
    return list(session.scalars(query.order_by(Delivery.id)))


def forget_old_deliveries(session: Session, *, before: datetime) -> None:
    """Drop settled deliveries of old events, and old events that have no delivery left.

    One that was sent again since stays, and so does one that still waits.
    """
    old = select(Event.id).where(Event.recorded_at < before)
    session.execute(
        delete(Delivery).where(
            Delivery.event_id.in_(old),
            Delivery.begun_at < before,
            Delivery.state != DeliveryState.WAITING,
        )
    )
    has_delivery = select(Delivery.id).where(Delivery.event_id == Event.id).exists()
    session.execute(delete(Event).where(Event.recorded_at < before, ~has_delivery))
