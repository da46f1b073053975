"""The ingest workflow: measure, judge, finish; or say why not."""

from typing import Any, Final

import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy.exc import OperationalError

from service.clock import now
from service.errors import FurrowlightError, Unavailable
from service.jobs.announce import announce_scene
from service.jobs.assess import enqueue_fresh_deliveries, judge
from service.jobs.measuring import measure_scene
from service.jobs.resources import resources
from service.jobs.unseen import tell_of_unseen
from service.store.alerts import count_opened_by
from service.store.scenes import SceneState, lock_scene

QUEUE: Final = "ingest"
_UNFINISHED: Final = (SceneState.QUEUED, SceneState.RUNNING)
_log = structlog.get_logger()


def workflow_id(scene_id: int, generation: int) -> str:
    """Return the id that makes promising the same work twice one piece of work."""
    return f"ingest:{scene_id}:{generation}"


def enqueue(scene_id: int, generation: int) -> None:
    """Hand a promised scene to the queue; doing so again attaches to the first."""
    with SetWorkflowID(workflow_id(scene_id, generation)):
        DBOS.enqueue_workflow(QUEUE, ingest, scene_id, generation)


# Three crashes of the process in the same scene are no coincidence: the sweep then fails it.
@DBOS.workflow(name="ingest", max_recovery_attempts=2)
def ingest(scene_id: int, generation: int) -> str:
    """Measure a scene and finish it; return its state, or ``left`` if it is another's by now."""
    structlog.contextvars.bind_contextvars(scene_id=scene_id, generation=generation)
    try:
        outcome = measure(scene_id, generation)
        if outcome == "measured":
            outcome = finish(scene_id, generation, judge())
    except Exception:  # noqa: BLE001 - a bug of ours is logged, and told on the scene
        _log.exception("ingest failed")
        outcome = give_up(scene_id, generation)
    finally:
        structlog.contextvars.unbind_contextvars("scene_id", "generation")
    enqueue_fresh_deliveries()
    return outcome


def _worth_retrying(error: BaseException) -> bool:
    return isinstance(error, Unavailable | OperationalError)


@DBOS.step(name="measure", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying)
def measure(scene_id: int, generation: int) -> str:
    """Measure and record; pixels never leave this step, because its result is stored."""
    try:
        return "measured" if measure_scene(resources(), scene_id, generation) else "left"
    except Unavailable:
        raise
    except FurrowlightError as error:
        faults = [fault.as_dict() for fault in error.faults]
        return fail(
            scene_id, generation, {"code": error.code, "detail": error.detail, "errors": faults}
        )


@DBOS.step(name="finish", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying)
def finish(scene_id: int, generation: int, judging: float | None = None) -> str:
    """Say that a scene is done: its looks are judged too, which took so many seconds.

    A release that did not count them may have left them unsaid.
    """
    work = resources()
    with work.sessions.writing() as session:
        row = lock_scene(session, scene_id)
        if row.generation != generation or row.state != SceneState.RUNNING:
            return "left"
        row.state = SceneState.DONE
        row.progress = 1.0
        row.changed_at = now()
        report = row.report or {}
        seconds = {**report.get("seconds", {}), **({} if judging is None else {"judging": judging})}
        opened = count_opened_by(session, row)
        row.report = {**report, "seconds": seconds, "alerts_opened": opened}
        tell_of_unseen(session, work.settings, row, at=row.changed_at)
        announce_scene(session, work.settings, row, at=row.changed_at)
    _log.info("scene done")
    return "done"


@DBOS.step(name="give_up", retries_allowed=True, max_attempts=5, should_retry=_worth_retrying)
def give_up(scene_id: int, generation: int) -> str:
    """Fail a scene for a fault of our own."""
    return fail(scene_id, generation, INTERNAL_FAILURE)


INTERNAL_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service failed while measuring this scene; its log has the reason. Send a "
    "retry once the cause is mended.",
    "errors": [],
}


CRASHED_FAILURE: Final[dict[str, Any]] = {
    "code": "internal-error",
    "detail": "The service ended three times while it was measuring this scene, perhaps for want "
    "of memory. Send a retry once the cause is mended.",
    "errors": [],
}


def fail(scene_id: int, generation: int, failure: dict[str, Any]) -> str:
    """Keep on the scene why it failed, unless it is another's by now or came to an end."""
    work = resources()
    with work.sessions.writing() as session:
        row = lock_scene(session, scene_id)
        if row.generation != generation or row.state not in _UNFINISHED:
            return "left"
        row.state = SceneState.FAILED
        row.failure = failure
        row.changed_at = now()
        announce_scene(session, work.settings, row, at=row.changed_at)
    _log.warning("scene failed", code=failure["code"])
    return "failed"
