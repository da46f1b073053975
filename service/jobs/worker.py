"""Starting and stopping the queue's engine in this process."""

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, Final

import fasteners
import structlog
from dbos import DBOS, DBOSConfig, DBOSPortableJSONSerializer
from sqlalchemy import Engine, create_engine, event, make_url

from service.errors import Unavailable
from service.jobs import assess, deliver, ingest, parcel_import, rehearsal_job
from service.jobs.resources import Resources, lend
from service.jobs.upkeep import Upkeep
from service.jobs.warming import keep_compiled_in, warm_up_behind
from service.store.sessions import hold_database

_log = structlog.get_logger()
_APPLICATION_VERSION: Final = "1"
"""Constant, so that work promised by one release is carried out by the next."""
_DELIVERIES_AT_ONCE: Final = 8
_EXECUTOR: Final = "embedded"
"""Stable, so that the same machine resumes what a crash interrupted."""


class Worker:
    """The queue's engine, embedded in this process; one to a data folder and database."""

    def __init__(self, work: Resources) -> None:
        self._work = work
        self._lock = fasteners.InterProcessLock(work.settings.data / "worker.lock")
        self._upkeep: Upkeep | None = None
        self._engine: Engine | None = None
        self._claim: Callable[[], None] | None = None

    def claim(self) -> None:
        """Take the data folder for this process, unless it has it already.

        Raises
        ------
        Unavailable
            Another process works on this data folder.
        """
        if self._lock.acquired:
            return
        if not self._lock.acquire(blocking=False):
            raise Unavailable(
                "worker-running", "Another process is already serving this data folder."
            )
        self._claim = hold_database(self._work.sessions.engine, "worker")
        if self._claim is None:
            self._lock.release()
            raise Unavailable("worker-running", "Another process is already serving this database.")

    def start(self) -> None:
        """Claim the folder, launch the engine, resume what was interrupted, begin the upkeep."""
        self.claim()
        self._work.archive.clear_incoming()
        keep_compiled_in(self._work.settings.data / "compiled")
        warm_up_behind()
        lend(self._work)
        settings = self._work.settings
        self._engine = _engine(settings.engine_url, settings.data)
        DBOS(
            config=DBOSConfig(
                name="furrowlight",
                system_database_url=settings.engine_url,
                system_database_engine=self._engine,
                dbos_system_schema="queue",
                application_version=_APPLICATION_VERSION,
                executor_id=_EXECUTOR,
                serializer=DBOSPortableJSONSerializer(),
                log_level="WARNING",
            )
        )
        DBOS.launch()
        for module in (ingest, assess, parcel_import, rehearsal_job):
            DBOS.register_queue(
                module.QUEUE,
                worker_concurrency=1,
                polling_interval_sec=settings.queue_polling_seconds,
            )
        # A slow receiver holds up only itself.
        DBOS.register_queue(
            deliver.QUEUE,
            worker_concurrency=_DELIVERIES_AT_ONCE,
            partition_concurrency=1,
            polling_interval_sec=settings.queue_polling_seconds,
        )
        self._upkeep = Upkeep(self._work)
        self._upkeep.start()

    def promise(self, scene_id: int, generation: int) -> None:
        """Hand a committed promise to the queue at once; if that fails, the sweep will."""
        self._hand(lambda: ingest.enqueue(scene_id, generation))

    def promise_deliveries(self, promises: Sequence[deliver.Promise]) -> None:
        """Hand promised attempts to the queue at once; if that fails, the sweep will."""
        self._hand(lambda: deliver.enqueue(promises))

    def promise_import(self, job_id: str) -> None:
        """Hand a promised import to the queue at once; if that fails, the sweep will."""
        self._hand(lambda: parcel_import.enqueue(job_id))

    def promise_rehearsal(self, job_id: str) -> None:
        """Hand a promised rehearsal to the queue at once; if that fails, the sweep will."""
        self._hand(lambda: rehearsal_job.enqueue(job_id))

    def promise_judging(self) -> None:
        """Hand promised judging to the queue at once; if that fails, the sweep will."""
        self._hand(lambda: assess.enqueue_wanted(self._work))

    def _hand(self, enqueue: Callable[[], None]) -> None:
        try:
            enqueue()
        except Exception:  # noqa: BLE001 - the promise stands in the database
            _log.exception("enqueueing failed")

    def problem(self) -> str | None:
        """Return what is wrong with the queue, None if nothing is."""
        if self._upkeep is None or not self._upkeep.is_alive():
            return "The queue's upkeep is not running."
        return None

    def stop(self) -> None:
        """Take no more work, let what goes on end within seconds, and let go of the folder."""
        if self._upkeep is not None:
            self._upkeep.stop()
        DBOS.destroy(workflow_completion_timeout_sec=self._work.settings.drain_seconds)
        if self._engine is not None:
            self._engine.dispose()
        lend(None)
        self.release()

    def release(self) -> None:
        """Let go of data folder and database."""
        if self._claim is not None:
            self._claim()
            self._claim = None
        if self._lock.acquired:
            self._lock.release()


def _engine(url: str, data: Path) -> Engine:
    """Return the engine of the queue's database."""
    if make_url(url).get_backend_name() != "sqlite":
        return create_engine(url, pool_pre_ping=True, pool_size=10)
    engine = create_engine(url)
    event.listen(engine, "connect", _prepare_sqlite)
    # Only one connection at a time may change the journal's mode.
    with fasteners.InterProcessLock(data / "migrate.lock"), engine.connect() as connection:
        connection.exec_driver_sql("PRAGMA journal_mode=WAL")
    return engine


def _prepare_sqlite(connection: Any, _record: object) -> None:
    # The engine's own wish: writers queue up instead of failing on each other.
    connection.isolation_level = "IMMEDIATE"
    for pragma in ("busy_timeout=60000", "foreign_keys=ON", "synchronous=FULL"):
        connection.execute(f"PRAGMA {pragma}")
