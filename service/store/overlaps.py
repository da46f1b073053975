"""Warnings about parcels that strongly overlap: accepted, but worth a look."""

from collections.abc import Collection, Iterator, Mapping
from datetime import datetime
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.errors import MAX_ERRORS
from service.store.parcels import ParcelChange, ParcelsChanged, in_force, intersects, visible
from service.store.tables import Boundary, Parcel

STRONG: Final = 0.5
"""An overlap is strong when it takes this share of the smaller parcel."""
_AT_ONCE: Final = 32
# Outlines that all lie on one another make pairs by the square of their number. They are a
# mistake that the first warnings tell of; the rest must not hold the database up.
_MOST_PAIRS: Final = 20_000_000
_MOST_VERTICES: Final = 20_000_000


def overlap_warnings(
    session: Session,
    sent: Mapping[int, ParcelChange],
    result: ParcelsChanged,
    holdings: Collection[str] | None,
    *,
    at: datetime,
) -> Iterator[tuple[int, str]]:
    """Yield item and warning for new or changed outlines that strongly overlap another parcel.

    At most as many as an answer lists. Parcels outside the key's holdings are not told of.
    Areas are compared in degrees, which for two outlines in the same place gives the same
    shares.
    """
    unchanged = set(result.unchanged)
    drawn = {item: change for item, change in sent.items() if change.ref not in unchanged}
    if not drawn:
        return
    items = list(drawn)
    outlines = np.array([drawn[item].outline.geometry for item in items])
    refs, others = _neighbours(session, outlines, holdings, at=at)
    found = 0
    for mine, theirs, share in _strong(outlines, others):
        item, ref = items[mine], refs[theirs]
        if ref == drawn[item].ref:
            continue
        yield item, f"Overlaps parcel {ref} by {share:.0%} of the smaller one."
        found += 1
        if found == MAX_ERRORS:
            return


def _strong(outlines: NDArray[Any], others: NDArray[Any]) -> Iterator[tuple[int, int, float]]:
    """Yield each pair of an outline and another that strongly overlap, with the share."""
    tree = shapely.STRtree(others)
    pairs = vertices = 0
    for start in range(0, len(outlines), _AT_ONCE):
        some = outlines[start : start + _AT_ONCE]
        mine, theirs = tree.query(some)
        pairs += len(mine)
        a, b = some[mine], others[theirs]
        smaller = np.minimum(shapely.area(a), shapely.area(b))
        near = np.flatnonzero(_shared_by_boxes(a, b) > STRONG * smaller)
        vertices += int(shapely.get_num_coordinates(np.concatenate([a[near], b[near]])).sum())
        if pairs > _MOST_PAIRS or vertices > _MOST_VERTICES:
            return
        shares = shapely.area(shapely.intersection(a[near], b[near])) / smaller[near]
        strong = np.flatnonzero(shares > STRONG)
        for place in strong.tolist():
            pair = near[place]
            yield start + int(mine[pair]), int(theirs[pair]), float(shares[place])


def _shared_by_boxes(a: NDArray[Any], b: NDArray[Any]) -> NDArray[np.float64]:
    """Return the area that the boxes of outlines share pair by pair: the outlines share less."""
    one, other = shapely.bounds(a), shapely.bounds(b)
    low = np.maximum(one[:, :2], other[:, :2])
    high = np.minimum(one[:, 2:], other[:, 2:])
    sides: NDArray[np.float64] = np.maximum(high - low, 0.0)
    area: NDArray[np.float64] = sides[:, 0] * sides[:, 1]
    return area


def _neighbours(
    session: Session,
    outlines: Any,
    holdings: Collection[str] | None,
    *,
    at: datetime,
) -> tuple[list[str], Any]:
    """Return refs and outlines in force of the parcels around some outlines."""
    west, south, east, north = (float(edge) for edge in shapely.total_bounds(outlines))
    query = visible(
        select(Parcel.ref, Boundary.wkb).join(Boundary, Boundary.parcel_id == Parcel.id), holdings
    )
    rows = session.execute(query.where(in_force(at), intersects((west, south, east, north)))).all()
    return [row.ref for row in rows], shapely.from_wkb(np.array([row.wkb for row in rows]))
