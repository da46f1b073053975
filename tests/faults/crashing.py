"""The real command line, dying as by ``kill -9`` at a named point.

Run as ``python tests/faults/crashing.py POINT serve --data …``. The service knows nothing of
it: a function that it calls at the point is wrapped from here, and no handler, no `finally`
and no commit runs after the signal.
"""

import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Mapping
from functools import partial
from itertools import count
from typing import Any, Final

import alembic.op
from dbos import DBOS

import service.api.scenes
import service.cli
import service.cli.pushing
import service.jobs.assess
import service.jobs.deliver
import service.jobs.ingest
import service.jobs.measuring
import service.jobs.parcel_files
import service.jobs.parcel_import
import service.jobs.upkeep
import service.observe
import service.products.places
import service.store.observations
import service.tiles.plans


def die() -> None:
    """End this process as a power cut would."""
    os.kill(os.getpid(), signal.SIGKILL)


def before(owner: Any, name: str, *, times: int = 1, act: Callable[[], None] = die) -> None:
    """Act when a function is about to be called for the so-manieth time."""
    wrapped = getattr(owner, name)
    calls = count(start=1)

    def acting(*args: Any, **kwargs: Any) -> Any:
        if next(calls) == times:
            act()
        return wrapped(*args, **kwargs)

    setattr(owner, name, acting)


def after(owner: Any, name: str, *, times: int = 1) -> None:
    """Die when a function has done its work for the so-manieth time, its caller not told."""
    wrapped = getattr(owner, name)
    calls = count(start=1)

    def dying(*args: Any, **kwargs: Any) -> Any:
        done = wrapped(*args, **kwargs)
        if next(calls) == times:
            die()
        return done

    setattr(owner, name, dying)


def in_mid_plan() -> None:
    """Die when half of a plan is written."""
    written = service.tiles.plans._written

    def dying(*args: Any) -> Iterator[Any]:
        for place, piece in enumerate(written(*args)):
            yield piece
            if place == 5:
                die()

    service.tiles.plans._written = dying


def ask_to_end_and_go_on() -> None:
    """Ask this process to end, as an operator would, and keep its step at work."""
    os.kill(os.getpid(), signal.SIGTERM)
    threading.Event().wait()


def sweep_often() -> None:
    """Let no test wait for the minute between two sweeps."""
    service.jobs.upkeep.SWEEP_SECONDS = 0.1  # type: ignore[misc]


POINTS: Final[Mapping[str, Callable[[], None]]] = {
    # Nothing dies.
    "never": sweep_often,
    # The files are kept and there is no row: not begun, or not committed.
    "before-row": partial(before, service.api.scenes, "keep_scene"),
    "row-not-committed": partial(after, service.api.scenes, "keep_scene"),
    # The row is there and its job is not; or it is, and the client has no answer.
    "before-job": partial(before, service.jobs.ingest, "enqueue"),
    "after-job": partial(after, service.jobs.ingest, "enqueue"),
    # Measuring: before the pixels, among the rows, before the commit.
    "before-pixels": partial(before, service.jobs.measuring, "observe"),
    "before-plan": partial(before, service.tiles.plans, "plan_of"),
    "in-mid-plan": in_mid_plan,
    "in-a-batch": partial(before, service.observe, "summarise", times=5),
    "rows-inserted": partial(before, service.store.observations, "bump_revisions"),
    "rows-not-committed": partial(after, service.jobs.measuring, "record"),
    # The observations are there and the scene is not done: the queue knows nothing of the
    # step's end, or it does, or the scene's end is not committed.
    "step-not-noted": partial(after, service.jobs.ingest, "measure_scene"),
    "before-judging": partial(before, service.jobs.ingest, "judge"),
    "before-finish": partial(before, service.jobs.ingest, "finish"),
    "done-not-committed": partial(before, service.jobs.ingest, "now"),
    # Judging: the looks are there and nothing is judged; alerts are worked out and not
    # committed; they are committed with their deliveries, of which the queue knows nothing.
    "looks-not-judged": partial(before, service.jobs.assess, "judge_wanted"),
    "alert-not-committed": partial(before, service.jobs.assess, "announce_alert", times=2),
    "alert-not-told": partial(before, service.jobs.assess, "enqueue_deliveries"),
    # Delivering: the receiver has the event and its answer is not recorded; its refusal is
    # recorded, and the queue knows nothing of the next attempt.
    "posted-not-recorded": partial(before, service.jobs.deliver, "_record"),
    "next-not-promised": partial(before, service.jobs.deliver, "enqueue"),
    # Importing a file: no job in the queue; in the middle of the file; its rows written and
    # not committed; committed, and the queue knows nothing of it.
    "before-import": partial(before, service.jobs.parcel_import, "enqueue"),
    "half-a-file": partial(before, service.jobs.parcel_files, "_change", times=6_000),
    "parcels-not-committed": partial(after, service.jobs.parcel_import, "keep_parcels"),
    "import-not-noted": partial(after, service.jobs.parcel_import, "_kept"),
    # Pushing, the client's own end: of ten products the fourth half sent (of each the two files
    # of metadata are read first, then twelve files are hashed and sent); the fourth answered,
    # and nobody told.
    "half-a-body": partial(before, service.products.places.Span, "chunks", times=20 + 3 * 24 + 18),
    "answered-not-told": partial(after, service.cli.pushing, "answer_of", times=4),
    # Starting: among the first tables, before the queue's engine, with the engine running.
    "migrating": partial(before, alembic.op, "create_table", times=5),
    "before-engine": partial(before, DBOS, "launch"),
    "engine-running": partial(before, DBOS, "register_queue"),
    # No crash, but a step that does not end when it should.
    "asked-to-end": partial(before, service.jobs.measuring, "observe", act=ask_to_end_and_go_on),
}

if __name__ == "__main__":
    POINTS[sys.argv.pop(1)]()
    service.cli.main()
