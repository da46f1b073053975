"""Judging what is promised: the seasons of an axis in order of time, recorded at once.

A season goes on from what was remembered before the first look that may have changed. The
outcome is that of judging it from its start, so that it cannot depend on the order in which
scenes arrived.
"""

import hashlib
import threading
import time
from collections.abc import Mapping, Sequence
from datetime import datetime, timedelta
from typing import Final

import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy.orm import Session

from service.alerts.alert import Alert
from service.alerts.explained import Explained
from service.alerts.notices import Notice
from service.clock import now
from service.errors import Unavailable
from service.jobs.announce import announce_alert, announce_notice
from service.jobs.deliver import enqueue as enqueue_deliveries
from service.jobs.deliver import fresh_promises
from service.jobs.folding import Known, known_of
from service.jobs.resources import Resources, resources
from service.jobs.season_judging import JudgedSeason, judge_season
from service.store.alert_tables import BaselineRow, SeasonFold
from service.store.folds import Kept, keep_states
from service.store.judged_looks import put_judgements
from service.store.judgements import put_alerts
from service.store.judging import Axis, axes, packed, squeezed, wanted_folds
from service.store.notices import put_explained, put_notices
from service.store.sessions import serialise
from service.store.tuning import told_of

QUEUE: Final = "assess"
_TRIES: Final = 5
_TICK: Final = timedelta(microseconds=1)
_ONE_AT_A_TIME: Final = threading.Lock()
_log = structlog.get_logger()


def judge_wanted(work: Resources) -> None:
    """Judge all seasons that are promised.

    Raises
    ------
    Unavailable
        What is to be judged kept changing while it was being judged.
    """
    with _ONE_AT_A_TIME:
        for _ in range(_TRIES):
            with work.sessions.reading() as session:
                wanted = {row.axis for row in wanted_folds(session)}
                known = [
                    axis for axis in axes(session, work.settings.season_starts) if axis.id in wanted
                ]
            if not known:
                return
            for axis in known:
                _judge_axis(work, axis)
    raise Unavailable("still-changing", "What is to be judged keeps changing.")


def _judge_axis(work: Resources, axis: Axis) -> None:
    """Judge the promised seasons of an axis in order of time, and record all of it at once."""
    with work.sessions.reading() as session:
        known = known_of(session, axis)
        judged: list[JudgedSeason] = []
        for promised in wanted_folds(session):
            if promised.axis == axis.id:
                season = judge_season(session, work.baselines, axis, promised, known, judged)
                judged.append(season)
    with work.sessions.writing() as session:
        numbers = _record(session, work, axis, judged, known, at=now())
    for each in judged:
        if each.season in numbers:
            work.baselines.hold(numbers[each.season], each.basis.prepared)


def _record(
    session: Session,
    work: Resources,
    axis: Axis,
    judged: Sequence[JudgedSeason],
    known: Known,
    *,
    at: datetime,
) -> dict[int, int]:
    """Record what judging found, unless something changed while it was being worked out.

    Returns the number of each season's baselines; nothing if nothing was recorded.
    """
    serialise(session, "judging")
    rows = {
        each.season: session.get_one(SeasonFold, (axis.id, each.season), with_for_update=True)
        for each in judged
    }
    if any(rows[each.season].wanted != each.wanted for each in judged):
        return {}
    numbers = {each.season: _baseline_id(session, axis, each, at=at) for each in judged}
    for each in judged:
        _record_looks(session, axis, each, numbers, at=at)
        rows[each.season].done = each.wanted
    _put_found(session, work, axis, judged, known, at=at)
    _log.info("seasons judged", axis=axis.id, seasons=sorted(rows))
    return numbers


