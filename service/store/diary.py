"""The diary: what people know to have happened on parcels."""

import secrets
from collections.abc import Iterable, Iterator, Mapping
from datetime import date, datetime

from sqlalchemy import and_, or_, select
from sqlalchemy.orm import Session

from service.alerts.diary import DiaryEntry, DiaryKind
from service.errors import NotFound
from service.store.alert_tables import DiaryRow
from service.store.batches import in_batches
from service.store.tables import Parcel


def add_entry(
    session: Session,
    parcel: Parcel,
    *,
    kind: str,
    first_on: date,
    last_on: date,
    note: str | None,
    who: str,
    at: datetime,
) -> DiaryRow:
    """Write down what happened on a parcel, both days included."""
    row = DiaryRow(
        public_id=f"dry_{secrets.token_hex(8)}",
        parcel_id=parcel.id,
        kind=kind,
        first_on=first_on,
        last_on=last_on,
        note=note,
        who=who,
        recorded_at=at,
    )
    session.add(row)
    session.flush()
    return row


def get_entry(session: Session, parcel: Parcel, public_id: str) -> DiaryRow:
    """Return an entry of a parcel.

    Raises
    ------
    NotFound
        The parcel has none with this id.
    """
    query = select(DiaryRow).where(DiaryRow.public_id == public_id, DiaryRow.parcel_id == parcel.id)
    row = session.scalar(query)
    if row is None:
        raise NotFound("entry-not-found", "The parcel's diary has no entry with this id.")
    return row


def list_entries(
    session: Session, parcel: Parcel, *, after: tuple[date, int] | None, limit: int
) -> list[DiaryRow]:
    """List a parcel's entries in order of their first day."""
    query = select(DiaryRow).where(DiaryRow.parcel_id == parcel.id)
    if after is not None:
        day, row_id = after
        later = and_(DiaryRow.first_on == day, DiaryRow.id > row_id)
        query = query.where(or_(DiaryRow.first_on > day, later))
    return list(session.scalars(query.order_by(DiaryRow.first_on, DiaryRow.id).limit(limit)))


def remove_entry(session: Session, row: DiaryRow) -> None:
    """Strike an entry out."""
    session.delete(row)
    session.flush()


def entries_of(session: Session, refs: Mapping[int, str]) -> list[DiaryEntry]:
    """Return the entries of parcels, as judging takes them."""
    return [
        DiaryEntry(
            kind=DiaryKind(row.kind),
            parcel=refs[row.parcel_id],
            first=row.first_on,
            last=row.last_on,
        )
        for row in _rows(session, sorted(refs))
    ]


def _rows(session: Session, parcel_ids: Iterable[int]) -> Iterator[DiaryRow]:
    for some in in_batches(parcel_ids):
        query = select(DiaryRow).where(DiaryRow.parcel_id.in_(some))
        yield from session.scalars(query.order_by(DiaryRow.id))
