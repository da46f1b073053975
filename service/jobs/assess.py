"""Judging: the looks of a season on one axis, folded from the start of what changed.

Judging anew always starts from the season's first look: the outcome then cannot depend on
the order in which scenes arrived.
"""

import hashlib
import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from itertools import groupby
from typing import Any, Final

import numpy as np
import structlog
from dbos import DBOS, SetWorkflowID
from sqlalchemy.orm import Session

from service.alerts.alert import Alert
from service.alerts.rules import RULES
from service.assess import BASELINE_MEASURES, State, Step, alerts_after, fold, in_order
from service.clock import now
from service.errors import Unavailable
from service.jobs.announce import announce_alert
from service.jobs.deliver import enqueue as enqueue_deliveries
from service.jobs.deliver import fresh_promises
from service.jobs.resources import Resources, resources
from service.seasons.baseline import Baselines, fit_baselines
from service.seasons.history import History
from service.seasons.judgement import Judgements, OnePass
from service.store.alert_tables import BaselineRow, SeasonFold
from service.store.judgements import JUDGED, JudgedLook, put_alerts, put_judgements
from service.store.judging import (
    Axis,
    Look,
    actions_in,
    axes,
    crops_on,
    find_baselines,
    history_key,
    looks_of,
    packed,
    spoiled_looks,
    squeezed,
    state_before,
    unpacked,
    unsqueezed,
    wanted_folds,
)
from service.store.looks import LOOK_SHARE, PASS_GAP, Observed
from service.store.seasons import seasons_of
from service.store.sessions import serialise
from service.store.tables import CropSeason

QUEUE: Final = "assess"
RULE: Final = RULES["default"]
_TRIES: Final = 5
_ONE_AT_A_TIME: Final = threading.Lock()
_log = structlog.get_logger()


@dataclass(frozen=True, slots=True, kw_only=True)
class _Season:
    """One season of an axis, judged."""

    season: int
    wanted: int
    baselines: Baselines
    fitted_from: str
    baseline_id: int | None
    judged: Sequence[JudgedLook]
    alerts: Mapping[str, Alert]
    state: State


@dataclass(slots=True)
class _Reading:
    """What is read once for all seasons of an axis."""

    session: Session
    axis: Axis
    crops: Mapping[int, Sequence[CropSeason]] = field(default_factory=dict)


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
        reading = _Reading(session, axis, seasons_of(session, axis.refs))
        judged: list[_Season] = []
        for season in sorted(wanted):
            before = judged[-1].state if judged else _state_before(session, axis, season)
            judged.append(_judge_season(reading, season, wanted[season], before))
    with work.sessions.writing() as session:
        _record(session, work, axis, judged, at=now())


def _state_before(session: Session, axis: Axis, season: int) -> State:
    kept = state_before(session, axis, season)
    return State.start(RULE) if kept is None else State.from_dict(unsqueezed(kept), RULE)


def _judge_season(reading: _Reading, season: int, wanted: int, before: State) -> _Season:
    axis, session = reading.axis, reading.session
    key = history_key(session, axis, season)
    row = find_baselines(session, axis.id, season)
    is_fitted = row is not None and row.history == key
    baselines = (
        unpacked(row.arrays)
        if row is not None and is_fitted
        else fit_baselines(_history(reading, season))
    )
    passes = _passes(reading, season)
    actions = actions_in(session, axis, season)
    steps = list(fold(before, passes, actions, baselines=baselines, rule=RULE))
    return _Season(
        season=season,
        wanted=wanted,
        baselines=baselines,
        fitted_from=key,
        baseline_id=row.id if row is not None and is_fitted else None,
        judged=_judged_looks(axis, season, passes, steps),
        alerts=alerts_after(steps),
        state=steps[-1].state if steps else before,
    )


def _history(reading: _Reading, season: int) -> History:
    """Return the looks of the seasons before one, less those that must not shape a baseline."""
    axis = reading.axis
    begin = axis.begins_at(season)
    spoiled: dict[int, list[tuple[datetime, datetime]]] = {}
    for parcel_id, first, last in spoiled_looks(reading.session, begin):
        spoiled.setdefault(parcel_id, []).append((first, last))
    rows: list[tuple[int, str | None, Look]] = []
    found = looks_of(reading.session, axis, BASELINE_MEASURES, since=None, until=begin)
    for parcel_id, looks in found:
        crops = crops_on(reading.crops, parcel_id, (look.acquired_at.date() for look, _ in looks))
        rows += [
            (parcel_id, crop, (look, figures))
            for (look, figures), crop in zip(looks, crops, strict=True)
            if look.of_look("valid_share") >= LOOK_SHARE
            and not any(a <= look.acquired_at <= b for a, b in spoiled.get(parcel_id, ()))
        ]
    if not rows:
        return History.empty(BASELINE_MEASURES)
    begun = _pass_of([look for _, _, (look, _) in rows])
    return History.of_rows(
        parcels=[axis.refs[parcel_id] for parcel_id, _, _ in rows],
        crops=[crop for _, crop, _ in rows],
        seasons=[axis.season_of(look.acquired_at) for _, _, (look, _) in rows],
        days=[axis.day_of(look.acquired_at) for _, _, (look, _) in rows],
        passes=[int(begun[id(look)].timestamp()) for _, _, (look, _) in rows],
        measures=BASELINE_MEASURES,
        values=_values([figures for _, _, (_, figures) in rows]),
    )


