"""Writing what judging found: judgements look by look, alerts and what happened to them."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import delete, insert, select, update
from sqlalchemy.orm import Session

from service.alerts.alert import Alert, AlertState, ChangeKind
from service.errors import Fault, RejectedInput
from service.store.alert_tables import AlertChange, AlertRow, BaselineRow, Judgement
from service.store.batches import in_batches
from service.store.tables import Parcel

JUDGED: Final = ("expected", "low", "high", "shortfall", "departure", "weight")
"""The figures of each measure in a judgement, in this order."""
RETRACTED: Final = "retracted"


@dataclass(frozen=True, slots=True, kw_only=True)
class JudgedLook:
    """What is thought of one look; `figures` has shape (measures, len(JUDGED))."""

    parcel_id: int
    acquired_at: datetime
    season: int
    crop: str | None
    score: float | None
    unjudged: str | None
    figures: NDArray[np.float32]


@dataclass(frozen=True, slots=True, kw_only=True)
class Happened:
    """Something that happened to an alert, to be told."""

    row: AlertRow
    kind: str
    number: int


def put_judgements(
    session: Session,
    parcel_ids: Sequence[int],
    looks: Iterable[JudgedLook],
    baseline_ids: Mapping[int, int],
    *,
    since: datetime,
    until: datetime,
    at: datetime,
) -> None:
    """Make the judgements of an interval these; rows that say the same stay as they are."""
    wanted = {(look.parcel_id, look.acquired_at): look for look in looks}
    touched: set[int] = set()
    for some in in_batches(parcel_ids):
        query = select(Judgement).where(
            Judgement.parcel_id.in_(some),
            Judgement.acquired_at >= since,
            Judgement.acquired_at < until,
        )
        for row in session.scalars(query):
            look = wanted.get((row.parcel_id, row.acquired_at))
            if look is not None and _is_same(row, look, baseline_ids[look.season]):
                del wanted[row.parcel_id, row.acquired_at]
                continue
            touched.add(row.parcel_id)
            session.expunge(row)
            session.execute(
                delete(Judgement)
                .where(
                    Judgement.parcel_id == row.parcel_id, Judgement.acquired_at == row.acquired_at
                )
                .execution_options(synchronize_session=False)
            )
    if wanted:
        session.execute(
            insert(Judgement),
            [
                {
                    "parcel_id": look.parcel_id,
                    "acquired_at": look.acquired_at,
                    "baseline_id": baseline_ids[look.season],
                    "crop": look.crop,
                    "score": look.score,
                    "unjudged": look.unjudged,
                    "figures": look.figures.ravel(),
                    "recorded_at": at,
                }
                for _, look in sorted(wanted.items())
            ],
        )
    _bump(session, touched | {parcel_id for parcel_id, _ in wanted})


def _is_same(row: Judgement, look: JudgedLook, baseline_id: int) -> bool:
    said = (row.baseline_id, row.crop, row.score, row.unjudged)
    return said == (baseline_id, look.crop, look.score, look.unjudged) and np.array_equal(
        row.figures, look.figures.ravel(), equal_nan=True
    )


def _bump(session: Session, parcel_ids: Iterable[int]) -> None:
    for some in in_batches(sorted(parcel_ids)):
        session.execute(
            update(Parcel)
            .where(Parcel.id.in_(some))
            .values(revision=Parcel.revision + 1)
            .execution_options(synchronize_session=False)
        )


Judged = dict[str, dict[str, float | None]]
"""By measure, the figures that `JUDGED` names, None where unknown."""


def judgements_of(
    session: Session, parcel: Parcel, *, as_of: datetime | None
) -> dict[datetime, Judged]:
    """Return what is thought of a parcel's looks, by acquisition.

    Raises
    ------
    RejectedInput
        Something was judged anew since `as_of`: what was thought then is not kept.
    """
    query = (
        select(Judgement, BaselineRow.measures)
        .join(BaselineRow, BaselineRow.id == Judgement.baseline_id)
        .where(Judgement.parcel_id == parcel.id)
    )
    found: dict[datetime, Judged] = {}
    for row, measures in session.execute(query):
        if as_of is not None and row.recorded_at > as_of:
            raise RejectedInput(
                "not-kept",
                "Looks of this parcel were judged since then, and what was expected of them at "
                "that time is not kept. Ask without `with`, or without `as_of`.",
                [Fault(parameter="as_of", detail="Judgements of that time are not kept.")],
            )
        table = row.figures.reshape(len(measures), len(JUDGED))
        found[row.acquired_at] = {
            measure: {
                name: None if np.isnan(value) else float(str(value))
                for name, value in zip(JUDGED, figures, strict=True)
            }
            for measure, figures in zip(measures, table, strict=True)
        }
    return found


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
    folded: Sequence[int],
    *,
    at: datetime,
) -> list[Happened]:
    """Make the alerts of some seasons those that judging found; return what happened.

    Parameters
    ----------
    seasons
        Alert → the season in which it opened.
    parcels
        Parcel ref → id.
    folded
        The seasons that were judged: alerts of theirs that judging no longer opens are
        retracted, and kept.
    """
    query = select(AlertRow).where(AlertRow.axis == axis, AlertRow.season.in_(folded))
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
    reason = "Judged anew, after a scene came late or was replaced or withdrawn, it does not open."
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
