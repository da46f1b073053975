"""Alerts as people see them and act on them."""

from collections.abc import Collection, Sequence
from datetime import UTC, datetime
from typing import Any, Final

from sqlalchemy import ColumnElement, and_, or_, select
from sqlalchemy.orm import Session

from service.alerts.actions import ActionKind
from service.alerts.alert import CAUTION
from service.errors import Conflict, NotFound
from service.store.alert_tables import AlertChange, AlertRow
from service.store.judgements import RETRACTED, Happened, note_change
from service.store.tables import Holding, Parcel, Scene

_EARLIEST: Final = datetime(1970, 1, 1, tzinfo=UTC)
VERDICTS: Final = ("confirmed", "expected", "false_alarm", "bad_data")
_FIGURES: Final = ("observed", "expected", "shortfall")
_SCORES: Final = ("departure", "score")
_COPIED: Final = (
    "rule",
    "direction",
    "looks",
    "scenes",
    "basis",
    "is_new_crop",
    "is_weak",
    "low_power",
    "closed_by",
    "crop",
    "baseline",
)


def document_of(row: AlertRow) -> dict[str, Any]:
    """Return an alert as it is answered and told."""
    details = row.details
    return {
        "id": row.id,
        "state": row.state,
        "parcel": row.parcel.ref,
        "holding": row.parcel.holding.ref if row.parcel.holding else None,
        "opened_at": _written(row.opened_at),
        "closed_at": _written(row.closed_at),
        "first_departure_at": _written(row.first_departure_at),
        "last_observed_at": _written(row.last_observed_at),
        "recorded_at": _written(row.recorded_at),
        "index": row.measure,
        "severity": row.severity,
        "cause": details["cause"],
        "verdict": row.verdict,
        **{name: details[name] for name in _COPIED},
        # As told; judging keeps them whole.
        **{name: round(details[name], 4) for name in _FIGURES},
        **{name: round(details[name], 2) for name in _SCORES},
        "chance": _share(details.get("chance")),
        "p": _share(details.get("p")),
        "diary": details.get("diary", []),
        "departures": {name: round(z, 2) + 0.0 for name, z in details["departures"].items()},
        "revision": row.revision,
        "caution": CAUTION,
    }


def _share(value: float | None) -> float | None:
    return None if value is None else float(f"{value:.3g}")


def _written(instant: datetime | None) -> str | None:
    return None if instant is None else instant.isoformat().replace("+00:00", "Z")


def get_alert(session: Session, alert_id: str, *, holdings: Collection[str] | None) -> AlertRow:
    """Return an alert of a parcel within the key's holdings (None: all).

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.get(AlertRow, alert_id)
    held = row.parcel.holding.ref if row is not None and row.parcel.holding else None
    if row is None or (holdings is not None and held not in holdings):
        raise NotFound("alert-not-found", "There is no alert with this id.")
    return row


def history_of(session: Session, alert_id: str) -> Sequence[AlertChange]:
    """Return what happened to an alert, in order."""
    query = select(AlertChange).where(AlertChange.alert_id == alert_id)
    return session.scalars(query.order_by(AlertChange.number)).all()


def list_alerts(
    session: Session,
    *,
    holdings: Collection[str] | None,
    states: Collection[str] | None = None,
    severity: str | None = None,
    holding: str | None = None,
    parcel: str | None = None,
    since: datetime | None = None,
    measure: str | None = None,
    cause: str | None = None,
    after: tuple[datetime, str] | None = None,
    limit: int,
) -> Sequence[AlertRow]:
    """List alerts, the last opened first; `since` is about the time of opening, included."""
    query = select(AlertRow).join(Parcel, Parcel.id == AlertRow.parcel_id)
    conditions = (
        (severity, AlertRow.severity == severity),
        (measure, AlertRow.measure == measure),
        (cause, AlertRow.cause == cause),
        (states, AlertRow.state.in_(list(states or ()))),
        (parcel, Parcel.ref == parcel),
        (since, AlertRow.opened_at >= (since or _EARLIEST)),
        (holdings, held_by(holdings or ())),
        (holding, held_by([holding] if holding else ())),
    )
    query = query.where(*(condition for asked, condition in conditions if asked is not None))
    if after is not None:
        opened_at, alert_id = after
        query = query.where(
            or_(
                AlertRow.opened_at < opened_at,
                and_(AlertRow.opened_at == opened_at, AlertRow.id > alert_id),
            )
        )
    return session.scalars(
        query.order_by(AlertRow.opened_at.desc(), AlertRow.id).limit(limit)
    ).all()


def open_alerts(session: Session, at: datetime) -> dict[int, list[str]]:
    """Return by parcel the alerts that were open at an instant, by acquisition, newest first."""
    query = select(AlertRow.parcel_id, AlertRow.id).where(
        AlertRow.state != RETRACTED,
        AlertRow.opened_at <= at,
        or_(AlertRow.closed_at.is_(None), AlertRow.closed_at > at),
    )
    found: dict[int, list[str]] = {}
    for parcel_id, alert_id in session.execute(query.order_by(AlertRow.opened_at.desc())):
        found.setdefault(parcel_id, []).append(alert_id)
    return found


def held_by(holdings: Collection[str]) -> ColumnElement[bool]:
    """Return the condition that a parcel belongs to one of some holdings."""
    return Parcel.holding_id.in_(select(Holding.id).where(Holding.ref.in_(list(holdings))))


def count_opened_by(session: Session, scene: Scene) -> int:
    """Count the alerts that the looks of a scene opened."""
    query = select(AlertRow).where(
        AlertRow.opened_at == scene.acquired_at, AlertRow.state != RETRACTED
    )
    return sum(scene.ref in row.details["scenes"] for row in session.scalars(query))


def act_on(
    session: Session,
    row: AlertRow,
    kind: ActionKind,
    *,
    who: str,
    verdict: str | None,
    note: str | None,
    at: datetime,
) -> Happened:
    """Do what a person says with an alert; judging takes it up from here.

    Raises
    ------
    Conflict
        The alert's state does not allow it.
    """
    _check_state(row, kind)
    before = row.state
    row.state = {
        ActionKind.ACKNOWLEDGE: "acknowledged",
        ActionKind.CLOSE: "closed",
        ActionKind.REOPEN: "open",
    }[kind]
    row.verdict = verdict
    row.closed_at = row.last_observed_at if kind is ActionKind.CLOSE else None
    row.details = {
        **row.details,
        "state": row.state,
        "verdict": verdict,
        "closed_at": row.closed_at.isoformat() if row.closed_at else None,
        "closed_by": "person" if kind is ActionKind.CLOSE else None,
    }
    change = note_change(
        session,
        row,
        kind.value,
        {"state": [before, row.state]},
        at=at,
        who=who,
        verdict=verdict,
        note=note,
    )
    told = "closed" if kind is ActionKind.CLOSE else "changed"
    return Happened(row=row, kind=told, number=change.number)


def _check_state(row: AlertRow, kind: ActionKind) -> None:
    if row.state == RETRACTED:
        raise Conflict(
            "alert-state", "This alert was retracted: judged anew, it does not open any more."
        )
    is_closed = row.state == "closed"
    if kind is ActionKind.REOPEN and not is_closed:
        raise Conflict("alert-state", f"Only a closed alert is reopened; this one is {row.state}.")
    if kind is not ActionKind.REOPEN and is_closed:
        raise Conflict("alert-state", "This alert is closed already; reopen it first.")
    if kind is ActionKind.ACKNOWLEDGE and row.state == "acknowledged":
        raise Conflict("alert-state", "This alert is acknowledged already.")
