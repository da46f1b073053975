"""Judging one season of an axis, from the first look that may have changed to its end."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy.orm import Session

from service.assess import Prepared, State, prepare
from service.jobs.folding import Folded, Known, Start, fold_season, rests_on
from service.jobs.resources import HeldBaselines
from service.jobs.season_looks import passes_of, past_of
from service.store.alert_tables import BaselineRow, FoldState, SeasonFold
from service.store.crops import labels_in
from service.store.folds import last_state, newest_state
from service.store.judging import (
    Axis,
    PastAlert,
    actions_in,
    find_baselines,
    history_key,
    past_alerts,
    unpacked,
    unsqueezed,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Basis:
    """What a season is judged by, from which history, and the baselines' number if kept."""

    prepared: Prepared
    history: str
    number: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class JudgedSeason:
    """A season judged behind `after` (None: from its start); `wanted` is the promise kept."""

    season: int
    wanted: int
    basis: Basis
    after: datetime | None
    folded: Folded


def judge_season(
    session: Session,
    held: HeldBaselines,
    axis: Axis,
    promised: SeasonFold,
    known: Known,
    earlier: Sequence[JudgedSeason],
) -> JudgedSeason:
    """Judge a promised season; `earlier` are those that were judged with it, not yet recorded."""
    season = promised.season
    labels = labels_in(session, axis, season)
    basis = _basis(session, held, axis, season, known, labels, earlier)
    start = _start(session, axis, promised, basis, known, earlier)
    folded = fold_season(
        known,
        start,
        passes_of(session, axis, season, after=start.after, compared=labels),
        actions_in(session, axis, season, since=start.pass_at),
        basis.prepared,
        axis=axis,
        season=season,
    )
    return JudgedSeason(
        season=season, wanted=promised.wanted, basis=basis, after=start.after, folded=folded
    )


def _basis(
    session: Session,
    held: HeldBaselines,
    axis: Axis,
    season: int,
    known: Known,
    labels: Mapping[str, str],
    earlier: Sequence[JudgedSeason],
) -> Basis:
    """Return the baselines that are kept if their history is the same, and else new ones."""
    alerts = _alerts_before(session, axis, season, earlier)
    beside = [*rests_on(known), sorted(labels.items())]
    history = history_key(session, axis, season, alerts, beside)
    number = find_baselines(session, axis.id, season, history)
    if number is None:
        past = past_of(session, axis, season, labels, alerts=alerts)
        prepared = prepare(past, known.rules, known.holdings)
        return Basis(prepared=prepared, history=history, number=None)
    kept = held.find(number) or unpacked(session.get_one(BaselineRow, number).arrays)
    held.hold(number, kept)
    return Basis(prepared=kept, history=history, number=number)


def _alerts_before(
    session: Session, axis: Axis, season: int, earlier: Sequence[JudgedSeason]
) -> list[PastAlert]:
    """Return the alerts before a season: as they are kept, and as seasons before it found them."""
    begin = axis.begins_at(season)
    alerts = past_alerts(session, axis, begin)
    ids = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    for judged in earlier:
        found = judged.folded.alerts
        # What judging no longer opens will be retracted.
        kept = [
            alert
            for alert in alerts
            if alert.id not in found
            and (
                axis.season_of(alert.opened_at) != judged.season
                or (judged.after is not None and alert.opened_at <= judged.after)
            )
        ]
        alerts = kept + [
            PastAlert(
                id=alert.id,
                parcel_id=ids[alert.parcel],
                opened_at=alert.opened_at,
                first=alert.first_departure_at,
                last=min(alert.closed_at or begin, begin),
                verdict=alert.verdict,
            )
            for alert in found.values()
            if alert.first_departure_at < begin
        ]
    return alerts


def _start(
    session: Session,
    axis: Axis,
    promised: SeasonFold,
    basis: Basis,
    known: Known,
    earlier: Sequence[JudgedSeason],
) -> Start:
    """Return where to begin: before the first look that may have changed."""
    if earlier:
        return Start(states=earlier[-1].folded.states)
    if promised.wanted_from is not None:
        row = newest_state(
            session, axis.id, promised.season, basis=basis.history, before=promised.wanted_from
        )
        if row is not None:
            return _behind(row)
    return Start(states=states_before(session, axis, promised.season, known, basis.prepared))


def _behind(row: FoldState) -> Start:
    return Start(
        states=unsqueezed(row.state),
        after=row.seen_until,
        pass_at=row.pass_at,
        number=row.number,
    )


def states_before(
    session: Session, axis: Axis, season: int, known: Known, prepared: Prepared
) -> Mapping[str, State]:
    """Return what the last judged season before one remembers at its end, by rule.

    People may have acted behind its last pass.
    """
    row = last_state(session, axis.id, season)
    if row is None:
        return {}
    actions = actions_in(session, axis, row.season, since=row.pass_at)
    return fold_season(
        known, _behind(row), [], actions, prepared, axis=axis, season=row.season
    ).states
