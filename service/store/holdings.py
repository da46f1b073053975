"""Holdings: when their crop years begin, and what moves when that changes."""

from collections.abc import Collection, Iterator, Mapping, Sequence
from contextlib import contextmanager

from sqlalchemy import delete, func, select, update
from sqlalchemy.orm import Session

from service.errors import NotFound
from service.store.alert_tables import AlertRow, NoticeRow, SeasonFold
from service.store.batches import in_batches
from service.store.folds import want_known
from service.store.judgements import RETRACTED
from service.store.judging import Axis, axes, want_judging
from service.store.sessions import serialise
from service.store.tables import Holding, Observation, Parcel, Scene, Write


def list_holdings(session: Session, *, holdings: Collection[str] | None) -> list[Holding]:
    """List the holdings that a key may see (None: all), by ref."""
    query = select(Holding).order_by(Holding.ref)
    if holdings is not None:
        query = query.where(Holding.ref.in_(list(holdings)))
    return list(session.scalars(query))


def get_holding(session: Session, ref: str, *, holdings: Collection[str] | None) -> Holding:
    """Return a holding that a key may see (None: any).

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.scalar(select(Holding).where(Holding.ref == ref))
    if row is None or (holdings is not None and ref not in holdings):
        raise NotFound("holding-not-found", "There is no holding with this ref.")
    return row


def parcels_in(session: Session, rows: Sequence[Holding]) -> dict[int, int]:
    """Return how many parcels that are not retired each holding has, by its id."""
    query = (
        select(Parcel.holding_id, func.count())
        .where(Parcel.retired_at.is_(None), Parcel.holding_id.in_([row.id for row in rows]))
        .group_by(Parcel.holding_id)
    )
    counts = {holding_id or 0: count for holding_id, count in session.execute(query)}
    return {row.id: counts.get(row.id, 0) for row in rows}


def holdings_of(session: Session, refs: Mapping[int, str]) -> dict[str, str | None]:
    """Return the holding of parcels, given by id, by their ref."""
    query = select(Parcel.id, Holding.ref).outerjoin(Holding, Holding.id == Parcel.holding_id)
    return {refs[parcel]: held for parcel, held in session.execute(query) if parcel in refs}


def put_holding(
    session: Session, ref: str, season_start: str | None, starts: tuple[str, str]
) -> Holding:
    """Set when the crop years of a holding begin, adding it if it is new."""
    row = session.scalar(select(Holding).where(Holding.ref == ref))
    if row is None:
        row = Holding(ref=ref, season_start=season_start)
        session.add(row)
        session.flush()
    elif row.season_start != season_start:
        with moving_axes(session, starts):
            row.season_start = season_start
    return row


@contextmanager
def moving_axes(session: Session, starts: tuple[str, str]) -> Iterator[None]:
    """Promise judging anew wherever what is done in this block puts parcels on another axis."""
    serialise(session, "judging")
    before = {parcel: axis for axis in axes(session, starts) for parcel in axis.refs}
    yield
    session.flush()
    after = axes(session, starts)
    left: dict[str, Axis] = {}
    for axis in after:
        moved = [p for p in axis.refs if p in before and before[p].id != axis.id]
        if moved:
            _join(session, axis, moved)
            left |= {before[p].id: before[p] for p in moved}
    for axis_id in sorted(left):
        _leave(session, axis_id, is_empty=all(axis.id != axis_id for axis in after))


def _join(session: Session, axis: Axis, parcels: Sequence[int]) -> None:
    """Take parcels onto an axis with their alerts, and promise the seasons of their looks."""
    seasons: set[int] = set()
    for some in in_batches(parcels):
        for row in session.scalars(select(AlertRow).where(AlertRow.parcel_id.in_(some))):
            # Judged anew it may open just so again: it has not gone, it has moved.
            row.axis, row.season = axis.id, axis.season_of(row.opened_at)
        query = (
            select(Scene.acquired_at)
            .join(Write, Write.scene_id == Scene.id)
            .join(Observation, Observation.write_id == Write.id)
            .where(Scene.is_judged, Write.closed_at.is_(None), Observation.parcel_id.in_(some))
            .distinct()
        )
        seasons |= {axis.season_of(instant) for instant in session.scalars(query)}
    for season in sorted(seasons):
        want_judging(session, axis, season)


def _leave(session: Session, axis_id: str, *, is_empty: bool) -> None:
    """Promise the seasons of an axis without those that left it; drop one that has nobody."""
    if is_empty:
        session.execute(delete(SeasonFold).where(SeasonFold.axis == axis_id))
        # Nobody is left whom a notice could be about, and who would see it close.
        unended = (NoticeRow.axis == axis_id, NoticeRow.state == "open")
        session.execute(update(NoticeRow).where(*unended).values(state=RETRACTED))
        return
    first = session.scalar(select(func.min(SeasonFold.season)).where(SeasonFold.axis == axis_id))
    if first is not None:
        want_known(session, axis_id, first)
