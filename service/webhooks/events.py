"""Event bodies: CloudEvents 1.0 in structured JSON, under 20 kB."""

import json
import re
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from enum import StrEnum
from typing import Any, Final

CONTENT_TYPE: Final = "application/cloudevents+json"
MAX_BODY_BYTES: Final = 20_000
OMITTED: Final = "omitted"

# Reverse DNS: at least two labels, in lower case.
PREFIX_PATTERN: Final = r"[a-z][a-z0-9-]*(\.[a-z0-9-]+)+"


class EventName(StrEnum):
    """What a webhook can be told."""

    ALERT_OPENED = "alert.opened"
    ALERT_CHANGED = "alert.changed"
    ALERT_CLOSED = "alert.closed"
    REGION_OPENED = "region.opened"
    REGION_CLOSED = "region.closed"
    PARCEL_UNSEEN = "parcel.unseen"
    SCENE_DONE = "scene.done"
    SCENE_FAILED = "scene.failed"
    PING = "ping"


def event_body(
    name: EventName,
    *,
    prefix: str,
    source: str,
    event_id: str,
    occurred_at: datetime,
    subject: str,
    data: Mapping[str, Any],
    droppable: Sequence[str] = (),
) -> bytes:
    """Return the body of an event as it is signed and sent.

    Parameters
    ----------
    prefix
        Reverse DNS name before the event's name in ``type``: ``org.example.fields``.
    source
        URI reference of this deployment.
    event_id
        The same at every attempt, so that receivers can drop repeats.
    subject
        What the event is about: an alert's or a scene's id.
    data
        JSON object with links to the rest.
    droppable
        Members of `data` that may go, in this order, until the body is under 20 kB; those
        that went are named in its member ``omitted``.
    """
    if not re.fullmatch(PREFIX_PATTERN, prefix):
        raise ValueError("The prefix of event types is a domain name written backwards.")
    if not (source and event_id and subject):
        raise ValueError("Source, id and subject of an event must not be empty.")
    envelope = {
        "specversion": "1.0",
        "id": event_id,
        "source": source,
        "type": f"{prefix}.{name}",
        "time": _rfc3339(occurred_at),
        "subject": subject,
        "datacontenttype": "application/json",
    }
    return _fitted(envelope, data, droppable)


def _fitted(envelope: Mapping[str, Any], data: Mapping[str, Any], order: Sequence[str]) -> bytes:
    """Drop members of the data until the body fits."""
    kept = dict(data)
    body = _as_json({**envelope, "data": kept})
    gone: list[str] = []
    for member in order:
        if len(body) < MAX_BODY_BYTES:
            break
        if member in kept:
            del kept[member]
            gone.append(member)
            body = _as_json({**envelope, "data": {**kept, OMITTED: gone}})
    if len(body) >= MAX_BODY_BYTES:
        raise ValueError("An event is too long; say which of its members may be left out.")
    return body


def _as_json(value: Mapping[str, Any]) -> bytes:
    # NaN is no JSON; a figure that is not known is null.
    text = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    # Half a surrogate pair is no character; JSON from elsewhere may hold one all the same.
    return text.encode("utf-8", errors="replace")


def _rfc3339(instant: datetime) -> str:
    if instant.tzinfo is None:
        raise ValueError("The time of an event needs its offset from UTC.")
    return instant.astimezone(UTC).isoformat().replace("+00:00", "Z")
