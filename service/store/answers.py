"""First answers to requests with an Idempotency-Key."""

import hashlib
from collections.abc import Mapping
from datetime import datetime, timedelta
from typing import Final

from sqlalchemy import delete
from sqlalchemy.orm import Session

from service.errors import RejectedInput
from service.store.sessions import serialise
from service.store.tables import Answer

KEPT_FOR: Final = timedelta(hours=24)


def first_answer(
    session: Session, *, api_key_id: int, name: str, fingerprint: str, at: datetime
) -> Answer | None:
    """Return the answer given before under this name, if it is not too old.

    Two requests of one name are made to wait for each other.

    Raises
    ------
    RejectedInput
        The name was used for another request.
    """
    serialise(session, f"answer {api_key_id} {name}")
    row = session.get(Answer, (api_key_id, _digest(name)))
    if row is None or row.recorded_at <= at - KEPT_FOR:
        return None
    if row.fingerprint != fingerprint:
        raise RejectedInput(
            "idempotency-key-reused",
            "This Idempotency-Key was used for another request within 24 hours. Use a new key "
            "for a new request, and the same one only to repeat the same request.",
        )
    return row


def keep_answer(
    session: Session,
    *,
    api_key_id: int,
    name: str,
    fingerprint: str,
    status: int,
    headers: Mapping[str, str],
    body: bytes,
    at: datetime,
) -> None:
    """Keep an answer, in the transaction of the work that it tells of."""
    session.merge(
        Answer(
            api_key_id=api_key_id,
            name=_digest(name),
            fingerprint=fingerprint,
            status=status,
            headers=dict(headers),
            body=body,
            recorded_at=at,
        )
    )


def forget_old_answers(session: Session, *, at: datetime) -> None:
    """Drop answers older than they need to be."""
    session.execute(delete(Answer).where(Answer.recorded_at <= at - KEPT_FOR))


def _digest(name: str) -> str:
    return hashlib.sha256(name.encode()).hexdigest()
