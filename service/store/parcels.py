"""Parcels, their holdings and their boundary versions."""

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

import shapely
from sqlalchemy import Select, and_, or_, select, update
from sqlalchemy.orm import Session

from service.errors import NotFound
from service.store.batches import in_batches
from service.store.sessions import serialise
from service.store.tables import Boundary, Holding, Observation, Parcel, ParcelTag
from service.zonal.boundary import Outline

Box = tuple[float, float, float, float]
"""(west, south, east, north) in degrees; west > east crosses the antimeridian."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ParcelChange:
    """A parcel as sent: its outline, and those of name, holding and tags that were given."""

    ref: str
    outline: Outline
    given: Mapping[str, Any]
    valid_from: datetime | None = None


@dataclass(slots=True, kw_only=True)
class ParcelsChanged:
    """What an insert-or-update did, by ref, and which boundary versions are new."""

    created: list[str] = field(default_factory=list)
    updated: list[str] = field(default_factory=list)
    unchanged: list[str] = field(default_factory=list)
    revived: list[str] = field(default_factory=list)
    redrawn: list[Boundary] = field(default_factory=list)
    rows: dict[str, Parcel] = field(default_factory=dict)


def parcels_by_ref(session: Session, refs: Iterable[str]) -> dict[str, Parcel]:
    """Return the parcels, retired ones included, that have these refs."""
    found: dict[str, Parcel] = {}
    for some in in_batches(refs):
        found |= {
            row.ref: row for row in session.scalars(select(Parcel).where(Parcel.ref.in_(some)))
        }
    return found


def get_parcel(session: Session, ref: str, *, holdings: Collection[str] | None) -> Parcel:
    """Return a parcel within the key's holdings (all of them if None).

    Raises
    ------
    NotFound
        No such parcel, or it belongs elsewhere.
    """
    row = session.scalar(select(Parcel).where(Parcel.ref == ref))
    if row is None or not is_within(row, holdings):
        raise NotFound("parcel-not-found", "There is no parcel with this ref.")
    return row


def is_within(row: Parcel, holdings: Collection[str] | None) -> bool:
    """Whether a parcel belongs to one of the holdings (None: any)."""
    return holdings is None or (row.holding is not None and row.holding.ref in holdings)


def upsert_parcels(
    session: Session, changes: Sequence[ParcelChange], *, at: datetime
) -> ParcelsChanged:
    """Insert or update parcels by ref; members that were not given stay as they are.

    The first boundary version of a parcel holds for all time unless `valid_from` says
    otherwise. A later, different outline holds from `valid_from` (default: now) to the end of
    the version that it falls into.
    """
    result = ParcelsChanged(rows=parcels_by_ref(session, (change.ref for change in changes)))
    holdings = _holdings(session, {c.given["holding"] for c in changes if c.given.get("holding")})
    known = _known_boundaries(session, [row.id for row in result.rows.values()])
    fresh: list[tuple[Parcel, ParcelChange]] = []
    for change in changes:
        row = result.rows.get(change.ref)
        if row is None:
            result.rows[change.ref] = row = _new(change, holdings, at=at)
            result.created.append(change.ref)
            fresh.append((row, change))
        else:
            _update(session, row, change, holdings, known.get(row.id, []), result, at=at)
    # Numbered all at once: one by one it takes more than twice as long.
    session.add_all(row for row, _ in fresh)
    session.flush()
    session.add_all(_boundary(row.id, c.outline, c.valid_from, None, at=at) for row, c in fresh)
    session.flush()
    return result


def _holdings(session: Session, refs: Collection[str]) -> dict[str, Holding]:
    """Return the holdings with these refs, adding those that are new."""
    found: dict[str, Holding] = {}
    for some in in_batches(sorted(refs)):
        rows = session.scalars(select(Holding).where(Holding.ref.in_(some)))
        found |= {row.ref: row for row in rows}
    for ref in sorted(set(refs) - found.keys()):
        found[ref] = Holding(ref=ref)
        session.add(found[ref])
    session.flush()
    return found


def _new(change: ParcelChange, holdings: Mapping[str, Holding], *, at: datetime) -> Parcel:
    holding = change.given.get("holding")
    return Parcel(
        ref=change.ref,
        name=change.given.get("name"),
        holding=holdings[holding] if holding else None,
        tag_rows=[ParcelTag(tag=tag) for tag in sorted(set(change.given.get("tags") or []))],
        created_at=at,
        retired_at=None,
        revision=0,
    )


def _update(
    session: Session,
    row: Parcel,
    change: ParcelChange,
    holdings: Mapping[str, Holding],
    known: Sequence[Boundary],
    result: ParcelsChanged,
    *,
    at: datetime,
) -> None:
    is_changed = _update_members(row, change.given, holdings)
    if row.retired_at is not None:
        row.retired_at = None
        result.revived.append(row.ref)
        is_changed = True
    redrawn = _redraw(session, row, change, known, at=at)
    if redrawn is not None:
        result.redrawn.append(redrawn)
        is_changed = True
    if is_changed:
        row.revision += 1
    (result.updated if is_changed else result.unchanged).append(row.ref)


def _update_members(row: Parcel, given: Mapping[str, Any], holdings: Mapping[str, Holding]) -> bool:
    """Set the given members; return whether one of them was different."""
    before = (row.name, row.holding, row.tags)
    if "name" in given:
        row.name = given["name"]
    if "holding" in given:
        row.holding = holdings[given["holding"]] if given["holding"] else None
    if "tags" in given:
        kept = {tag_row.tag: tag_row for tag_row in row.tag_rows}
        wanted = sorted(set(given["tags"] or []))
        row.tag_rows = [kept.get(tag) or ParcelTag(tag=tag) for tag in wanted]
    return before != (row.name, row.holding, row.tags)


def _redraw(
    session: Session,
    row: Parcel,
    change: ParcelChange,
    known: Sequence[Boundary],
    *,
    at: datetime,
) -> Boundary | None:
    """Add a boundary version if the outline differs from the one in force; return it."""
    since = change.valid_from or at
    held = next((b for b in known if _holds(b, since)), None)
    # Before the first version, when that one was given a beginning.
    until = held.valid_to if held else known[0].valid_from
    drawn = _boundary(row.id, change.outline, since, until, at=at)
    if held is not None:
        if drawn.wkb == held.wkb:
            return None
        # What the service knew is kept: the version is closed and its earlier part written anew.
        held.closed_at = at
        if held.valid_from != since:
            session.add(_part_until(held, since, at=at))
    session.add(drawn)
    session.flush()
    return drawn


def _holds(boundary: Boundary, instant: datetime) -> bool:
    begun = boundary.valid_from is None or boundary.valid_from <= instant
    return begun and (boundary.valid_to is None or instant < boundary.valid_to)


def _boundary(
    parcel_id: int,
    outline: Outline,
    valid_from: datetime | None,
    valid_to: datetime | None,
    *,
    at: datetime,
) -> Boundary:
    west, south, east, north = outline.bounds
    return Boundary(
        parcel_id=parcel_id,
        valid_from=valid_from,
        valid_to=valid_to,
        recorded_at=at,
        closed_at=None,
        wkb=shapely.to_wkb(shapely.normalize(outline.geometry), byte_order=1),
        area_ha=outline.area_ha,
        west=west,
        south=south,
        east=east,
        north=north,
    )


def _part_until(held: Boundary, until: datetime, *, at: datetime) -> Boundary:
    return Boundary(
        parcel_id=held.parcel_id,
        valid_from=held.valid_from,
        valid_to=until,
        recorded_at=at,
        closed_at=None,
        wkb=held.wkb,
        area_ha=held.area_ha,
        west=held.west,
        south=held.south,
        east=held.east,
        north=held.north,
    )


def _known_boundaries(session: Session, parcel_ids: Sequence[int]) -> dict[int, list[Boundary]]:
    """Return the versions known now, by parcel, in order of validity."""
    found: dict[int, list[Boundary]] = {}
    for some in in_batches(parcel_ids):
        query = select(Boundary).where(Boundary.parcel_id.in_(some), Boundary.closed_at.is_(None))
        for row in session.scalars(query):
            found.setdefault(row.parcel_id, []).append(row)
    for versions in found.values():
        versions.sort(key=_validity)
    return found


def _validity(boundary: Boundary) -> float:
    return boundary.valid_from.timestamp() if boundary.valid_from else float("-inf")


def list_boundaries(session: Session, parcel: Parcel) -> list[Boundary]:
    """List a parcel's boundary versions as known now, in order of validity."""
    return _known_boundaries(session, [parcel.id]).get(parcel.id, [])


