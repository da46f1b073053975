"""Jobs: work that takes longer than a request, how far it is, what came of it."""

import secrets
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any

from sqlalchemy import delete, select
from sqlalchemy.orm import Session

from service.errors import NotFound
from service.store.job_tables import Job
from service.store.sessions import serialise


class JobState(StrEnum):
    """How far a job has come."""

    QUEUED = "queued"
    RUNNING = "running"
    DONE = "done"
    FAILED = "failed"


UNFINISHED = (JobState.QUEUED, JobState.RUNNING)


@dataclass(frozen=True, slots=True, kw_only=True)
class JobSent:
    """Work as it was asked for, its file in the archive already."""

    kind: str
    api_key_id: int
    holdings: Collection[str] | None
    asked: Mapping[str, Any]
    digest: str
    fingerprint: str


def promise_job(session: Session, sent: JobSent, *, at: datetime) -> Job:
    """Promise work, or return the same key's same work that has not ended yet."""
    serialise(session, "jobs")
    row = session.scalar(
        select(Job).where(
            Job.api_key_id == sent.api_key_id,
            Job.fingerprint == sent.fingerprint,
            Job.state.in_(UNFINISHED),
        )
    )
    if row is not None:
        return row
    row = Job(
        public_id=f"job_{secrets.token_hex(8)}",
        kind=sent.kind,
        api_key_id=sent.api_key_id,
        holdings=None if sent.holdings is None else sorted(sent.holdings),
        asked=dict(sent.asked),
        digest=sent.digest,
        fingerprint=sent.fingerprint,
        state=JobState.QUEUED,
        progress=0.0,
        result=None,
        failure=None,
        created_at=at,
        changed_at=at,
    )
    session.add(row)
    session.flush()
    return row


def get_job(session: Session, public_id: str) -> Job:
    """Return the job with this id.

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.scalar(select(Job).where(Job.public_id == public_id))
    if row is None:
        raise job_not_found()
    return row


def job_not_found() -> NotFound:
    """Return the error for a job that is not there, or not for this key."""
    return NotFound("job-not-found", "There is no job with this id.")


def lock_job(session: Session, public_id: str) -> Job | None:
    """Return a job that has not ended, held until the transaction ends; None if it has."""
    row = session.scalar(
        select(Job)
        .where(Job.public_id == public_id)
        .with_for_update()
        .execution_options(populate_existing=True)
    )
    return row if row is not None and row.state in UNFINISHED else None


def unfinished_jobs(session: Session) -> Sequence[Job]:
    """Return the jobs that are promised or at work, oldest first."""
    return session.scalars(select(Job).where(Job.state.in_(UNFINISHED)).order_by(Job.id)).all()


def files_of_jobs(session: Session) -> set[str]:
    """Return the digests of the files that unfinished jobs work on."""
    return set(session.scalars(select(Job.digest).where(Job.state.in_(UNFINISHED)).distinct()))


def forget_old_jobs(session: Session, *, before: datetime) -> None:
    """Drop jobs that ended long ago."""
    session.execute(delete(Job).where(Job.state.not_in(UNFINISHED), Job.changed_at < before))
