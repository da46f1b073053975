"""Regional notices, and departures that something explains, as judging found them."""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

from sqlalchemy import and_, func, or_, select
from sqlalchemy.orm import Session

from service.alerts.explained import Explained
from service.alerts.notices import Notice
from service.errors import NotFound
from service.store.alert_tables import ExplainedRow, NoticeRow
from service.store.judgements import RETRACTED, since_judged
from service.store.tables import Parcel

OPENED: Final = "opened"
CLOSED: Final = "closed"


@dataclass(frozen=True, slots=True, kw_only=True)
class NoticeTold:
    """What is worth telling of a notice."""

    row: NoticeRow
    kind: str


def put_notices(
    session: Session,
    axis: str,
    seasons: Mapping[str, int],
    notices: Mapping[str, Notice],
    judged: Mapping[int, datetime | None],
    *,
    at: datetime,
) -> list[NoticeTold]:
    """Make the notices of some seasons those that judging found; return what is worth telling.

    Parameters
    ----------
    seasons
        Notice → the season in which it opened.
    judged
        Season → behind which instant it was judged (None: from its start). Notices opened
        there that judging no longer opens are retracted, and kept.
    """
    query = select(NoticeRow).where(
        NoticeRow.axis == axis, since_judged(NoticeRow.season, NoticeRow.opened_at, judged)
    )
    rows = {row.id: row for row in session.scalars(query)}
    told: list[NoticeTold] = []
    for notice_id, notice in sorted(notices.items()):
        row = rows.pop(notice_id, None) or session.get(NoticeRow, notice_id)
        before = None if row is None or row.state == RETRACTED else row.state
        if row is None:
            row = NoticeRow(id=notice_id, axis=axis, recorded_at=at, revision=0)
            session.add(row)
        _fill(row, notice, seasons[notice_id])
        if before is None:
            told.append(NoticeTold(row=row, kind=OPENED))
        if row.state == CLOSED and before != CLOSED:
            told.append(NoticeTold(row=row, kind=CLOSED))
    for row in rows.values():
        if row.state != RETRACTED:
            row.state = RETRACTED
            row.revision += 1
            told.append(NoticeTold(row=row, kind=CLOSED))
    session.flush()
    return told


def _fill(row: NoticeRow, notice: Notice, season: int) -> None:
    members = {
        "season": season,
        "kind": notice.kind,
        "state": notice.state.value,
        "measure": notice.measure,
        "shift": notice.shift,
        "crops": list(notice.crops),
        "opened_at": notice.opened_at,
        "closed_at": notice.closed_at,
    }
    if all(getattr(row, name) == value for name, value in members.items()):
        return
    for name, value in members.items():
        setattr(row, name, value)
    row.revision += 1


def get_notice(session: Session, notice_id: str) -> NoticeRow:
    """Return a notice.

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.get(NoticeRow, notice_id)
    if row is None:
        raise notice_not_found()
    return row


def notice_not_found() -> NotFound:
    """Return the error for a notice that is not there, or not for this key."""
    return NotFound("notice-not-found", "There is no regional notice with this id.")


def list_notices(
    session: Session,
    *,
    states: Collection[str] | None = None,
    since: datetime | None = None,
    after: tuple[datetime, str] | None = None,
    limit: int,
) -> Sequence[NoticeRow]:
    """List notices, the last opened first; `since` is about the time of opening, included."""
    query = select(NoticeRow)
    if states is not None:
        query = query.where(NoticeRow.state.in_(list(states)))
    if since is not None:
        query = query.where(NoticeRow.opened_at >= since)
    if after is not None:
        opened_at, notice_id = after
        same = and_(NoticeRow.opened_at == opened_at, NoticeRow.id > notice_id)
        query = query.where(or_(NoticeRow.opened_at < opened_at, same))
    query = query.order_by(NoticeRow.opened_at.desc(), NoticeRow.id)
    return session.scalars(query.limit(limit)).all()


def put_explained(
    session: Session,
    axis: str,
    seasons: Mapping[str, int],
    explained: Mapping[str, Explained],
    parcels: Mapping[str, int],
    judged: Mapping[int, datetime | None],
    *,
    at: datetime,
) -> None:
    """Make the explained departures of some seasons, where judged, those that judging found."""
    query = select(ExplainedRow).where(
        ExplainedRow.axis == axis,
        since_judged(ExplainedRow.season, ExplainedRow.departed_at, judged),
    )
    rows = {row.alert_id: row for row in session.scalars(query)}
    for alert_id, each in sorted(explained.items()):
        row = rows.pop(alert_id, None) or session.get(ExplainedRow, alert_id)
        if row is None:
            row = ExplainedRow(alert_id=alert_id, recorded_at=at)
            session.add(row)
        row.parcel_id = parcels[each.parcel]
        row.axis, row.season = axis, seasons[alert_id]
        row.rule, row.cause, row.because = each.rule, each.cause, each.because
        row.departed_at = datetime.fromisoformat(each.at)
    for row in rows.values():
        session.delete(row)
    session.flush()


def explained_on(session: Session, parcel: Parcel) -> Sequence[ExplainedRow]:
    """Return the departures of a parcel that something explains, in order of time."""
    query = select(ExplainedRow).where(ExplainedRow.parcel_id == parcel.id)
    return session.scalars(query.order_by(ExplainedRow.departed_at, ExplainedRow.alert_id)).all()


def held_back_by(session: Session, notice_ids: Collection[str]) -> dict[str, int]:
    """Return how many alerts notices held back, by notice."""
    said = {f"regional notice {notice_id}": notice_id for notice_id in notice_ids}
    query = select(ExplainedRow.because, func.count()).where(ExplainedRow.because.in_(list(said)))
    counts = {said[because]: n for because, n in session.execute(query.group_by("because"))}
    return {notice_id: counts.get(notice_id, 0) for notice_id in notice_ids}
