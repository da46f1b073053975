"""What replaying finished seasons said of the rules, for the newest season of each axis."""

from collections.abc import Mapping
from typing import Any

from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.alerts.tuning import Tuned
from service.seasons.axis import SeasonStart, season_ending_in
from service.store.alert_tables import BaselineRow

_TOLD = ("threshold", "replayed_rate", "parcel_weeks")


def told_of(tuned: Mapping[str, Tuned]) -> dict[str, Any]:
    """Return what tuning says of each rule, as it is kept beside the baselines."""
    return {
        rule: {name: getattr(each, name) for name in _TOLD} | {"seasons": len(each.seasons)}
        for rule, each in sorted(tuned.items())
    }


def tuning_of(session: Session) -> dict[str, list[dict[str, Any]]]:
    """Return by rule what tuning says of it on each axis, for the newest judged season."""
    newest = (
        select(BaselineRow.axis, func.max(BaselineRow.season).label("season"))
        .group_by(BaselineRow.axis)
        .subquery()
    )
    last = (
        select(func.max(BaselineRow.id))
        .join(
            newest,
            (newest.c.axis == BaselineRow.axis) & (newest.c.season == BaselineRow.season),
        )
        .group_by(BaselineRow.axis)
    )
    query = select(BaselineRow.axis, BaselineRow.season, BaselineRow.tuned)
    found: dict[str, list[dict[str, Any]]] = {}
    rows = session.execute(query.where(BaselineRow.id.in_(last)).order_by(BaselineRow.axis))
    for axis, season, tuned in rows:
        first, until = season_ending_in(season, SeasonStart.parse(axis))
        days = {"from_on": first.isoformat(), "until_on": until.isoformat()}
        for rule, told in (tuned or {}).items():
            found.setdefault(rule, []).append({"season_start": axis, **days, **told})
    return found
