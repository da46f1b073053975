"""Whether the service is up, and whether it can work."""

import structlog
from fastapi import APIRouter
from sqlalchemy import select
from sqlalchemy.exc import SQLAlchemyError

from service.api.context import Ctx
from service.errors import Unavailable
from service.store.sessions import is_migrated

router = APIRouter(tags=["health"])
_log = structlog.get_logger()


@router.get("/healthz")
def is_up() -> dict[str, str]:
    """Answer while the process is up."""
    return {"status": "up"}


@router.get("/readyz")
def is_ready(context: Ctx) -> dict[str, str]:
    """Answer 200 while the service can work, else 503 with what is wrong."""
    wrong = [_database(context), context.queue_problem(), _disk(context)]
    found = [problem for problem in wrong if problem is not None]
    if found:
        raise Unavailable("not-ready", " ".join(found))
    return {"status": "ready"}


def _database(context: Ctx) -> str | None:
    try:
        with context.sessions.reading() as session:
            session.execute(select(1))
        is_current = is_migrated(context.sessions.engine)
    except SQLAlchemyError:
        _log.exception("database not reachable")
        return "The database is not reachable."
    return None if is_current else "The database is not migrated to this release."


def _disk(context: Ctx) -> str | None:
    is_low = context.archive.free_bytes() < context.settings.disk_reserve_bytes
    return "The data folder's disk is below its reserve." if is_low else None