def boundaries_at(
    session: Session, parcel_ids: Sequence[int], *, at: datetime
) -> dict[int, Boundary]:
    """Return the version in force at an instant, or the first one before it begins, by parcel."""
    return {
        parcel_id: next((v for v in versions if _holds(v, at)), versions[0])
        for parcel_id, versions in _known_boundaries(session, parcel_ids).items()
    }


def retire_parcel(session: Session, parcel: Parcel, *, at: datetime) -> None:
    """Retire a parcel: its history stays, nothing new is measured."""
    if parcel.retired_at is None:
        parcel.retired_at = at
        parcel.revision += 1
    session.flush()


def intersects(box: Box) -> Any:
    """Return the condition that a boundary's box meets another."""
    west, south, east, north = box
    across = (
        and_(Boundary.west <= east, Boundary.east >= west)
        if west <= east
        else or_(Boundary.west <= east, Boundary.east >= west)
    )
    return and_(across, Boundary.south <= north, Boundary.north >= south)


def in_force(instant: Any) -> Any:
    """Return the condition that a boundary version is known now and holds at an instant."""
    return and_(
        Boundary.closed_at.is_(None),
        or_(Boundary.valid_from.is_(None), Boundary.valid_from <= instant),
        or_(Boundary.valid_to.is_(None), Boundary.valid_to > instant),
    )


def visible(
    query: Select[*tuple[Any, ...]], holdings: Collection[str] | None
) -> Select[*tuple[Any, ...]]:
    """Limit a query on parcels to the key's holdings and to those not retired."""
    query = query.where(Parcel.retired_at.is_(None))
    if holdings is None:
        return query
    allowed = select(Holding.id).where(Holding.ref.in_(list(holdings)))
    return query.where(Parcel.holding_id.in_(allowed))


def bump_revisions(session: Session, write_ids: Sequence[int]) -> None:
    """Mark the parcels with observations in these writes as changed."""
    # Judging writes parcels while it holds its folds, and here it is the other way round.
    serialise(session, "judging")
    touched = select(Observation.parcel_id).where(Observation.write_id.in_(write_ids))
    session.execute(
        update(Parcel)
        .where(Parcel.id.in_(touched))
        .values(revision=Parcel.revision + 1)
        .execution_options(synchronize_session=False)
    )
