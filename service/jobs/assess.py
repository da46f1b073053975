"""Judging: the looks of a season on one axis, folded from the start of what changed.

Judging anew always starts from the season's first look: the outcome then cannot depend on
the order in which scenes arrived.
"""

import hashlib
import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np
import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy.orm import Session

from service.alerts.alert import Alert
from service.alerts.explained import Explained
from service.alerts.notices import Notice
from service.assess import Prepared, State, prepare
from service.clock import now
from service.errors import Unavailable
from service.jobs.announce import announce_alert, announce_notice
from service.jobs.deliver import enqueue as enqueue_deliveries
from service.jobs.deliver import fresh_promises
from service.jobs.folding import Folded, Known, fold_season, known_of, rests_on
from service.jobs.resources import Resources, resources
from service.jobs.season_looks import passes_of, past_of
from service.seasons.judgement import Judgements, OnePass
from service.store.alert_tables import BaselineRow, SeasonFold
from service.store.columns import microseconds
from service.store.crops import labels_in
from service.store.judgements import JUDGED, JudgedPass, put_alerts, put_judgements
from service.store.judging import (
    Axis,
    actions_in,
    axes,
    find_baselines,
    history_key,
    packed,
    squeezed,
    state_before,
    unpacked,
    unsqueezed,
    wanted_folds,
)
from service.store.notices import put_explained, put_notices
from service.store.sessions import serialise
from service.store.tuning import told_of

QUEUE: Final = "assess"
_TRIES: Final = 5
_ONE_AT_A_TIME: Final = threading.Lock()
_log = structlog.get_logger()


@dataclass(frozen=True, slots=True, kw_only=True)
class _Season:
    """One season of an axis, judged."""

    season: int
    wanted: int
    prepared: Prepared
    fitted_from: str
    baseline_id: int | None
    folded: Folded


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
        wanted = {row.season: row.wanted for row in wanted_folds(session) if row.axis == axis.id}
        known = known_of(session, axis)
        judged: list[_Season] = []
        for season in sorted(wanted):
            before = judged[-1].folded.states if judged else _states_before(session, axis, season)
            judged.append(_judge_season(session, axis, season, wanted[season], known, before))
    with work.sessions.writing() as session:
        _record(session, work, axis, judged, known, at=now())


def _states_before(session: Session, axis: Axis, season: int) -> dict[str, State]:
    kept = state_before(session, axis, season)
    return {} if kept is None else unsqueezed(kept)


def _judge_season(
    session: Session,
    axis: Axis,
    season: int,
    wanted: int,
    known: Known,
    before: Mapping[str, State],
) -> _Season:
    labels = labels_in(session, axis, season)
    key = history_key(session, axis, season, [*rests_on(known), sorted(labels.items())])
    row = find_baselines(session, axis.id, season)
    is_fitted = row is not None and row.history == key
    prepared = (
        unpacked(row.arrays)
        if row is not None and is_fitted
        else prepare(past_of(session, axis, season, labels), known.rules, known.holdings)
    )
    folded = fold_season(
        known,
        before,
        passes_of(session, axis, season, compared=labels),
        actions_in(session, axis, season),
        prepared,
        region=axis.id,
    )
    return _Season(
        season=season,
        wanted=wanted,
        prepared=prepared,
        fitted_from=key,
        baseline_id=row.id if row is not None and is_fitted else None,
        folded=folded,
    )


def _judged_pass(
    one: OnePass, judged: Judgements, season: int, ids: Mapping[str, int]
) -> JudgedPass:
    figures = np.stack([getattr(judged, name) for name in JUDGED], axis=-1, dtype=np.float32)
    instants = {at: microseconds(at) for at in set(one.looked_at)}
    size = len(one.parcels)
    return JudgedPass(
        baseline_season=season,
        parcel_ids=np.fromiter((ids[ref] for ref in one.parcels), np.int64, size),
        instants=np.fromiter((instants[at] for at in one.looked_at), np.int64, size),
        crops=one.grown,
        unjudged=[None if reason is None else reason.value for reason in judged.unjudged],
        score=np.where(np.isfinite(judged.score), judged.score, np.nan),
        p=judged.p,
        figures=figures.reshape(size, -1),
    )


def _record(
    session: Session,
    work: Resources,
    axis: Axis,
    judged: Sequence[_Season],
    known: Known,
    *,
    at: datetime,
) -> None:
    """Record what judging found, unless something changed while it was being worked out."""
    serialise(session, "judging")
    rows = {
        each.season: session.get_one(SeasonFold, (axis.id, each.season), with_for_update=True)
        for each in judged
    }
    if any(rows[each.season].wanted != each.wanted for each in judged):
        return
    baseline_ids = {each.season: _baseline_id(session, axis, each, at=at) for each in judged}
    parcels = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    for each in judged:
        put_judgements(
            session,
            axis.refs,
            [_judged_pass(one, of, each.season, parcels) for one, of in each.folded.judged],
            baseline_ids,
            since=axis.begins_at(each.season),
            until=axis.ends_at(each.season),
            at=at,
        )
        rows[each.season].done = each.wanted
        rows[each.season].state = squeezed(each.folded.states)
    _put_found(session, work, axis, judged, known, parcels, at=at)
    _log.info("seasons judged", axis=axis.id, seasons=sorted(rows))


def _put_found(
    session: Session,
    work: Resources,
    axis: Axis,
    judged: Sequence[_Season],
    known: Known,
    parcels: Mapping[str, int],
    *,
    at: datetime,
) -> None:
    """Record alerts, notices and explained departures, and promise what is to be told."""
    alerts, explained, notices = _found(judged)
    folded = [each.season for each in judged]
    seasons = {key: axis.season_of(each.opened_at) for key, each in (alerts | notices).items()}
    held = {key: axis.season_of(datetime.fromisoformat(e.at)) for key, e in explained.items()}
    for happened in put_alerts(
        session, axis.id, seasons, alerts, parcels, folded, rules=known.opening, at=at
    ):
        announce_alert(session, work.settings, happened, at=at)
    for told in put_notices(session, axis.id, seasons, notices, folded, at=at):
        announce_notice(session, work.settings, told, at=at)
    put_explained(session, axis.id, held, explained, parcels, folded, at=at)


def _baseline_id(session: Session, axis: Axis, judged: _Season, *, at: datetime) -> int:
    if judged.baseline_id is not None:
        return judged.baseline_id
    row = BaselineRow(
        axis=axis.id,
        season=judged.season,
        history=judged.fitted_from,
        version=judged.prepared.baselines.version,
        measures=list(judged.prepared.baselines.measures),
        arrays=packed(judged.prepared),
        tuned=told_of(judged.prepared.tuned),
        fitted_at=at,
    )
    session.add(row)
    session.flush()
    return row.id


def _found(
    judged: Sequence[_Season],
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
def judge() -> None:
    """Judge whatever is promised; the deliveries that this promises stand in the database."""
    judge_wanted(resources())


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
