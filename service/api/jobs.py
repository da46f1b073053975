"""Jobs: how far work is that takes longer than a request, and what came of it."""

from typing import Any, Final

from pydantic import BaseModel
from starlette.concurrency import run_in_threadpool

from service.api.context import Caller, Context, Ctx, Known
from service.api.preferences import Wait, is_finished
from service.api.problems import problem_document, status_of
from service.api.routes import contract_router
from service.api.wire import InstantOut
from service.errors import RejectedInput
from service.store.job_tables import Job
from service.store.jobs import JobState, get_job, job_not_found
from service.store.keys import Scope

router = contract_router("/jobs", "jobs")
_ERRORS: Final = "errors_total"


class JobOut(BaseModel):
    """A job: `result` is what the request would have been answered, had it been done at once."""

    id: str
    kind: str
    state: JobState
    progress: float
    failure: dict[str, Any] | None
    result: dict[str, Any] | None
    created_at: InstantOut
    changed_at: InstantOut


def address_of(public_id: str) -> str:
    """Return the address of a job."""
    return f"/v1/jobs/{public_id}"


def job_out(row: Job) -> JobOut:
    """Return a job as answered."""
    return JobOut(
        id=row.public_id,
        kind=row.kind,
        state=JobState(row.state),
        progress=row.progress,
        failure=_failure(row),
        result=row.result,
        created_at=row.created_at,
        changed_at=row.changed_at,
    )


def _failure(row: Job) -> dict[str, Any] | None:
    """Return the problem document that the request would have got."""
    if row.failure is None:
        return None
    code = row.failure["code"]
    document = problem_document(
        code,
        row.failure["detail"],
        status=status_of(code, RejectedInput),
        instance=address_of(row.public_id),
        errors=row.failure["errors"],
    )
    return document | ({_ERRORS: row.failure[_ERRORS]} if _ERRORS in document else {})


@router.get("/{job_id}")
async def get_one_job(job_id: str, caller: Known, context: Ctx, wait: Wait) -> JobOut:
    """Answer a job of this key's own, or, with the scope `read`, one of the key's holdings."""
    job = await run_in_threadpool(read_job, job_id, caller, context)
    if not wait or job.state in (JobState.DONE, JobState.FAILED):
        return job
    await is_finished(context, job_id, wait)
    return await run_in_threadpool(read_job, job_id, caller, context)


def read_job(job_id: str, caller: Caller, context: Context) -> JobOut:
    """Return a job that the caller may see.

    Raises
    ------
    NotFound
        There is none, or it is another's.
    """
    with context.sessions.reading() as session:
        row = get_job(session, job_id)
        if not _may_see(caller, row):
            raise job_not_found()
        return job_out(row)


def _may_see(caller: Caller, row: Job) -> bool:
    if row.api_key_id == caller.key_id:
        return True
    is_within = caller.holdings is None or (
        row.holdings is not None and set(row.holdings) <= caller.holdings
    )
    return Scope.READ in caller.scopes and is_within
