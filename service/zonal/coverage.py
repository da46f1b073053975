"""Zones: which cells of a grid a boundary covers, and by what share.

A zone is a boundary on a grid. Its cells carry a coverage fraction each, the share of the
cell's area inside the boundary, so that a small plot keeps its edge cells at their true
weight. A zone also knows its whole area in cells, including what lies off the grid: that is
the denominator of every share of a zone.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
import shapely
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Transformer

from service.zonal.grid import Grid

MIN_COVERAGE: Final = 1e-6
"""Share of a cell below which the cell does not count for a zone."""

# Fractions are whole multiples of this step (error at most 1.2e-10 of a cell), so that their
# sums in float64 are exact up to 2,000,000 cells, in whatever order and company they are added.
_STEP: Final = 2.0**-32
# An edge of a boundary is straight in longitude and latitude (RFC 7946, section 3.1.1). Cut to
# 1 km, what is straight on the grid is less than 3 cm away from it at middle latitudes.
_LONGEST_EDGE_M: Final = 1000.0
# Length of a degree of latitude at the poles of WGS 84, the longest of any degree.
_DEGREE_M: Final = 111_694.0
_ZONES_AT_ONCE: Final = 256


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Zones:
    """The cells of several zones on one grid, one zone after the other.

    Attributes
    ----------
    indptr
        int64, shape (n + 1,): zone i owns the entries ``indptr[i]:indptr[i + 1]``.
    cells
        int64, shape (indptr[n],): row-major index of each cell on the grid, ascending
        within a zone. Zones may share cells.
    weights
        float32, same shape: coverage fraction of each cell, `MIN_COVERAGE` to 1.
    totals
        float64, shape (n,): area of the whole zone in cells, with what lies off the grid.
    """

    indptr: NDArray[np.int64]
    cells: NDArray[np.int64]
    weights: NDArray[np.float32]
    totals: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.totals)

    def distinct_cells(self) -> NDArray[np.int64]:
        """Return the cells of all zones, each once, ascending."""
        # `np.unique` goes by hashing and takes four times as long.
        ascending = np.sort(self.cells)
        new = np.ones(len(ascending), dtype=bool)
        np.not_equal(ascending[1:], ascending[:-1], out=new[1:])
        return ascending[new]


@lru_cache(maxsize=64)
def _to_crs(crs: str) -> Transformer:
    return Transformer.from_crs("OGC:CRS84", crs, always_xy=True)


def project(geometry: shapely.Geometry, crs: str) -> shapely.Geometry:
    """Project a boundary from WGS 84 onto a grid's CRS.

    Parameters
    ----------
    geometry
        Polygon or multipolygon in degrees, longitude first.
    crs
        Target, as an authority code or WKT.

    Returns
    -------
    shapely.Geometry
        The boundary with its edges cut to at most 1 km before projecting, because a long edge
        bends (20 km are up to 9 m off otherwise). Empty where the CRS can't hold it,
        for instance on the far side of the globe.
    """
    dense = shapely.segmentize(geometry, _LONGEST_EDGE_M / _DEGREE_M)
    projected = shapely.transform(dense, _to_crs(crs).transform, interleaved=False)
    if not np.isfinite(shapely.get_coordinates(projected)).all():
        return shapely.Polygon()
    return projected


def zones_on(grid: Grid, geometries: Sequence[shapely.Geometry]) -> Zones:
    """Lay boundaries over a grid.

    Parameters
    ----------
    grid
        The measuring grid, of any size: memory goes with the boundaries, not with the grid.
    geometries
        Valid polygons or multipolygons in the CRS of the grid.

    Returns
    -------
    Zones
        In the order of `geometries`. A boundary off the grid gives a zone without cells that
        still has its total; an empty one a zone without cells and a total of 0.

    Notes
    -----
    Coverage fractions are the exact areas of the intersections, by `exactextract`
    (Baston, "Fast and accurate zonal statistics"); cells below `MIN_COVERAGE` are left out.
    """
    outlines = _in_cells(grid, geometries)
    found: list[tuple[NDArray[np.int64], NDArray[np.float32]]] = list(_covered(grid, outlines))
    counts = [len(cells) for cells, _ in found]
    return Zones(
        indptr=np.concatenate([[0], np.cumsum(counts, dtype=np.int64)]).astype(np.int64),
        cells=np.concatenate([np.empty(0, np.int64), *(cells for cells, _ in found)]),
        weights=np.concatenate([np.empty(0, np.float32), *(weights for _, weights in found)]),
        totals=np.asarray(shapely.area(outlines), dtype=np.float64),
    )


def _in_cells(grid: Grid, geometries: Sequence[shapely.Geometry]) -> NDArray[np.object_]:
    """Express boundaries in columns and minus rows, so that a cell is a unit square, y up."""
    transform = grid.transform

    def place(points: NDArray[np.float64]) -> NDArray[np.float64]:
        origin = np.array([transform.c, transform.f], dtype=np.float64)
        return (points - origin) / np.array([transform.a, -transform.e], dtype=np.float64)

    placed: NDArray[np.object_] = shapely.transform(np.array(geometries, dtype=object), place)
    return placed


def _covered(
    grid: Grid, outlines: NDArray[np.object_]
) -> Iterator[tuple[NDArray[np.int64], NDArray[np.float32]]]:
    """Yield cells and coverage fractions of each outline."""
    rows, cols = grid.shape
    # One number seen everywhere: the library cuts a window around each outline out of it.
    plane = np.broadcast_to(np.zeros((), dtype=np.uint8), grid.shape)
    source = NumPyRasterSource(plane, 0, -rows, cols, 0)
    nothing = (np.empty(0, np.int64), np.empty(0, np.float32))
    for start in range(0, len(outlines), _ZONES_AT_ONCE):
        batch = outlines[start : start + _ZONES_AT_ONCE]
        left, bottom, right, top = shapely.bounds(batch).T
        on_grid = (left < cols) & (right > 0) & (bottom < 0) & (top > -rows)
        measured = iter(_measure(source, batch[on_grid]))
        for hit in on_grid:
            yield next(measured) if hit else nothing


def _measure(
    source: NumPyRasterSource, outlines: NDArray[np.object_]
) -> Iterator[tuple[NDArray[np.int64], NDArray[np.float32]]]:
    features = [
        {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(outline)}
        for outline in outlines
    ]
    if not features:
        return
    for feature in exact_extract(source, JSONFeatureSource(features), ["cell_id", "coverage"]):
        cells = feature["properties"]["cell_id"]
        fractions = np.rint(feature["properties"]["coverage"] / _STEP) * _STEP
        counts = fractions >= MIN_COVERAGE
        yield cells[counts].astype(np.int64), fractions[counts].astype(np.float32)
