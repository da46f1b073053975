"""What has to be looked after: promises without work, leftovers of crashes, old records."""

import threading
from collections.abc import Sequence
from datetime import timedelta
from typing import Final

import structlog
from dbos import DBOS

from service.clock import now
from service.jobs import assess, deliver, ingest, parcel_import, rehearsal_job
from service.jobs.resources import Resources
from service.store.answers import forget_old_answers
from service.store.batches import in_batches
from service.store.jobs import files_of_jobs, forget_old_jobs, unfinished_jobs
from service.store.scenes import SceneState, kept_digests, put_back, unfinished_scenes
from service.store.tables import Scene
from service.store.webhooks import forget_old_deliveries, waiting_deliveries

SWEEP_SECONDS: Final = 60.0
ORPHAN_SECONDS: Final = 24 * 3600.0
"""A file without a row is left alone this long: its upload may be about to commit."""
WORKFLOWS_KEPT_FOR: Final = timedelta(days=30)
DELIVERIES_KEPT_FOR: Final = timedelta(days=30)
"""Settled ones, from when they were last begun, with their attempts and their event."""
JOBS_KEPT_FOR: Final = timedelta(days=30)
_PURGE_BATCH: Final = 500
_UNKNOWN: Final = "unknown"
_CRASHED: Final = "MAX_RECOVERY_ATTEMPTS_EXCEEDED"
_ENDED: Final = frozenset({"SUCCESS", "ERROR", "CANCELLED"})
_JOBS: Final = {parcel_import.KIND: parcel_import, rehearsal_job.KIND: rehearsal_job}
_log = structlog.get_logger()


class Upkeep:
    """A thread that sweeps at start and every minute."""

    def __init__(self, work: Resources) -> None:
        self._work = work
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name="upkeep", daemon=True)

    def start(self) -> None:
        """Begin to look after things."""
        self._thread.start()

    def is_alive(self) -> bool:
        """Whether the thread is running."""
        return self._thread.is_alive()

    def stop(self) -> None:
        """End after the sweep that is going on."""
        self._stop.set()
        self._thread.join()

    def _run(self) -> None:
        while True:
            try:
                sweep(self._work)
                tidy(self._work)
            except Exception:  # noqa: BLE001 - the next round tries again
                _log.exception("sweep failed")
            if self._stop.wait(SWEEP_SECONDS):
                return


def sweep(work: Resources) -> None:
    """Bring promises and the queue into agreement.

    A promise without a workflow is enqueued. A scene at work whose workflow the queue does
    not know is promised anew. A scene whose workflow ended without telling it has failed.
    The same holds for jobs.
    """
    assess.enqueue_wanted(work)
    _sweep_deliveries(work)
    _sweep_jobs(work)
    with work.sessions.reading() as session:
        scenes = unfinished_scenes(session)
    states = _workflow_states([ingest.workflow_id(scene.id, scene.generation) for scene in scenes])
    for scene in scenes:
        state = states.get(ingest.workflow_id(scene.id, scene.generation), _UNKNOWN)
        if state == _UNKNOWN and scene.state == SceneState.QUEUED:
            ingest.enqueue(scene.id, scene.generation)
        elif state == _UNKNOWN:
            _promise_anew(work, scene)
        elif state == _CRASHED:
            ingest.fail(scene.id, scene.generation, ingest.CRASHED_FAILURE)
        elif state in _ENDED:
            ingest.fail(scene.id, scene.generation, ingest.INTERNAL_FAILURE)


def _sweep_deliveries(work: Resources) -> None:
    """Enqueue promised attempts that the queue does not know, or that it gave up."""
    at = now()
    with work.sessions.reading() as session:
        promises = [deliver.promise_of(row, at=at) for row in waiting_deliveries(session)]
    for some in in_batches(promises):
        states = _workflow_states([promise.workflow_id for promise in some])
        deliver.enqueue([promise for promise in some if promise.workflow_id not in states])
        for promise in some:
            if states.get(promise.workflow_id) in (*_ENDED, _CRASHED):
                deliver.enqueue(deliver.promise_anew(work, promise))


def _sweep_jobs(work: Resources) -> None:
    """Enqueue jobs that the queue does not know, and fail those that it gave up."""
    with work.sessions.reading() as session:
        jobs = [(row.public_id, _JOBS[row.kind]) for row in unfinished_jobs(session)]
    states = _workflow_states([module.workflow_id(job) for job, module in jobs])
    for job, module in jobs:
        state = states.get(module.workflow_id(job), _UNKNOWN)
        if state == _UNKNOWN:
            module.enqueue(job)
        elif state == _CRASHED:
            module.fail(job, module.CRASHED_FAILURE)
        elif state in _ENDED:
            module.fail(job, module.INTERNAL_FAILURE)


def _workflow_states(ids: Sequence[str]) -> dict[str, str]:
    if not ids:
        return {}
    found = DBOS.list_workflows(workflow_ids=list(ids), load_input=False, load_output=False)
    return {workflow.workflow_id: workflow.status for workflow in found}


def _promise_anew(work: Resources, scene: Scene) -> None:
    with work.sessions.writing() as session:
        row = session.get(Scene, scene.id)
        if row is None or row.generation != scene.generation or row.state != scene.state:
            return
        put_back(session, row, at=now())
        generation = row.generation
    ingest.enqueue(scene.id, generation)


def tidy(work: Resources) -> None:
    """Remove what nothing needs: orphaned files, plans, old answers, deliveries, jobs."""
    with work.sessions.writing() as session:
        forget_old_answers(session, at=now())
        forget_old_deliveries(session, before=now() - DELIVERIES_KEPT_FOR)
        forget_old_jobs(session, before=now() - JOBS_KEPT_FOR)
    with work.sessions.reading() as session:
        wanted = kept_digests(session) | files_of_jobs(session)
    removed = work.archive.remove_orphans(wanted, older_than_seconds=ORPHAN_SECONDS)
    if removed:
        _log.info("orphaned files removed", count=removed)
    work.plans.tidy()
    before = (now() - WORKFLOWS_KEPT_FOR).isoformat()
    old = DBOS.list_workflows(
        completed_before=before, limit=_PURGE_BATCH, load_input=False, load_output=False
    )
    if old:
        DBOS.delete_workflows([workflow.workflow_id for workflow in old], delete_children=True)
