"""Checking a parcel's outline before it is believed."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import Geod
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput

MAX_VERTICES: Final = 10_000
"""Validity checks slow down steeply with the vertices: 10 s were seen at 100,000."""
MAX_REPAIR_VERTICES: Final = 500
"""Repair costs up to the square of the vertices (0.6 s for 500 random ones, 13 s for 2,000)."""
MIN_AREA_HA: Final = 1e-4
"""Positions on a line enclose next to nothing instead of nothing, by rounding."""
_HA_PER_SQUARE_DEGREE: Final = 1.25e6
"""At most: 111.7 km squared."""
_POLYGONAL: Final = {"Polygon": 3, "MultiPolygon": 4}
_ELLIPSOID: Final = Geod(ellps="WGS84")


@dataclass(frozen=True, slots=True, kw_only=True)
class Outline:
    """A parcel's checked outline.

    Attributes
    ----------
    geometry
        Valid polygon or multipolygon, WGS 84 longitude and latitude, exterior rings
        counter-clockwise (RFC 7946).
    area_ha
        Area on the WGS 84 ellipsoid, in hectares.
    was_repaired
        Whether crossing rings were mended on request.
    """

    geometry: BaseGeometry
    area_ha: float
    was_repaired: bool = False

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """(west, south, east, north) in degrees."""
        west, south, east, north = self.geometry.bounds
        return float(west), float(south), float(east), float(north)


def outline_from_geojson(
    geometry: object, *, pointer: str, repair: bool, area_limit_ha: float
) -> Outline:
    """Return the outline that a GeoJSON geometry draws.

    Parameters
    ----------
    geometry
        Parsed GeoJSON ``Polygon`` or ``MultiPolygon`` (RFC 7946), degrees, longitude first;
        heights are dropped.
    pointer
        Where the geometry stands in the request, for the error.
    repair
        Whether to mend rings that cross themselves instead of refusing them.
    area_limit_ha
        Largest area accepted, in hectares.

    Raises
    ------
    RejectedInput
        The geometry is not polygonal, leaves the WGS 84 bounds, has too many vertices, no
        area or too much, or crosses itself; the error says where.
    """
    shape = shapely.from_geojson(json.dumps(_checked(geometry, pointer)))
    return _outline(shape, pointer, repair=repair, area_limit_ha=area_limit_ha)


def outline_from_shape(
    shape: BaseGeometry, *, pointer: str, repair: bool, area_limit_ha: float
) -> Outline:
    """Return the outline that a geometry draws, by the same rules as one sent as GeoJSON.

    Parameters
    ----------
    shape
        Any geometry, degrees, longitude first; heights are dropped.
    pointer, repair, area_limit_ha
        As for `outline_from_geojson`.

    Raises
    ------
    RejectedInput
        As `outline_from_geojson` does.
    """
    if shape.geom_type not in _POLYGONAL or shape.is_empty:
        raise not_polygonal(pointer)
    check_vertices(shapely.get_num_coordinates(shape), pointer)
    positions = shapely.get_coordinates(shape)
    if not np.isfinite(positions).all() or not _is_within_wgs84(positions):
        raise _outside_wgs84(pointer)
    return _outline(shapely.force_2d(shape), pointer, repair=repair, area_limit_ha=area_limit_ha)


def check_vertices(count: int, pointer: str) -> None:
    """Refuse an outline of too many vertices, best before they are read."""
    if count > MAX_VERTICES:
        raise RejectedInput.at(
            pointer,
            f"The outline has more than {MAX_VERTICES:,} vertices. Simplify it; a tenth of a "
            "cell (1 m) is finer than any scene resolves.",
            code="invalid-geometry",
        )


def not_polygonal(pointer: str) -> RejectedInput:
    """Return the error for a geometry that is no polygon or multipolygon."""
    return RejectedInput.at(
        pointer,
        "A parcel needs a geometry of type Polygon or MultiPolygon; points, lines and "
        "collections have no area to measure.",
        code="invalid-geometry",
    )


def broken_ring(pointer: str) -> RejectedInput:
    """Return the error for a ring that is too short or not closed."""
    return RejectedInput.at(
        pointer,
        "A ring needs at least four positions, the last equal to the first (RFC 7946).",
        code="invalid-geometry",
    )


def _outline(shape: BaseGeometry, pointer: str, *, repair: bool, area_limit_ha: float) -> Outline:
    was_repaired = False
    if not shape.is_valid:
        shape = _repaired(shape, pointer, repair=repair)
        was_repaired = True
    shape = shapely.orient_polygons(shape)
    area_ha = abs(_ELLIPSOID.geometry_area_perimeter(shape)[0]) / 10_000
    # Geodesics between positions on one line enclose a little; the line itself does not.
    if min(area_ha, shape.area * _HA_PER_SQUARE_DEGREE) < MIN_AREA_HA:
        raise RejectedInput.at(
            pointer,
            "The outline has no area: it covers less than a square metre.",
            code="invalid-geometry",
        )
    if area_ha > area_limit_ha:
        raise RejectedInput.at(
            pointer,
            f"The outline covers {area_ha:,.0f} ha; at most {area_limit_ha:,.0f} ha are taken as "
            "one parcel. Check that coordinates are longitude, latitude in degrees.",
            code="invalid-geometry",
        )
    return Outline(geometry=shape, area_ha=area_ha, was_repaired=was_repaired)


def _checked(geometry: object, pointer: str) -> dict[str, Any]:
    """Return a geometry without heights; refuse what is not polygonal GeoJSON within WGS 84."""
    kind = geometry.get("type") if isinstance(geometry, Mapping) else None
    depth = _POLYGONAL.get(kind) if isinstance(kind, str) else None
    if depth is None or not isinstance(geometry, Mapping):
        raise not_polygonal(pointer)
    if not geometry.keys() <= {"type", "coordinates", "bbox"}:
        raise RejectedInput.at(
            pointer,
            "A geometry has `type` and `coordinates`, nothing else: positions are WGS 84 degrees "
            "(RFC 7946).",
            code="invalid-geometry",
        )
    rings = _rings(geometry.get("coordinates"), depth, f"{pointer}/coordinates")
    check_vertices(sum(len(ring) for ring, _ in rings), pointer)
    for ring, where in rings:
        _check_ring(ring, where)
    return {"type": kind, "coordinates": _flat(geometry["coordinates"])}


def _flat(coordinates: Any) -> Any:
    """Return nested positions without their heights."""
    if isinstance(coordinates[0], list):
        return [_flat(part) for part in coordinates]
    return coordinates[:2]


def _rings(value: Any, depth: int, pointer: str) -> list[tuple[Sequence[Any], str]]:
    """Return the rings (lists of positions) with their pointers."""
    if not isinstance(value, list) or not value:
        raise RejectedInput.at(
            pointer, "Coordinates must be non-empty nested lists.", code="invalid-geometry"
        )
    if depth == 2:
        return [(value, pointer)]
    found: list[tuple[Sequence[Any], str]] = []
    for number, part in enumerate(value):
        found += _rings(part, depth - 1, f"{pointer}/{number}")
    return found


def _check_ring(ring: Sequence[Any], pointer: str) -> None:
    positions = _positions(ring)
    if positions is None:
        raise RejectedInput.at(
            pointer,
            "Each position must be a list of two numbers, longitude and latitude, or of three "
            "with a height (RFC 7946).",
            code="invalid-geometry",
        )
    if len(ring) < 4 or not np.array_equal(positions[0], positions[-1]):
        raise broken_ring(pointer)
    if not _is_within_wgs84(positions):
        raise _outside_wgs84(pointer)


def _is_within_wgs84(positions: NDArray[np.float64]) -> bool:
    with np.errstate(invalid="ignore"):
        return bool((np.abs(positions) <= [180.0, 90.0]).all())


def _outside_wgs84(pointer: str) -> RejectedInput:
    return RejectedInput.at(
        pointer,
        "Positions must lie within longitude -180 to 180 and latitude -90 to 90: send "
        "WGS 84 degrees, longitude first.",
        code="invalid-geometry",
    )


def _positions(ring: Sequence[Any]) -> NDArray[np.float64] | None:
    """Return longitudes and latitudes, shape (positions, 2); None unless all are numbers."""
    try:
        if any(type(part) not in (int, float) for position in ring for part in position):
            return None
        if any(len(position) > 3 for position in ring):
            return None
        positions = np.array([position[:2] for position in ring], dtype=np.float64)
    except (TypeError, ValueError, KeyError, OverflowError):
        return None
    return positions if positions.ndim == 2 and positions.shape[1] == 2 else None


def _repaired(shape: BaseGeometry, pointer: str, *, repair: bool) -> BaseGeometry:
    reason = shapely.is_valid_reason(shape)
    if not repair:
        raise RejectedInput.at(
            pointer,
            f"The outline is not valid: {_in_words(reason)}. Mend it, or send it with "
            "?repair=true to have it mended here.",
            code="invalid-geometry",
        )
    if shapely.get_num_coordinates(shape) > MAX_REPAIR_VERTICES:
        raise RejectedInput.at(
            pointer,
            f"Only outlines of up to {MAX_REPAIR_VERTICES:,} vertices are mended here; mend this "
            f"one first: {_in_words(reason)}.",
            code="invalid-geometry",
        )
    mended = shapely.make_valid(shape, method="structure", keep_collapsed=False)
    polygons = [part for part in shapely.get_parts(mended) if part.geom_type == "Polygon"]
    return polygons[0] if len(polygons) == 1 else shapely.MultiPolygon(polygons)


def _in_words(reason: str) -> str:
    """Turn GEOS's ``Self-intersection[x y]`` into a sentence's end."""
    what, _, where = reason.partition("[")
    place = where.rstrip("]").split()
    at = f" at longitude {place[0]}, latitude {place[1]}" if len(place) == 2 else ""
    return f"{what.lower()}{at}"
