"""Rehearsal: what a rule would have raised over past looks, by the code that judges."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime

import numpy as np
from sqlalchemy.orm import Session

from service.alerts.alert import Alert
from service.alerts.rules import Rule
from service.assess import Prepared, State, prepare
from service.jobs.folding import Folded, Known, Start, fold_season, known_of, rests_on
from service.jobs.season_judging import states_before
from service.jobs.season_looks import passes_of, past_of
from service.seasons.axis import season_ending_in
from service.seasons.judgement import OnePass
from service.store.alert_tables import BaselineRow
from service.store.columns import microseconds
from service.store.crops import labels_in
from service.store.judging import (
    Axis,
    actions_in,
    axes,
    find_baselines,
    history_key,
    past_alerts,
    unpacked,
)

_DAYS_A_WEEK = 7.0
_MICROSECONDS_A_DAY = 86_400e6


@dataclass(frozen=True, slots=True, kw_only=True)
class RehearsedSeason:
    """One season of an axis as it was rehearsed.

    `threshold` is the one that was used, None = the default; `replayed_rate` is in alarms per
    1,000 parcel-weeks of the seasons before. `of_judged_looks` is false where the season was
    never judged, so that looks which only shape baselines were taken.
    """

    season_start: str
    from_on: str
    until_on: str
    threshold: float | None
    replayed_rate: float | None
    of_judged_looks: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Rehearsed:
    """What a rule would have raised.

    `alarms` are in order of opening; `held_back` counts those that diary or notices explain;
    `parcel_weeks` were watched in the interval, from each parcel's first look to its last.
    """

    seasons: Sequence[RehearsedSeason]
    alarms: Sequence[Alert]
    held_back: int
    parcel_weeks: float


@dataclass(frozen=True, slots=True, kw_only=True)
class _One:
    season: RehearsedSeason
    folded: Folded


def rehearse(
    session: Session,
    rule: Rule,
    *,
    since: datetime,
    until: datetime,
    starts: tuple[str, str],
) -> Rehearsed:
    """Fold the seasons that share days with an interval by one rule, raising nothing.

    A rule that stands begins with what its fold remembers of the season before, any other one
    with nothing. What people did with its alerts, and the diary, count as they do in judging.

    Parameters
    ----------
    since, until
        Of the looks that open alarms; `until` is not included.
    """
    enabled = replace(rule, enabled=True)
    seasons = [
        one
        for axis in axes(session, starts)
        for one in _seasons(session, axis, enabled, since, until)
    ]
    alarms = [
        alert
        for one in seasons
        for alert in one.folded.alerts.values()
        if since <= alert.opened_at < until
    ]
    held = [e for one in seasons for e in one.folded.explained.values()]
    return Rehearsed(
        seasons=[one.season for one in seasons],
        alarms=sorted(alarms, key=lambda alert: (alert.opened_at, alert.id)),
        held_back=sum(since <= datetime.fromisoformat(each.at) < until for each in held),
        parcel_weeks=sum(_weeks(one.folded, since, until) for one in seasons),
    )


def _seasons(
    session: Session, axis: Axis, rule: Rule, since: datetime, until: datetime
) -> Iterator[_One]:
    everything = known_of(session, axis)
    is_standing = rule in everything.rules
    known = replace(everything, rules=[rule])
    states: Mapping[str, State] | None = None
    for season in range(axis.season_of(since), axis.season_of(until) + 1):
        labels = labels_in(session, axis, season)
        judged = passes_of(session, axis, season, compared=labels)
        passes = judged or passes_of(session, axis, season, compared=labels, is_judged=None)
        if not passes or axis.begins_at(season) >= until:
            continue
        prepared = _prepared(session, axis, season, labels, known, everything)
        if states is None:
            states = {}
            if is_standing:
                states = states_before(session, axis, season, known, prepared)
        folded = _folded(session, axis, season, known, states, passes, prepared)
        states = folded.states
        yield _One(
            season=_told(axis, season, rule, prepared, is_judged=bool(judged)), folded=folded
        )


def _folded(
    session: Session,
    axis: Axis,
    season: int,
    known: Known,
    states: Mapping[str, State],
    passes: Sequence[OnePass],
    prepared: Prepared,
) -> Folded:
    actions = actions_in(session, axis, season)
    return fold_season(
        known, Start(states=states), passes, actions, prepared, axis=axis, season=season
    )


def _prepared(
    session: Session,
    axis: Axis,
    season: int,
    labels: Mapping[str, str],
    known: Known,
    everything: Known,
) -> Prepared:
    """Return baselines of a season and the rule's tuning on them, those that are kept if any."""
    (rule,) = known.rules
    alerts = past_alerts(session, axis, axis.begins_at(season))
    beside = [*rests_on(everything), sorted(labels.items())]
    history = history_key(session, axis, season, alerts, beside)
    number = find_baselines(session, axis.id, season, history)
    if number is not None:
        kept = unpacked(session.get_one(BaselineRow, number).arrays)
        if rule in everything.rules:
            return kept
        if not rule.is_auto:
            # What tuning says there is of other rules.
            return replace(kept, tuned={})
    past = past_of(session, axis, season, labels, alerts=alerts)
    return prepare(past, known.rules, known.holdings)


def _told(
    axis: Axis, season: int, rule: Rule, prepared: Prepared, *, is_judged: bool
) -> RehearsedSeason:
    first, last = season_ending_in(season, axis.start)
    tuned = prepared.tuned.get(rule.id)
    used = rule.threshold
    if used is None and tuned is not None:
        used = tuned.threshold
    return RehearsedSeason(
        season_start=axis.id,
        from_on=first.isoformat(),
        until_on=last.isoformat(),
        threshold=used,
        replayed_rate=None if tuned is None else tuned.replayed_rate,
        of_judged_looks=is_judged,
    )


def _weeks(folded: Folded, since: datetime, until: datetime) -> float:
    """Return for how many weeks parcels were watched within an interval."""
    first, last = microseconds(since), microseconds(until)
    spans: dict[int, tuple[int, int]] = {}
    for one in folded.passes:
        is_watched = np.isfinite(one.score) & (one.instants >= first) & (one.instants < last)
        parcels, instants = one.parcel_ids[is_watched], one.instants[is_watched]
        for parcel, at in zip(parcels.tolist(), instants.tolist(), strict=True):
            begun, ended = spans.get(parcel, (at, at))
            spans[parcel] = (min(begun, at), max(ended, at))
    days = sum((ended - begun) / _MICROSECONDS_A_DAY + 1 for begun, ended in spans.values())
    return days / _DAYS_A_WEEK
