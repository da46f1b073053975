"""Turning what happened into events for those who asked to be told."""

from collections.abc import Mapping
from datetime import datetime
from typing import Any
from urllib.parse import quote

from sqlalchemy.orm import Session

from service.alerts.alert import CAUTION
from service.jobs.deliver import Promise, promise_of
from service.settings import Settings
from service.store.alerts import document_of
from service.store.judgements import Happened
from service.store.notices import OPENED, NoticeTold
from service.store.tables import Parcel, Scene, Webhook
from service.store.unseen import Unseen
from service.store.webhooks import Announcement, announce, announce_to, event_id_of
from service.webhooks.events import EventName, event_body


def announcement(
    settings: Settings,
    name: EventName,
    *,
    key: tuple[object, ...],
    subject: str,
    data: Mapping[str, Any],
    at: datetime,
    holding: str | None = None,
    severity: str | None = None,
) -> Announcement:
    """Return an event; `key` says what makes it the same event when worked out again."""
    event_id = event_id_of(name, *key)
    body = event_body(
        name,
        prefix=settings.event_prefix,
        source=settings.public_url or "/",
        event_id=event_id,
        occurred_at=at,
        subject=subject,
        data=data,
        droppable=("indices", "scenes", "departures", "crops"),
    )
    return Announcement(
        event_id=event_id,
        name=name,
        subject=subject,
        body=body,
        holding=holding,
        severity=severity,
    )


def announce_scene(
    session: Session, settings: Settings, row: Scene, *, at: datetime
) -> list[Promise]:
    """Tell that a scene is done or has failed; return the attempts that were promised."""
    name = EventName.SCENE_DONE if row.state == "done" else EventName.SCENE_FAILED
    report = row.report or {}
    told = announcement(
        settings,
        name,
        key=(row.ref, row.generation),
        subject=row.ref,
        data={
            "scene": row.ref,
            "state": row.state,
            "failure": row.failure,
            "link": f"{settings.public_url}/v1/scenes/{quote(row.ref, safe='')}",
            **{
                name: report.get(name)
                for name in ("parcels_in_footprint", "parcels_measured", "parcels_unseen")
            },
        },
        at=at,
    )
    return [promise_of(delivery, at=at) for delivery in announce(session, told, at=at)]


_EVENT_OF_CHANGE = {
    "opened": EventName.ALERT_OPENED,
    "closed": EventName.ALERT_CLOSED,
    "changed": EventName.ALERT_CHANGED,
    "retracted": EventName.ALERT_CHANGED,
}


def announce_alert(
    session: Session, settings: Settings, happened: Happened, *, at: datetime
) -> list[Promise]:
    """Tell what happened to an alert; return the attempts that were promised."""
    row = happened.row
    holding = row.parcel.holding.ref if row.parcel.holding else None
    told = announcement(
        settings,
        _EVENT_OF_CHANGE[happened.kind],
        key=(row.id, happened.number),
        subject=row.id,
        data={**document_of(row), "link": f"{settings.public_url}/v1/alerts/{row.id}"},
        at=at,
        holding=holding,
        severity=row.severity,
    )
    return [promise_of(delivery, at=at) for delivery in announce(session, told, at=at)]


def announce_notice(
    session: Session, settings: Settings, told: NoticeTold, *, at: datetime
) -> list[Promise]:
    """Tell that a regional notice opened or ended; return the attempts that were promised."""
    row = told.row
    closed_at = row.closed_at
    event = announcement(
        settings,
        EventName.REGION_OPENED if told.kind == OPENED else EventName.REGION_CLOSED,
        key=(row.id, told.kind, row.revision),
        subject=row.id,
        data={
            "id": row.id,
            "kind": row.kind,
            # Told in the order in which it happened, even if it is over by now.
            "state": "open" if told.kind == OPENED else row.state,
            "opened_at": row.opened_at.isoformat().replace("+00:00", "Z"),
            "closed_at": closed_at and closed_at.isoformat().replace("+00:00", "Z"),
            "measure": row.measure,
            "shift": round(row.shift, 4),
            "crops": row.crops,
            "link": f"{settings.public_url}/v1/notices/{row.id}",
            "caution": CAUTION,
        },
        at=at,
    )
    return [promise_of(delivery, at=at) for delivery in announce(session, event, at=at)]


def announce_unseen(
    session: Session, settings: Settings, parcel: Parcel, unseen: Unseen, *, at: datetime
) -> list[Promise]:
    """Tell that nobody has seen a parcel for a while; return the attempts that were promised."""
    last = unseen.last_look_at
    told = announcement(
        settings,
        EventName.PARCEL_UNSEEN,
        key=(parcel.ref, last),
        subject=parcel.ref,
        data={
            "parcel": parcel.ref,
            "holding": parcel.holding.ref if parcel.holding else None,
            "last_look_at": last and last.isoformat().replace("+00:00", "Z"),
            "passes": unseen.passes,
            "reasons": dict(unseen.reasons),
            "link": f"{settings.public_url}/v1/parcels/{quote(parcel.ref, safe='')}",
        },
        at=at,
        holding=parcel.holding.ref if parcel.holding else None,
    )
    return [promise_of(delivery, at=at) for delivery in announce(session, told, at=at)]


def announce_ping(
    session: Session, settings: Settings, webhook: Webhook, *, key: str, at: datetime
) -> list[Promise]:
    """Tell one receiver that it is reached."""
    told = announcement(
        settings,
        EventName.PING,
        key=(webhook.public_id, key),
        subject=webhook.public_id,
        data={"webhook": webhook.public_id},
        at=at,
    )
    return [promise_of(announce_to(session, webhook, told, at=at), at=at)]
