"""API keys: rights by the SHA-256 of a secret."""

import hashlib
import secrets
from collections.abc import Collection, Iterator, Sequence
from datetime import datetime
from enum import StrEnum
from typing import Final

from sqlalchemy import select
from sqlalchemy.orm import Session

from service.errors import NotFound
from service.store.tables import ApiKey

SECRET_PREFIX: Final = "flk_"  # noqa: S105 - what secrets begin with
"""Recognisable, so that secret scanners and log redaction catch a leaked key."""


class Scope(StrEnum):
    """What a key may do."""

    READ = "read"
    INGEST = "ingest"
    TRIAGE = "triage"
    MANAGE = "manage"
    ADMIN = "admin"


def digest_of(secret: str) -> str:
    """Return what is stored of a secret: 256 random bits need no slow hash."""
    return hashlib.sha256(secret.encode()).hexdigest()


def add_key(
    session: Session,
    *,
    label: str,
    scopes: Sequence[str],
    holdings: Sequence[str] | None,
    expires_at: datetime | None,
    created_at: datetime,
) -> tuple[ApiKey, str]:
    """Add a key; return its row and the secret, which is nowhere else."""
    secret = SECRET_PREFIX + secrets.token_urlsafe(32)
    row = ApiKey(
        public_id="key_" + secrets.token_hex(8),
        label=label,
        digest=digest_of(secret),
        scopes=sorted(set(scopes)),
        holdings=None if holdings is None else sorted(set(holdings)),
        created_at=created_at,
        expires_at=expires_at,
        revoked_at=None,
    )
    session.add(row)
    session.flush()
    return row, secret


def find_valid_key(session: Session, secret: str, *, at: datetime) -> ApiKey | None:
    """Return the key with this secret, unless it is revoked or has expired."""
    row = session.scalar(select(ApiKey).where(ApiKey.digest == digest_of(secret)))
    if row is None or row.revoked_at is not None:
        return None
    return None if row.expires_at is not None and row.expires_at <= at else row


def list_keys(
    session: Session, *, holdings: Collection[str] | None, after_id: int
) -> Iterator[ApiKey]:
    """Yield the keys within some holdings (None: all), oldest first, revoked ones included."""
    query = select(ApiKey).where(ApiKey.id > after_id).order_by(ApiKey.id)
    return (row for row in session.scalars(query) if _is_within(row, holdings))


def _is_within(row: ApiKey, holdings: Collection[str] | None) -> bool:
    return holdings is None or (row.holdings is not None and set(row.holdings) <= set(holdings))


def revoke_key(
    session: Session, public_id: str, *, holdings: Collection[str] | None, at: datetime
) -> ApiKey:
    """Revoke a key at once; revoking it again changes nothing.

    Raises
    ------
    NotFound
        No key has this id, or it is not within the holdings (None: all).
    """
    row = session.scalar(select(ApiKey).where(ApiKey.public_id == public_id))
    if row is None or not _is_within(row, holdings):
        raise NotFound("key-not-found", "There is no key with this id.")
    if row.revoked_at is None:
        row.revoked_at = at
    return row
