"""What handlers work with: the running service, and who is asking."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Annotated, Final, Protocol

from fastapi import Depends, Request, Security
from fastapi.security import HTTPAuthorizationCredentials, HTTPBearer

from service.clock import now
from service.errors import NotAllowed
from service.jobs.deliver import Promise
from service.jobs.resources import Resources
from service.settings import Settings
from service.store.keys import Scope, find_valid_key
from service.store.sessions import Sessions
from service.tiles.archive import Archive
from service.tiles.assets import Assets


class Queue(Protocol):
    """What handlers ask of the queue; each promise stands in the database already."""

    def promise(self, scene_id: int, generation: int) -> None:
        """Take up a scene's ingest."""

    def promise_deliveries(self, promises: Sequence[Promise]) -> None:
        """Take up attempts of deliveries."""

    def promise_import(self, job_id: str) -> None:
        """Take up an import of parcels."""

    def promise_rehearsal(self, job_id: str) -> None:
        """Take up a rehearsal."""

    def promise_judging(self) -> None:
        """Take up whatever judging is promised."""

    def problem(self) -> str | None:
        """Say what is wrong, None if nothing is."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Context:
    """The running service, as the handlers see it.

    Handlers open their own sessions, so that a write is committed before its answer is made.
    The queue takes committed promises of scenes, deliveries, imports, rehearsals and
    judging; the assets of STAC Items are fetched through `assets`.
    """

    work: Resources
    queue: Queue
    assets: Assets

    def promise(self, scene_id: int, generation: int) -> None:
        """Hand a scene's promised ingest to the queue."""
        self.queue.promise(scene_id, generation)

    def promise_deliveries(self, promises: Sequence[Promise]) -> None:
        """Hand promised attempts to the queue."""
        self.queue.promise_deliveries(promises)

    def promise_import(self, job_id: str) -> None:
        """Hand a promised import of parcels to the queue."""
        self.queue.promise_import(job_id)

    def promise_rehearsal(self, job_id: str) -> None:
        """Hand a promised rehearsal to the queue."""
        self.queue.promise_rehearsal(job_id)

    def promise_judging(self) -> None:
        """Hand promised judging to the queue."""
        self.queue.promise_judging()

    def queue_problem(self) -> str | None:
        """Return what is wrong with the queue, None if nothing is."""
        return self.queue.problem()

    @property
    def settings(self) -> Settings:
        """The deployment's settings."""
        return self.work.settings

    @property
    def sessions(self) -> Sessions:
        """Sessions on the service's own database."""
        return self.work.sessions

    @property
    def archive(self) -> Archive:
        """The archive of scene files."""
        return self.work.archive


def _context(request: Request) -> Context:
    context: Context = request.app.state.context
    return context


Ctx = Annotated[Context, Depends(_context)]


@dataclass(frozen=True, slots=True, kw_only=True)
class Caller:
    """Who is asking: a valid key's rights.

    `holdings` None means all of them.
    """

    key_id: int
    label: str
    scopes: frozenset[str]
    holdings: frozenset[str] | None
    expires_at: datetime | None

    def must_see_all(self, what: str) -> None:
        """Refuse a key that is limited to holdings.

        Raises
        ------
        NotAllowed
            The key is limited, and the thing concerns every holding.
        """
        if self.holdings is not None:
            raise NotAllowed(
                "key-limited",
                f"This key is limited to holdings, and {what} concerns all of them. Use a key "
                "without that limit.",
            )


_BEARER: Final = HTTPBearer(
    auto_error=False, description="A key, from `furrowlight keys create` or `POST /v1/keys`."
)


def _caller(
    context: Ctx, sent: Annotated[HTTPAuthorizationCredentials | None, Security(_BEARER)]
) -> Caller:
    if sent is None:
        raise NotAllowed(
            "no-key",
            "Send a key as `Authorization: Bearer <key>`; the operator makes one with "
            "`furrowlight keys create`.",
        )
    with context.sessions.reading() as session:
        row = find_valid_key(session, sent.credentials, at=now())
    if row is None:
        raise NotAllowed("unknown-key", "This key is unknown, has expired or was revoked.")
    return Caller(
        key_id=row.id,
        label=row.label,
        scopes=frozenset(row.scopes),
        holdings=None if row.holdings is None else frozenset(row.holdings),
        expires_at=row.expires_at,
    )


def require(scope: Scope) -> Callable[[Caller], Caller]:
    """Return the dependency that lets only keys with this scope pass."""

    def check(caller: Annotated[Caller, Depends(_caller)]) -> Caller:
        if scope not in caller.scopes:
            raise NotAllowed(
                "scope-missing", f"This key lacks the scope `{scope}`. Use one that has it."
            )
        return caller

    return check


Known = Annotated[Caller, Depends(_caller)]
Reader = Annotated[Caller, Depends(require(Scope.READ))]
Ingester = Annotated[Caller, Depends(require(Scope.INGEST))]
Steward = Annotated[Caller, Depends(require(Scope.MANAGE))]
Triager = Annotated[Caller, Depends(require(Scope.TRIAGE))]
Admin = Annotated[Caller, Depends(require(Scope.ADMIN))]
