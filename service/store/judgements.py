"""Writing what judging found: judgements look by look, alerts and what happened to them."""

from collections.abc import Collection, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import ColumnElement, and_, or_, select
from sqlalchemy.orm import InstrumentedAttribute, Session

from service.alerts.alert import Alert, AlertState, ChangeKind
from service.errors import Fault, RejectedInput
from service.seasons.baseline import basis_of
from service.store.alert_tables import AlertChange, AlertRow, BaselineRow, Judgement
from service.store.batches import in_batches
from service.store.judged_looks import JUDGED
from service.store.tables import Parcel

_WEIGHT: Final = JUDGED.index("weight")
RETRACTED: Final = "retracted"


@dataclass(frozen=True, slots=True, kw_only=True)
class Happened:
    """Something that happened to an alert, to be told."""

    row: AlertRow
    kind: str
    number: int


Judged = dict[str, dict[str, float | str | None]]
"""By measure, the figures that `JUDGED` names, None where unknown; and beside them `p`, the
`basis` of what was expected, and why the look was not judged (`unjudged`)."""


def judgements_of(
    session: Session,
    parcel: Parcel,
    *,
    since: datetime | None = None,
    until: datetime | None = None,
    as_of: datetime | None = None,
) -> dict[datetime, Judged]:
    """Return what is thought of a parcel's looks, by acquisition; `until` is not included.

    Raises
    ------
    RejectedInput
        One of them was judged anew since `as_of`: what was thought then is not kept.
    """
    query = (
        select(Judgement, BaselineRow.measures)
        .join(BaselineRow, BaselineRow.id == Judgement.baseline_id)
        .where(Judgement.parcel_id == parcel.id)
    )
    if since is not None:
        query = query.where(Judgement.acquired_at >= since)
    if until is not None:
        query = query.where(Judgement.acquired_at < until)
    found: dict[datetime, Judged] = {}
    for row, measures in session.execute(query):
        if as_of is not None and row.recorded_at > as_of:
            raise RejectedInput(
                "not-kept",
                "Looks of this parcel were judged since then, and what was expected of them at "
                "that time is not kept. Ask for an interval that was not, without `with`, or "
                "without `as_of`.",
                [Fault(parameter="as_of", detail="Judgements of that time are not kept.")],
            )
        table = row.figures.reshape(len(measures), len(JUDGED))
        found[row.acquired_at] = {
            measure: _judged(row, figures) for measure, figures in zip(measures, table, strict=True)
        }
    return found


def _judged(row: Judgement, figures: NDArray[np.float32]) -> dict[str, float | str | None]:
    known: dict[str, float | str | None] = {
        name: None if np.isnan(value) else float(str(value))
        for name, value in zip(JUDGED, figures, strict=True)
    }
    is_expected = known["expected"] is not None
    return known | {
        "p": None if row.p is None or known["departure"] is None else float(f"{row.p:.4g}"),
        "basis": basis_of(float(figures[_WEIGHT])).value if is_expected else None,
        "unjudged": row.unjudged,
    }


def departures_at(
    session: Session, measure: str, looks: Mapping[int, datetime]
) -> dict[int, float | None]:
    """Return by parcel how far a measure departed at one look each, None where unknown."""
    query = select(Judgement, BaselineRow.measures).join(
        BaselineRow, BaselineRow.id == Judgement.baseline_id
    )
    found: dict[int, float | None] = {}
    for instants in in_batches(sorted(set(looks.values()))):
        for row, measures in session.execute(query.where(Judgement.acquired_at.in_(instants))):
            if looks.get(row.parcel_id) == row.acquired_at and measure in measures:
                table = row.figures.reshape(len(measures), len(JUDGED))
                value = table[measures.index(measure), JUDGED.index("departure")]
                found[row.parcel_id] = None if np.isnan(value) else float(str(value))
    return found


