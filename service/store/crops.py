"""Crops as their users call them, and the groups in which small ones are compared."""

from collections.abc import Collection, Mapping

from sqlalchemy import delete, func, select
from sqlalchemy.orm import Session

from service.seasons.groups import compared_under
from service.store.judging import Axis
from service.store.tables import CropGroup, CropSeason, Holding, Parcel


def crop_groups(session: Session) -> dict[str, str]:
    """Return the group of each crop that has one."""
    rows = session.scalars(select(CropGroup).order_by(CropGroup.crop))
    return {row.crop: row.group for row in rows}


def put_crop_groups(session: Session, groups: Mapping[str, str]) -> bool:
    """Make these the groups of crops; return whether anything changed."""
    if crop_groups(session) == dict(groups):
        return False
    session.execute(delete(CropGroup))
    session.add_all(CropGroup(crop=crop, group=group) for crop, group in sorted(groups.items()))
    session.flush()
    return True


def parcels_by_crop(session: Session, *, holdings: Collection[str] | None) -> dict[str, int]:
    """Return how many parcels have ever grown each crop, within a key's holdings (None: all)."""
    count = func.count(CropSeason.parcel_id.distinct())
    query = select(CropSeason.crop, count).group_by(CropSeason.crop).order_by(CropSeason.crop)
    if holdings is not None:
        allowed = (
            select(Parcel.id)
            .join(Holding, Holding.id == Parcel.holding_id)
            .where(Holding.ref.in_(list(holdings)))
        )
        query = query.where(CropSeason.parcel_id.in_(allowed))
    return dict(session.execute(query).all())


def labels_in(session: Session, axis: Axis, season: int) -> dict[str, str]:
    """Return the labels under which small crops of a season are compared, by crop."""
    groups = crop_groups(session)
    if not groups:
        return {}
    query = select(CropSeason.crop, CropSeason.parcel_id).where(
        CropSeason.from_on < axis.ends_at(season).date(),
        CropSeason.until_on >= axis.begins_at(season).date(),
    )
    grown: dict[str, set[int]] = {}
    for crop, parcel_id in session.execute(query):
        if parcel_id in axis.refs:
            grown.setdefault(crop, set()).add(parcel_id)
    return compared_under({crop: len(ids) for crop, ids in grown.items()}, groups)
