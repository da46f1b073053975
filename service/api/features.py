"""Parcels as GeoJSON features (RFC 7946)."""

import json
from collections.abc import Sequence
from typing import Any, Final

import shapely
from fastapi.responses import JSONResponse
from sqlalchemy.orm import Session

from service.api.wire import written
from service.clock import now
from service.store.parcels import boundaries_at
from service.store.seasons import crop_on, seasons_of
from service.store.tables import Boundary, Parcel

GEOJSON: Final = "application/geo+json"


class GeoJson(JSONResponse):
    """A GeoJSON answer (RFC 7946)."""

    media_type = GEOJSON


def features_of(session: Session, rows: Sequence[Parcel]) -> list[dict[str, Any]]:
    """Return parcels with their outline in force and the crop that holds today."""
    ids = [row.id for row in rows]
    at = now()
    boundaries = boundaries_at(session, ids, at=at)
    seasons = seasons_of(session, ids)
    return [
        _feature(row, boundaries[row.id], crop_on(seasons.get(row.id, []), at.date()))
        for row in rows
    ]


def _feature(row: Parcel, boundary: Boundary, crop: str | None) -> dict[str, Any]:
    return {
        "type": "Feature",
        "id": row.ref,
        "properties": {
            "ref": row.ref,
            "name": row.name,
            "holding": row.holding.ref if row.holding else None,
            "crop": crop,
            "tags": row.tags,
            "area_ha": round(boundary.area_ha, 4),
            "retired_at": written(row.retired_at) if row.retired_at else None,
        },
        "geometry": geometry_of(boundary),
    }


def geometry_of(boundary: Boundary) -> dict[str, Any]:
    """Return a boundary as GeoJSON geometry."""
    # What is stored is in a normal form, whose exterior rings run clockwise.
    outline = shapely.orient_polygons(shapely.from_wkb(boundary.wkb))
    geometry: dict[str, Any] = json.loads(shapely.to_geojson(outline))
    return geometry
