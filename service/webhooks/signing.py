"""Signatures after the Standard Webhooks specification, version 1 (symmetric).

HMAC-SHA256 over ``id.timestamp.body`` with the secret's bytes, in base64 behind ``v1,``.
"""

import base64
import binascii
import hashlib
import hmac
import re
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, timedelta
from typing import Final

ID_HEADER: Final = "webhook-id"
TIMESTAMP_HEADER: Final = "webhook-timestamp"
SIGNATURE_HEADER: Final = "webhook-signature"

SECRET_PREFIX: Final = "whsec_"  # noqa: S105
SECRET_BYTES: Final = 32
OLD_SECRET_HOLDS: Final = timedelta(hours=24)
CLOCK_TOLERANCE: Final = timedelta(minutes=5)

# The specification's bounds on a secret.
_LEAST_SECRET_BYTES: Final = 24
_MOST_SECRET_BYTES: Final = 64
_SECONDS: Final = re.compile(r"[0-9]{1,12}")


def secret_of(chance: bytes) -> str:
    """Write random bytes, 24 to 64 of them, as a signing secret."""
    if not _LEAST_SECRET_BYTES <= len(chance) <= _MOST_SECRET_BYTES:
        raise ValueError(
            f"A signing secret has {_LEAST_SECRET_BYTES} to {_MOST_SECRET_BYTES} random bytes."
        )
    return SECRET_PREFIX + base64.b64encode(chance).decode("ascii")


def signature(secret: str, *, event_id: str, sent_at: datetime, body: bytes) -> str:
    """Return the signature of one message, ``v1,…``."""
    # The parts are joined by full stops, so a stop in the id could move the seams.
    if not event_id or "." in event_id:
        raise ValueError("The id of an event must be there, and hold no full stop.")
    signed = f"{event_id}.{_seconds(sent_at)}.".encode() + body
    digest = hmac.new(_key(secret), signed, hashlib.sha256).digest()
    return "v1," + base64.b64encode(digest).decode("ascii")


def signed_headers(
    secrets: Sequence[str], *, event_id: str, sent_at: datetime, body: bytes
) -> dict[str, str]:
    """Return the three headers of an attempt.

    While a secret is being replaced there are several; the message is signed with each,
    and a receiver accepts it if any signature fits.
    """
    if not secrets:
        raise ValueError("At least one secret is needed to sign.")
    signatures = [
        signature(secret, event_id=event_id, sent_at=sent_at, body=body) for secret in secrets
    ]
    return {
        ID_HEADER: event_id,
        TIMESTAMP_HEADER: str(_seconds(sent_at)),
        SIGNATURE_HEADER: " ".join(signatures),
    }


def is_genuine(secret: str, *, headers: Mapping[str, str], body: bytes, now: datetime) -> bool:
    """Return whether a message received just now was signed with the secret.

    `headers` have names in lower case. Older or newer than five minutes is refused, so
    that a recorded message can't be played again later.
    """
    event_id = headers.get(ID_HEADER, "")
    seconds = headers.get(TIMESTAMP_HEADER, "")
    if not event_id or "." in event_id or not _SECONDS.fullmatch(seconds):
        return False
    if abs(now.timestamp() - int(seconds)) > CLOCK_TOLERANCE.total_seconds():
        return False
    sent_at = datetime.fromtimestamp(int(seconds), tz=UTC)
    wanted = signature(secret, event_id=event_id, sent_at=sent_at, body=body).encode()
    given = headers.get(SIGNATURE_HEADER, "").split(" ")
    return any(hmac.compare_digest(wanted, one.encode()) for one in given)


def _key(secret: str) -> bytes:
    if not secret.startswith(SECRET_PREFIX):
        raise ValueError(f"A signing secret starts with {SECRET_PREFIX}.")
    try:
        key = base64.b64decode(secret.removeprefix(SECRET_PREFIX), validate=True)
    except binascii.Error as error:
        raise ValueError("A signing secret is base64 behind its prefix.") from error
    if not key:
        raise ValueError("A signing secret must not be empty.")
    return key


def _seconds(instant: datetime) -> int:
    """Return whole seconds since 1970; a naive time would be read in the machine's zone."""
    if instant.tzinfo is None:
        raise ValueError("The time of a message needs its offset from UTC.")
    return int(instant.timestamp() // 1)