def put_alerts(
    session: Session,
    axis: str,
    seasons: Mapping[str, int],
    alerts: Mapping[str, Alert],
    parcels: Mapping[str, int],
    judged: Mapping[int, datetime | None],
    *,
    rules: Collection[str],
    at: datetime,
) -> list[Happened]:
    """Make the alerts of some seasons and rules those that judging found; return what happened.

    Parameters
    ----------
    seasons
        Alert → the season in which it opened.
    parcels
        Parcel ref → id.
    judged
        Season → behind which instant it was judged (None: from its start). Alerts opened
        there that judging no longer opens are retracted, and kept.
    rules
        Those that judged; the alerts of others stay as they are.
    """
    query = select(AlertRow).where(
        AlertRow.axis == axis,
        AlertRow.rule.in_(list(rules)),
        since_judged(AlertRow.season, AlertRow.opened_at, judged),
    )
    rows = {row.id: row for row in session.scalars(query)}
    for some in in_batches(sorted(set(alerts) - set(rows))):
        carried = session.scalars(select(AlertRow).where(AlertRow.id.in_(some)))
        rows |= {row.id: row for row in carried}
    happened: list[Happened] = []
    for alert_id, alert in sorted(alerts.items()):
        row = rows.pop(alert_id, None)
        if row is None:
            row = _row(axis, seasons[alert_id], parcels[alert.parcel], alert, at=at)
            session.add(row)
            session.flush()
            happened.append(_note(session, row, ChangeKind.OPENED, {}, at=at))
            if alert.is_closed:
                happened.append(_note(session, row, ChangeKind.CLOSED, {}, at=at))
        else:
            happened += _moved(session, row, alert, at=at)
    for row in rows.values():
        if row.state != RETRACTED:
            happened.append(_retract(session, row, at=at))
    return happened


def since_judged(
    season: InstrumentedAttribute[int],
    at: InstrumentedAttribute[datetime],
    judged: Mapping[int, datetime | None],
) -> ColumnElement[bool]:
    """Whether something of a season lies where that was judged (`put_alerts`)."""
    return or_(
        *(
            season == each if after is None else and_(season == each, at > after)
            for each, after in judged.items()
        )
    )


def _row(axis: str, season: int, parcel_id: int, alert: Alert, *, at: datetime) -> AlertRow:
    row = AlertRow(
        id=alert.id, parcel_id=parcel_id, axis=axis, season=season, recorded_at=at, revision=0
    )
    _fill(row, alert)
    return row


def _fill(row: AlertRow, alert: Alert) -> None:
    row.rule = alert.rule
    row.state = alert.state.value
    row.severity = alert.severity
    row.measure = alert.index
    row.cause = alert.cause.kind
    row.verdict = alert.verdict
    row.first_departure_at = alert.first_departure_at
    row.opened_at = alert.opened_at
    row.closed_at = alert.closed_at
    row.last_observed_at = alert.last_observed_at
    row.details = alert.as_dict()


def _moved(session: Session, row: AlertRow, alert: Alert, *, at: datetime) -> list[Happened]:
    """Bring a row up to date, and note what is worth telling."""
    if row.details == alert.as_dict() and row.state == alert.state.value:
        return []
    before = {"state": row.state, "cause": row.cause, "severity": row.severity}
    _fill(row, alert)
    after = {"state": row.state, "cause": row.cause, "severity": row.severity}
    what = {name: [before[name], after[name]] for name in before if before[name] != after[name]}
    if not what:
        # Only figures moved on with a look: nothing to tell, but another revision.
        row.revision += 1
        return []
    is_closing = "state" in what and alert.state is AlertState.CLOSED
    kind = ChangeKind.CLOSED if is_closing else ChangeKind.CHANGED
    return [_note(session, row, kind, what, at=at)]


def _retract(session: Session, row: AlertRow, *, at: datetime) -> Happened:
    before = row.state
    row.state = RETRACTED
    reason = (
        "Judged anew, after a scene came late or was replaced or withdrawn, or after crops, the "
        "diary or a rule were changed, it does not open."
    )
    return _note(session, row, RETRACTED, {"state": [before, RETRACTED], "reason": reason}, at=at)


def _note(
    session: Session, row: AlertRow, kind: str, what: dict[str, Any], *, at: datetime
) -> Happened:
    change = note_change(session, row, str(kind), what, at=at)
    return Happened(row=row, kind=str(kind), number=change.number)


def note_change(
    session: Session,
    row: AlertRow,
    kind: str,
    what: dict[str, Any],
    *,
    at: datetime,
    who: str | None = None,
    verdict: str | None = None,
    note: str | None = None,
) -> AlertChange:
    """Add to an alert's history, and raise its revision."""
    row.revision += 1
    change = AlertChange(
        alert_id=row.id,
        number=row.revision,
        kind=kind,
        look_at=row.last_observed_at,
        recorded_at=at,
        who=who,
        verdict=verdict,
        note=note,
        what=what,
    )
    session.add(change)
    session.flush()
    return change
