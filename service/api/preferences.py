"""What callers prefer (RFC 7240): to have good items land alone, to have the answer held."""

from collections.abc import Callable
from typing import Annotated, Final

import anyio
from fastapi import Depends, Request
from sqlalchemy import select
from starlette.concurrency import run_in_threadpool

from service.api.context import Context
from service.store.job_tables import Job
from service.store.jobs import UNFINISHED
from service.store.judging import is_judging_wanted
from service.store.scenes import SceneState
from service.store.tables import Scene

MAX_WAIT_SECONDS: Final = 60.0
_POLL_SECONDS: Final = 0.05
_UNSETTLED: Final = (SceneState.QUEUED, SceneState.RUNNING)


def preferences_of(request: Request) -> dict[str, str]:
    """Return the preferences of a request by name; an empty value where none is given."""
    found = {}
    for entry in ",".join(request.headers.getlist("Prefer")).split(","):
        name, _, value = entry.partition(";")[0].partition("=")
        found[name.strip().lower()] = value.strip().strip('"').lower()
    return found


def _wait_seconds(request: Request) -> float:
    value = preferences_of(request).get("wait", "")
    return min(float(value), MAX_WAIT_SECONDS) if value.isdecimal() else 0.0


Wait = Annotated[float, Depends(_wait_seconds)]
"""For how many seconds the caller is ready to wait for the work to be done."""


async def is_settled(context: Context, ref: str, seconds: float) -> bool:
    """Wait until a scene's work is done or has failed; return whether that came in time."""
    return await _comes_true(lambda: _has_ended(context, ref), seconds)


async def is_finished(context: Context, job_id: str, seconds: float) -> bool:
    """Wait until a job is done or has failed; return whether that came in time."""
    return await _comes_true(lambda: _job_has_ended(context, job_id), seconds)


async def is_judged(context: Context, seconds: float) -> bool:
    """Wait until no judging is promised; return whether that came in time."""
    return await _comes_true(lambda: _nothing_wanted(context), seconds)


async def _comes_true(holds: Callable[[], bool], seconds: float) -> bool:
    with anyio.move_on_after(seconds):
        while not await run_in_threadpool(holds):
            await anyio.sleep(_POLL_SECONDS)
        return True
    return False


def _nothing_wanted(context: Context) -> bool:
    with context.sessions.reading() as session:
        return not is_judging_wanted(session)


def _job_has_ended(context: Context, job_id: str) -> bool:
    with context.sessions.reading() as session:
        return session.scalar(select(Job.state).where(Job.public_id == job_id)) not in UNFINISHED


def _has_ended(context: Context, ref: str) -> bool:
    with context.sessions.reading() as session:
        return session.scalar(select(Scene.state).where(Scene.ref == ref)) not in _UNSETTLED
