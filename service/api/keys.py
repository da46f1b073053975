"""Keys: made, listed and revoked."""

from itertools import islice
from typing import Annotated

from fastapi import Request, Response
from pydantic import BaseModel, Field

from service.api.context import Admin, Caller, Ctx
from service.api.once import OnceOnly, json_answer
from service.api.paging import Cursor, Limit, link_next, place_in
from service.api.routes import contract_router
from service.api.wire import Instant, InstantOut, Ref, Sent, Text
from service.clock import now
from service.errors import Conflict, NotAllowed, RejectedInput
from service.store.keys import Scope, add_key, list_keys, revoke_key
from service.store.tables import ApiKey

router = contract_router("/keys", "keys")


class KeySent(Sent):
    """What a new key is for and what it may do."""

    label: Text
    scopes: Annotated[list[Scope], Field(min_length=1, max_length=5)]
    holdings: Annotated[list[Ref], Field(min_length=1, max_length=1000)] | None = None
    expires_at: Instant | None = None


class KeyOut(BaseModel):
    """A key without its secret."""

    id: str
    label: str
    scopes: list[str]
    holdings: list[str] | None
    created_at: InstantOut
    expires_at: InstantOut | None
    revoked_at: InstantOut | None


class NewKeyOut(KeyOut):
    """A key with its secret, which is shown this once."""

    secret: str


class KeysOut(BaseModel):
    """A page of keys."""

    keys: list[KeyOut]


def _members(row: ApiKey) -> KeyOut:
    return KeyOut(
        id=row.public_id,
        label=row.label,
        scopes=row.scopes,
        holdings=row.holdings,
        created_at=row.created_at,
        expires_at=row.expires_at,
        revoked_at=row.revoked_at,
    )


@router.post("", status_code=201, response_model=NewKeyOut)
def make_key(sent: KeySent, caller: Admin, context: Ctx, once: OnceOnly) -> Response:
    """Make a key; its secret is in this answer and nowhere else."""
    _check_width(sent, caller)
    at = now()
    if sent.expires_at is not None and sent.expires_at <= at:
        raise RejectedInput.at("/expires_at", "This is past; a key must expire in the future.")
    fingerprint = sent.model_dump_json()
    with context.sessions.writing() as session:
        if once.replay(session, caller, fingerprint) is not None:
            # The secret is stored nowhere, so the first answer can't be given again.
            raise Conflict(
                "secret-shown",
                "This request made a key already and showed its secret; no second one was made.",
            )
        row, secret = add_key(
            session,
            label=sent.label,
            scopes=sent.scopes,
            holdings=sent.holdings,
            expires_at=sent.expires_at,
            created_at=at,
        )
        made = _members(row)
        once.keep(session, caller, fingerprint, json_answer(made, 201))
    return json_answer(NewKeyOut(**made.model_dump(), secret=secret), 201)


def _check_width(sent: KeySent, caller: Caller) -> None:
    """Refuse to make a key that may do more than the one that asks."""
    wider = sorted(set(sent.scopes) - caller.scopes)
    if wider:
        raise NotAllowed(
            "key-too-wide", f"Your own key lacks {', '.join(wider)}, so it can't give it."
        )
    if caller.expires_at is not None and (
        sent.expires_at is None or sent.expires_at > caller.expires_at
    ):
        raise NotAllowed(
            "key-too-wide",
            "Your own key expires; give `expires_at`, no later than your own.",
        )
    if caller.holdings is not None and not set(sent.holdings or ["*"]) <= caller.holdings:
        raise NotAllowed(
            "key-too-wide",
            "Your own key is limited to holdings; name some of those in `holdings`.",
        )


@router.get("")
def get_keys(
    caller: Admin,
    context: Ctx,
    request: Request,
    response: Response,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> KeysOut:
    """List keys without their secrets."""
    place = place_in(cursor, int)
    with context.sessions.reading() as session:
        found = list_keys(session, holdings=caller.holdings, after_id=place[0] if place else 0)
        rows = list(islice(found, limit + 1))
    if len(rows) > limit:
        link_next(request, response, rows[limit - 1].id)
    return KeysOut(keys=[_members(row) for row in rows[:limit]])


@router.delete("/{key_id}")
def delete_key(key_id: str, caller: Admin, context: Ctx) -> KeyOut:
    """Revoke a key at once."""
    with context.sessions.writing() as session:
        row = revoke_key(session, key_id, at=now(), holdings=caller.holdings)
        return _members(row)
