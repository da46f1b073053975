"""A rehearsal as it is told, at once or as a job."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from datetime import datetime
from typing import Any, Final

import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy import func, select
from sqlalchemy.exc import OperationalError
from sqlalchemy.orm import Session

from service.alerts.alert import CAUTION, Alert
from service.alerts.rules import Rule
from service.clock import now
from service.errors import Unavailable
from service.jobs.rehearsal import Rehearsed, rehearse
from service.jobs.resources import Resources, resources
from service.store.alerts import VERDICTS
from service.store.jobs import JobState, lock_job
from service.store.rules import rule_from
from service.store.tables import Parcel, Scene
from service.store.verdicts import Spoken, verdicts_on

QUEUE: Final = "rehearsal"
KIND: Final = "rehearsal"
AT_ONCE: Final = 50_000
"""So many looks, past ones included, are rehearsed while the caller waits."""
_LISTED: Final = 1_000
_log = structlog.get_logger()


def looks_to_read(session: Session, until: datetime) -> int:
    """Return about how many looks a rehearsal has to read: parcels times scenes so far."""
    parcels = session.scalar(select(func.count()).select_from(Parcel)) or 0
    scenes = select(func.count()).select_from(Scene).where(Scene.acquired_at < until)
    return parcels * (session.scalar(scenes) or 0)


def rehearsal(work: Resources, rule: Rule, since: datetime, until: datetime) -> dict[str, Any]:
    """Rehearse a rule; return what is told of it."""
    with work.sessions.reading() as session:
        starts = work.settings.season_starts
        found = rehearse(session, rule, since=since, until=until, starts=starts)
        spoken = verdicts_on(session, {alarm.parcel for alarm in found.alarms})
    return _told(found, spoken, since, until)


def _told(
    found: Rehearsed,
    spoken: Mapping[str, Sequence[Spoken]],
    since: datetime,
    until: datetime,
) -> dict[str, Any]:
    verdicts = [_verdict(alarm, spoken.get(alarm.parcel, ())) for alarm in found.alarms]
    weeks = found.parcel_weeks
    return {
        "from": _written(since),
        "to": _written(until),
        "alarms_total": len(found.alarms),
        "held_back": found.held_back,
        "parcel_weeks": round(weeks, 1),
        "alarms_per_1000_parcel_weeks": 1_000 * len(found.alarms) / weeks if weeks else None,
        "verdicts": _counted(verdicts),
        "seasons": [asdict(season) for season in found.seasons],
        "by_crop_and_month": _by_crop_and_month(found.alarms, verdicts),
        "alarms": [
            _alarm(alarm, verdict)
            for alarm, verdict in zip(found.alarms[:_LISTED], verdicts, strict=False)
        ],
        "caution": CAUTION,
    }


def _verdict(alarm: Alert, spoken: Sequence[Spoken]) -> str | None:
    """Return what a person said of this very alarm, or of the parcel at the time."""
    own = [each.verdict for each in spoken if each.alert_id == alarm.id]
    near = [s.verdict for s in spoken if s.meets(alarm.first_departure_at, alarm.closed_at)]
    return next(iter([*own, *near]), None)


def _counted(verdicts: Sequence[str | None]) -> dict[str, int]:
    counts = Counter(verdicts)
    return {verdict: counts[verdict] for verdict in VERDICTS}


def _by_crop_and_month(
    alarms: Sequence[Alert], verdicts: Sequence[str | None]
) -> list[dict[str, Any]]:
    groups: dict[tuple[str, str], list[str | None]] = {}
    for alarm, verdict in zip(alarms, verdicts, strict=True):
        groups.setdefault((alarm.crop, f"{alarm.opened_at:%Y-%m}"), []).append(verdict)
    return [
        {"crop": crop or None, "month": month, "alarms": len(said), "verdicts": _counted(said)}
        for (crop, month), said in sorted(groups.items())
    ]


def _alarm(alarm: Alert, verdict: str | None) -> dict[str, Any]:
    return {
        "id": alarm.id,
        "parcel": alarm.parcel,
        "crop": alarm.crop or None,
        "opened_at": _written(alarm.opened_at),
        "closed_at": None if alarm.closed_at is None else _written(alarm.closed_at),
        "index": alarm.index,
        "score": round(alarm.score, 2),
        "severity": alarm.severity,
        "cause": alarm.cause.kind,
        "verdict": verdict,
    }


def _written(instant: datetime) -> str:
    return instant.isoformat().replace("+00:00", "Z")


def workflow_id(public_id: str) -> str:
    """Return the id that makes promising the same job twice one piece of work."""
    return f"rehearsal:{public_id}"


def enqueue(public_id: str) -> None:
    """Hand a promised job to the queue; doing so again attaches to the first."""
    with SetWorkflowID(workflow_id(public_id)):
        DBOS.enqueue_workflow(QUEUE, rehearse_rule, public_id)


@DBOS.workflow(name="rehearse_rule", max_recovery_attempts=2)
def rehearse_rule(public_id: str) -> str:
    """Rehearse a rule; return the job's state, or ``left`` if it had ended already."""
    structlog.contextvars.bind_contextvars(job_id=public_id)
    try:
        return rehearse_promised(public_id)
    except Exception:  # noqa: BLE001 - a bug of ours is logged, and told on the job
        _log.exception("rehearsal failed")
        return give_up(public_id)
    finally:
        structlog.contextvars.unbind_contextvars("job_id")


def _worth_retrying(error: BaseException) -> bool:
    return isinstance(error, Unavailable | OperationalError)


@DBOS.step(
    name="rehearse_promised", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying
)
def rehearse_promised(public_id: str) -> str:
    """Rehearse what a job asks for; what it gave is kept with the job, and raises nothing."""
    work = resources()
    with work.sessions.writing() as session:
        row = lock_job(session, public_id)
        if row is None:
            return "left"
        row.state = JobState.RUNNING
        row.changed_at = now()
        asked = dict(row.asked)
    result = rehearsal(
        work,
        rule_from(asked["id"], asked["rule"]),
        datetime.fromisoformat(asked["from"]),
        datetime.fromisoformat(asked["to"]),
    )
    with work.sessions.writing() as session:
        row = lock_job(session, public_id)
        if row is None:
            return "left"
        row.state = JobState.DONE
        row.progress = 1.0
        row.result = result
        row.changed_at = now()
    return JobState.DONE.value


@DBOS.step(
    name="give_up_rehearsal", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying
)
def give_up(public_id: str) -> str:
    """Fail a job for a fault of our own."""
    return fail(public_id, INTERNAL_FAILURE)


INTERNAL_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service failed while rehearsing this rule; its log has the reason. Ask again "
    "once the cause is mended.",
    "errors": [],
    "errors_total": 0,
}
CRASHED_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service ended three times while it was rehearsing this rule, perhaps for want "
    "of memory. Ask for a shorter interval.",
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
    return JobState.FAILED.value
