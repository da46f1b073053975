"""Counting alerts by what they are and what people said of them."""

from collections import Counter
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.seasons.axis import SeasonStart, season_ending_in
from service.store.alert_tables import AlertRow
from service.store.alerts import VERDICTS, held_by
from service.store.judgements import RETRACTED
from service.store.tables import Parcel

REAL: Final = ("confirmed", "expected")
"""Verdicts that say something had happened, wanted or not."""
_STATES: Final = ("open", "acknowledged", "closed")


@dataclass(frozen=True, slots=True, kw_only=True)
class Counted:
    """So many alerts of one rule, cause, crop, season, state and verdict."""

    rule: str
    cause: str
    crop: str | None
    season: tuple[str, str]
    state: str
    verdict: str | None
    alerts: int


def counted_alerts(
    session: Session,
    *,
    holdings: Collection[str] | None,
    holding: str | None = None,
    since: datetime | None = None,
    until: datetime | None = None,
) -> list[Counted]:
    """Count the alerts that stand (none that was retracted) within a key's holdings.

    `since` (included) and `until` (not included) are about the time of opening.
    """
    crop = AlertRow.details["crop"].as_string()
    kinds = (
        AlertRow.rule,
        AlertRow.cause,
        crop,
        AlertRow.axis,
        AlertRow.season,
        AlertRow.state,
        AlertRow.verdict,
    )
    query = (
        select(*kinds, func.count())
        .join(Parcel, Parcel.id == AlertRow.parcel_id)
        .where(AlertRow.state != RETRACTED)
        .group_by(*kinds)
    )
    conditions = (
        (holdings, held_by(holdings or ())),
        (holding, held_by([holding] if holding else ())),
    )
    query = query.where(*(condition for asked, condition in conditions if asked is not None))
    if since is not None:
        query = query.where(AlertRow.opened_at >= since)
    if until is not None:
        query = query.where(AlertRow.opened_at < until)
    return [
        Counted(
            rule=rule,
            cause=cause,
            crop=grown or None,
            season=_days(axis, season),
            state=state,
            verdict=verdict,
            alerts=count,
        )
        for rule, cause, grown, axis, season, state, verdict, count in session.execute(query)
    ]


def _days(axis: str, season: int) -> tuple[str, str]:
    first, last = season_ending_in(season, SeasonStart.parse(axis))
    return first.isoformat(), last.isoformat()


def totals(counted: Iterable[Counted]) -> dict[str, Any]:
    """Return the numbers of some alerts: by state, by verdict, and their precision.

    Precision is the share of alerts with a verdict of which a person said that something had
    happened; None where nobody said anything.
    """
    states: Counter[str] = Counter()
    verdicts: Counter[str] = Counter()
    for each in counted:
        states[each.state] += each.alerts
        if each.verdict is not None:
            verdicts[each.verdict] += each.alerts
    said = sum(verdicts.values())
    return {
        "alerts": sum(states.values()),
        **{state: states[state] for state in _STATES},
        "verdicts": {verdict: verdicts[verdict] for verdict in VERDICTS},
        "precision": sum(verdicts[real] for real in REAL) / said if said else None,
    }


def by(counted: Sequence[Counted], name: str) -> Mapping[Any, list[Counted]]:
    """Return the alerts by one of the things that they are counted by, in order."""
    found: dict[Any, list[Counted]] = {}
    for each in counted:
        found.setdefault(getattr(each, name), []).append(each)
    return dict(sorted(found.items(), key=lambda pair: (pair[0] is None, pair[0])))