def _values(figures: Sequence[Mapping[str, float]]) -> Any:
    return np.array(
        [[each.get(measure, np.nan) for measure in BASELINE_MEASURES] for each in figures],
        dtype=np.float64,
    ).reshape(len(figures), len(BASELINE_MEASURES))


def _pass_of(looks: Sequence[Observed]) -> dict[int, datetime]:
    """Return when the pass of each look began, by the look's identity."""
    begun: dict[int, datetime] = {}
    ordered = sorted(looks, key=lambda look: (look.platform, look.acquired_at))
    for _, of_platform in groupby(ordered, key=lambda look: look.platform):
        first: datetime | None = None
        for look in of_platform:
            if first is None or look.acquired_at - first > PASS_GAP:
                first = look.acquired_at
            begun[id(look)] = first
    return begun


def _passes(reading: _Reading, season: int) -> list[OnePass]:
    """Return the judged looks of a season, pass by pass."""
    axis = reading.axis
    found = looks_of(
        reading.session,
        axis,
        BASELINE_MEASURES,
        since=axis.begins_at(season),
        until=axis.ends_at(season),
        is_judged=True,
    )
    looks = [look for _, of_parcel in found for look in of_parcel]
    begun = _pass_of([look for look, _ in looks])
    by_pass: dict[tuple[datetime, str], list[Look]] = {}
    for look, figures in looks:
        by_pass.setdefault((begun[id(look)], look.platform), []).append((look, figures))
    return [
        _one_pass(reading, season, acquired_at, of_pass)
        for (acquired_at, _), of_pass in sorted(by_pass.items())
    ]


def _one_pass(
    reading: _Reading, season: int, acquired_at: datetime, looks: Sequence[Look]
) -> OnePass:
    axis = reading.axis
    rows = [look for look, _ in looks]
    water = [look.figure(f"{look.places.rule}.water") for look in rows]
    return OnePass(
        acquired_at=acquired_at,
        season=season,
        day=axis.day_of(acquired_at),
        parcels=[axis.refs[look.parcel_id] for look in rows],
        crops=[
            crops_on(reading.crops, look.parcel_id, [look.acquired_at.date()])[0] for look in rows
        ],
        scenes=[look.scene_ref for look in rows],
        looked_at=[look.acquired_at for look in rows],
        measures=BASELINE_MEASURES,
        values=_values([figures for _, figures in looks]),
        valid_share=np.array([look.of_look("valid_share") for look in rows], dtype=np.float64),
        water=np.array([np.nan if w is None else w for w in water], dtype=np.float64),
    )


def _judged_looks(
    axis: Axis, season: int, passes: Sequence[OnePass], steps: Sequence[Step]
) -> list[JudgedLook]:
    ids = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    judgements = [step.judgements for step in steps if step.judgements is not None]
    return [
        look
        for one, judged in zip(in_order(passes), judgements, strict=True)
        for look in _of_pass(one, judged, season, ids)
    ]


def _of_pass(
    one: OnePass, judged: Judgements, season: int, ids: Mapping[str, int]
) -> list[JudgedLook]:
    figures = np.stack([getattr(judged, name) for name in JUDGED], axis=-1).astype(np.float32)
    return [
        JudgedLook(
            parcel_id=ids[ref],
            acquired_at=one.looked_at[at],
            season=season,
            crop=one.crops[at],
            score=float(judged.score[at]) if np.isfinite(judged.score[at]) else None,
            unjudged=_reason(judged, at),
            figures=figures[at],
        )
        for at, ref in enumerate(one.parcels)
    ]


def _reason(judged: Judgements, at: int) -> str | None:
    reason = judged.unjudged[at]
    return None if reason is None else reason.value


def _record(
    session: Session, work: Resources, axis: Axis, judged: Sequence[_Season], *, at: datetime
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
    for each in judged:
        put_judgements(
            session,
            sorted(axis.refs),
            each.judged,
            baseline_ids,
            since=axis.begins_at(each.season),
            until=axis.ends_at(each.season),
            at=at,
        )
        rows[each.season].done = each.wanted
        rows[each.season].state = squeezed(each.state.to_dict())
    alerts, seasons = _all_alerts(axis, judged)
    parcels = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    happened = put_alerts(
        session, axis.id, seasons, alerts, parcels, [each.season for each in judged], at=at
    )
    _log.info("seasons judged", axis=axis.id, seasons=sorted(rows), changes=len(happened))
    for one in happened:
        announce_alert(session, work.settings, one, at=at)


def _baseline_id(session: Session, axis: Axis, judged: _Season, *, at: datetime) -> int:
    if judged.baseline_id is not None:
        return judged.baseline_id
    row = BaselineRow(
        axis=axis.id,
        season=judged.season,
        history=judged.fitted_from,
        version=judged.baselines.version,
        measures=list(judged.baselines.measures),
        arrays=packed(judged.baselines),
        fitted_at=at,
    )
    session.add(row)
    session.flush()
    return row.id


def _all_alerts(axis: Axis, judged: Sequence[_Season]) -> tuple[dict[str, Alert], dict[str, int]]:
    """Return the alerts of all seasons as they ended, and the season that opened each."""
    alerts: dict[str, Alert] = {}
    for each in judged:
        alerts |= each.alerts
    return alerts, {key: axis.season_of(alert.opened_at) for key, alert in alerts.items()}


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
