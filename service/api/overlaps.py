"""Warnings about parcels that strongly overlap: accepted, but worth a look."""

from collections.abc import Collection, Mapping
from datetime import datetime
from typing import Any, Final

import numpy as np
import shapely
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.store.parcels import ParcelChange, ParcelsChanged, in_force, intersects, visible
from service.store.tables import Boundary, Parcel

STRONG: Final = 0.5
"""An overlap is strong when it takes this share of the smaller parcel."""


def overlap_warnings(
    session: Session,
    sent: Mapping[int, ParcelChange],
    result: ParcelsChanged,
    holdings: Collection[str] | None,
    *,
    at: datetime,
) -> list[dict[str, str]]:
    """Return a warning for each new or changed outline that strongly overlaps another parcel.

    Parcels outside the key's holdings are not told of. Areas are compared in degrees, which
    for two outlines in the same place gives the same shares.
    """
    drawn = {item: c for item, c in sent.items() if c.ref not in result.unchanged}
    if not drawn:
        return []
    outlines = np.array([change.outline.geometry for change in drawn.values()])
    refs, others = _neighbours(session, outlines, holdings, at=at)
    mine, theirs = shapely.STRtree(others).query(outlines, predicate="intersects")
    shared = shapely.area(shapely.intersection(outlines[mine], others[theirs]))
    smaller = np.minimum(shapely.area(outlines[mine]), shapely.area(others[theirs]))
    items = list(drawn)
    return [
        {
            "pointer": f"/features/{items[m]}/geometry",
            "detail": f"Overlaps parcel {refs[t]} by {share:.0%} of the smaller one.",
        }
        for m, t, share in zip(mine, theirs, shared / smaller, strict=True)
        if share > STRONG and refs[t] != drawn[items[m]].ref
    ]


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
