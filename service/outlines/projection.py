"""From a file's coordinate reference system to WGS 84.

A definition in words (WKT) can name files: grids of shifts, by parameter, by extension, or by
operations that only the projection library knows. It would open them. So what names one is
refused before the library sees it.
"""

import re
from typing import Any, Final

import numpy as np
import pyproj
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from pyproj.exceptions import CRSError, ProjError
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.outlines.features import FILE, without_crs
from service.zonal.boundary import MAX_VERTICES

_WGS84: Final = "OGC:CRS84"
_MAX_WKT: Final = 16_384
_NAMES_FILES: Final = re.compile(r"PARAMETERFILE|EXTENSION|\bPROJ\s", re.IGNORECASE)
# What many programs write for web maps' own projection; its grid is none.
_WEB_MERCATOR: Final = re.compile(
    r'EXTENSION\["PROJ4","\+proj=merc \+a=6378137 \+b=6378137 \+lat_ts=0(?:\.0)? \+lon_0=0(?:\.0)? '
    r'\+x_0=0(?:\.0)? \+y_0=0 \+k=1(?:\.0)? \+units=m \+nadgrids=@null \+wktext( \+no_defs)?"\]'
)
# A straight edge of a projection bends on the way to longitude and latitude: 20 km are up to
# 9 m off. Cut to 1 km it is off by centimetres.
_LONGEST_EDGE_M: Final = 1000.0
_HALF_TURN: Final = 180.0
_TURN: Final = 360.0


class Projection:
    """Takes geometries from a file's coordinate reference system to WGS 84.

    Attributes
    ----------
    warning
        What is worth knowing of all its results, None if nothing is.
    """

    def __init__(self, crs: CRS) -> None:
        flat = _horizontal(crs)
        self.warning: str | None = None
        try:
            self._transformer = Transformer.from_crs(
                flat, _WGS84, always_xy=True, allow_ballpark=False
            )
        except ProjError:
            self._transformer = _by_ellipsoid_alone(flat)
            self.warning = (
                "It is not known how the file's datum lies to WGS 84, so it was taken for WGS 84; "
                "outlines may be off by up to some hundred metres. Compare one with a map."
            )
        unit = flat.axis_info[0].unit_conversion_factor if flat.axis_info else 1.0
        self._longest = _LONGEST_EDGE_M / unit if flat.is_projected and unit > 0 else None

    def to_wgs84(self, shape: BaseGeometry, *, pointer: str) -> BaseGeometry:
        """Return a polygonal geometry in degrees, longitude first, without heights.

        Edges over 1 km are cut first. One that crosses the antimeridian is cut there into
        parts on either side (RFC 7946, section 3.1.9).

        Raises
        ------
        RejectedInput
            It lies where the coordinate reference system is not defined.
        """
        flat = shapely.force_2d(shape)
        if not np.isfinite(shapely.get_coordinates(flat)).all():
            raise _undefined(pointer)
        projected = shapely.transform(self._cut(flat), self._degrees, interleaved=False)
        if not np.isfinite(shapely.get_coordinates(projected)).all():
            raise _undefined(pointer)
        return _parted(projected)

    def _cut(self, shape: BaseGeometry) -> BaseGeometry:
        """Cut long edges, unless the outline is so long that it is refused anyway.

        Cutting mends rings that cross themselves without saying so (GEOS 3.14); those are left
        as they are, to be refused or mended in the open.
        """
        longest = self._longest
        if longest is None or shape.length / longest > MAX_VERTICES or not shape.is_valid:
            return shape
        return shapely.segmentize(shape, longest)

    def _degrees(self, x: NDArray[Any], y: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
        lon, lat = self._transformer.transform(x, y)
        return lon, lat


def _parted(shape: BaseGeometry) -> BaseGeometry:
    """Cut what crosses the antimeridian; longitudes up to 360 are taken as going on beyond it."""
    west, _, east, _ = shapely.bounds(shape)
    if east - west > _HALF_TURN:
        shape = shapely.transform(shape, _eastward)
        west, _, east, _ = shapely.bounds(shape)
    # One that crosses itself can't be cut; it is refused for that, saying where.
    if east <= _HALF_TURN or east > _TURN or not shape.is_valid:
        return shape
    if west >= _HALF_TURN:
        return shapely.transform(shape, _back)
    near = shapely.intersection(shape, shapely.box(0, -90, _HALF_TURN, 90))
    far = shapely.intersection(shape, shapely.box(_HALF_TURN, -90, _TURN, 90))
    parts = [*shapely.get_parts(near), *shapely.get_parts(shapely.transform(far, _back))]
    return shapely.MultiPolygon([part for part in parts if part.geom_type == "Polygon"])


def _eastward(positions: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.where([True, False] & (positions < 0), positions + _TURN, positions)


def _back(positions: NDArray[np.float64]) -> NDArray[np.float64]:
    return positions - [_TURN, 0.0]


def _undefined(pointer: str) -> RejectedInput:
    return RejectedInput.at(
        pointer,
        "The outline lies where the file's coordinate reference system is not defined. Check "
        "that coordinates and system belong together.",
        code="invalid-geometry",
    )


def projection_from_epsg(code: int) -> Projection:
    """Return the projection of an EPSG code.

    Raises
    ------
    RejectedInput
        There is no such code, or its system is of a kind that is not read here.
    """
    try:
        return Projection(CRS.from_epsg(code))
    except CRSError as error:
        raise _unknown() from error


def projection_from_wkt(text: str) -> Projection:
    """Return the projection that well-known text defines, in any of its dialects.

    Raises
    ------
    RejectedInput
        It is no definition, names files, or is of a kind that is not read here.
    """
    if not text.strip():
        raise without_crs(
            "The file does not say which coordinate reference system it is in. Write it again "
            "with one, or as WGS 84."
        )
    if len(text) > _MAX_WKT or _NAMES_FILES.search(_WEB_MERCATOR.sub("", text)):
        raise _unknown()
    pyproj.network.set_network_enabled(active=False)  # type: ignore[attr-defined]
    try:
        return Projection(CRS.from_wkt(text))
    except (CRSError, UnicodeError, ValueError) as error:
        raise _unknown() from error


def _horizontal(crs: CRS) -> CRS:
    """Return the system without heights."""
    while crs.is_compound and crs.sub_crs_list:
        crs = crs.sub_crs_list[0]
    if not (crs.is_projected or crs.is_geographic):
        raise _unknown()
    return crs.to_2d()


def _by_ellipsoid_alone(crs: CRS) -> Transformer:
    try:
        return Transformer.from_crs(crs, _WGS84, always_xy=True)
    except ProjError as error:
        raise _unknown() from error


def _unknown() -> RejectedInput:
    return RejectedInput.at(
        FILE,
        "The file's coordinate reference system is not one that is read here: a projected or "
        "geographic one, by EPSG code or by a definition that needs no further file. Write it "
        "again in such a one, or as WGS 84.",
        code="unsupported-crs",
    )
