"""Importing a large file of parcels: read with no session open, kept in one transaction."""

import time
from typing import Any, Final

import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy.exc import OperationalError
from sqlalchemy.orm import Session

from service.clock import now
from service.errors import MAX_ERRORS, FurrowlightError, Unavailable
from service.jobs import assess, ingest
from service.jobs.parcel_files import Asked, whole_batch
from service.jobs.resources import Resources, resources
from service.store.job_tables import Job
from service.store.jobs import JobState, lock_job
from service.store.parcel_batches import Kept, ParcelBatch, keep_parcels

QUEUE: Final = "import"
KIND: Final = "parcels-import"
_SECONDS_BETWEEN_NEWS: Final = 1.0
_READ: Final = 0.8
"""Share of the work that is reading and checking; keeping is the rest."""
_log = structlog.get_logger()


def workflow_id(public_id: str) -> str:
    """Return the id that makes promising the same job twice one piece of work."""
    return f"import:{public_id}"


def enqueue(public_id: str) -> None:
    """Hand a promised job to the queue; doing so again attaches to the first."""
    with SetWorkflowID(workflow_id(public_id)):
        DBOS.enqueue_workflow(QUEUE, import_parcels, public_id)


# As with scenes: three crashes of the process in the same job are no coincidence.
@DBOS.workflow(name="import_parcels", max_recovery_attempts=2)
def import_parcels(public_id: str) -> str:
    """Import a file of parcels; return the job's state, or ``left`` if it had ended already."""
    structlog.contextvars.bind_contextvars(job_id=public_id)
    try:
        outcome = import_file(public_id)
    except Exception:  # noqa: BLE001 - a bug of ours is logged, and told on the job
        _log.exception("import failed")
        outcome = {"state": give_up(public_id), "promises": []}
    finally:
        structlog.contextvars.unbind_contextvars("job_id")
    # Should the process die before this, the sweep does it.
    for scene_id, generation in outcome["promises"]:
        ingest.enqueue(scene_id, generation)
    assess.enqueue_wanted(resources())
    state: str = outcome["state"]
    return state


def _worth_retrying(error: BaseException) -> bool:
    return isinstance(error, Unavailable | OperationalError)


@DBOS.step(name="import_file", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying)
def import_file(public_id: str) -> dict[str, Any]:
    """Read the file and keep its parcels; the job is done in the transaction that has them.

    Repeated after a crash it starts anew, or finds the job done.
    """
    work = resources()
    job = _begin(work, public_id)
    if job is None:
        return {"state": "left", "promises": []}
    asked = Asked(**job.asked)
    news = _News(work, public_id)
    try:
        batch = whole_batch(work.archive.path_of(job.digest), asked, work.settings, tell=news.tell)
        kept = _kept(work, job, asked, batch)
    except Unavailable:
        raise
    except FurrowlightError as error:
        faults = [fault.as_dict() for fault in error.faults]
        failure = {
            "code": error.code,
            "detail": error.detail,
            "errors": faults[:MAX_ERRORS],
            "errors_total": len(faults),
        }
        return {"state": fail(public_id, failure), "promises": []}
    if kept is None:
        return {"state": "left", "promises": []}
    _log.info("parcels imported", created=kept.created, dry_run=asked.dry_run)
    return {"state": JobState.DONE.value, "promises": [] if asked.dry_run else kept.promises}


class _News:
    """Tells on the job's row how far reading has come, not more than once a second."""

    def __init__(self, work: Resources, public_id: str) -> None:
        self._work = work
        self._public_id = public_id
        self._told_at = time.monotonic()

    def tell(self, share: float) -> None:
        """Note which share of the file is read."""
        if time.monotonic() - self._told_at < _SECONDS_BETWEEN_NEWS:
            return
        with self._work.sessions.writing() as session:
            row = lock_job(session, self._public_id)
            if row is not None:
                row.progress = round(share * _READ, 3)
                row.changed_at = now()
        self._told_at = time.monotonic()


def _begin(work: Resources, public_id: str) -> Job | None:
    """Say that the work is being done; return the job unless it has ended."""
    with work.sessions.writing() as session:
        row = lock_job(session, public_id)
        if row is None:
            return None
        row.state = JobState.RUNNING
        row.changed_at = now()
        session.flush()
        session.expunge(row)
        return row


def _kept(work: Resources, job: Job, asked: Asked, batch: ParcelBatch) -> Kept | None:
    """Keep the parcels and end the job in one transaction; None if it has ended already.

    A dry run keeps them in a transaction that is rolled back.
    """

    def keep(session: Session) -> Kept:
        return keep_parcels(
            session,
            batch,
            holdings=None if job.holdings is None else frozenset(job.holdings),
            season_starts=work.settings.season_starts,
            is_lenient=asked.is_lenient,
            at=now(),
        )

    foreseen = None
    if asked.dry_run:
        with work.sessions.trying() as session:
            foreseen = keep(session)
    with work.sessions.writing() as session:
        row = lock_job(session, job.public_id)
        if row is None:
            return None
        kept = foreseen or keep(session)
        row.state = JobState.DONE
        row.progress = 1.0
        row.result = {**kept.told(), "dry_run": asked.dry_run}
        row.changed_at = now()
    return kept


@DBOS.step(
    name="give_up_import", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying
)
def give_up(public_id: str) -> str:
    """Fail a job for a fault of our own."""
    return fail(public_id, INTERNAL_FAILURE)


INTERNAL_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service failed while importing this file; its log has the reason. Nothing was "
    "kept. Send the file again once the cause is mended.",
    "errors": [],
    "errors_total": 0,
}
CRASHED_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service ended three times while it was importing this file, perhaps for want "
    "of memory. Nothing was kept. Send it in parts.",
    "errors": [],
    "errors_total": 0,
}


def fail(public_id: str, failure: dict[str, Any]) -> str:
    """Keep on the job why it failed, unless it came to an end."""
    with resources().sessions.writing() as session:
        row = lock_job(session, public_id)
        if row is None:
            return "left"
        row.state = JobState.FAILED
        row.failure = failure
        row.changed_at = now()
    _log.warning("import refused", code=failure["code"])
    return JobState.FAILED.value