def _record_looks(
    session: Session, axis: Axis, judged: JudgedSeason, numbers: Mapping[int, int], *, at: datetime
) -> None:
    """Record what is thought of a season's looks, and from where it may be judged on."""
    put_judgements(
        session,
        axis.refs,
        judged.folded.passes,
        numbers,
        since=axis.begins_at(judged.season) if judged.after is None else judged.after + _TICK,
        until=axis.ends_at(judged.season),
        at=at,
    )
    keep_states(
        session,
        axis.id,
        judged.season,
        [
            Kept(
                seen_until=each.seen_until,
                pass_at=each.pass_at,
                number=each.number,
                state=squeezed(each.states),
            )
            for each in judged.folded.remembered
        ],
        basis=judged.basis.history,
        after=judged.after,
        newest=judged.folded.newest,
    )


def _put_found(
    session: Session,
    work: Resources,
    axis: Axis,
    judged: Sequence[JudgedSeason],
    known: Known,
    *,
    at: datetime,
) -> None:
    """Record alerts, notices and explained departures, and promise what is to be told."""
    alerts, explained, notices = _found(judged)
    parcels = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    behind = {each.season: each.after for each in judged}
    seasons = {key: axis.season_of(each.opened_at) for key, each in (alerts | notices).items()}
    held = {key: axis.season_of(datetime.fromisoformat(e.at)) for key, e in explained.items()}
    for happened in put_alerts(
        session, axis.id, seasons, alerts, parcels, behind, rules=known.opening, at=at
    ):
        announce_alert(session, work.settings, happened, at=at)
    for told in put_notices(session, axis.id, seasons, notices, behind, at=at):
        announce_notice(session, work.settings, told, at=at)
    put_explained(session, axis.id, held, explained, parcels, behind, at=at)


def _baseline_id(session: Session, axis: Axis, judged: JudgedSeason, *, at: datetime) -> int:
    basis = judged.basis
    if basis.number is not None:
        return basis.number
    row = BaselineRow(
        axis=axis.id,
        season=judged.season,
        history=basis.history,
        version=basis.prepared.baselines.version,
        measures=list(basis.prepared.baselines.measures),
        arrays=packed(basis.prepared),
        tuned=told_of(basis.prepared.tuned),
        fitted_at=at,
    )
    session.add(row)
    session.flush()
    return row.id


def _found(
    judged: Sequence[JudgedSeason],
) -> tuple[dict[str, Alert], dict[str, Explained], dict[str, Notice]]:
    """Return what the seasons gave together, as it ended."""
    alerts: dict[str, Alert] = {}
    explained: dict[str, Explained] = {}
    notices: dict[str, Notice] = {}
    for each in judged:
        alerts |= each.folded.alerts
        explained |= each.folded.explained
        notices |= each.folded.notices
    return alerts, explained, notices


@DBOS.workflow(name="assess", max_recovery_attempts=10)
def assess(_wanted: str) -> str:
    """Judge whatever is promised, and tell of it."""
    judge()
    enqueue_fresh_deliveries()
    return "judged"


@DBOS.step(name="judge", retries_allowed=True, max_attempts=5)
def judge() -> float:
    """Judge whatever is promised, and return how many seconds that took, waiting included.

    The deliveries that this promises stand in the database.
    """
    started = time.monotonic()
    judge_wanted(resources())
    return round(time.monotonic() - started, 3)


def enqueue_fresh_deliveries() -> None:
    """Hand the attempts that were just promised to the queue."""
    enqueue_deliveries(fresh_promises(resources()))


def enqueue_wanted(work: Resources) -> None:
    """Hand promised judging to the queue; doing so again attaches to the first."""
    with work.sessions.reading() as session:
        wanted = wanted_folds(session)
    if not wanted:
        return
    told = ",".join(f"{row.axis}/{row.season}/{row.wanted}" for row in wanted)
    digest = hashlib.sha256(told.encode()).hexdigest()[:32]
    # By ten minutes, so that judging which failed is tried again.
    ten_minutes = f"{now():%Y%m%d%H%M}"[:-1]
    with SetWorkflowID(f"assess:{digest}:{ten_minutes}"):
        DBOS.enqueue_workflow(QUEUE, assess, told)
