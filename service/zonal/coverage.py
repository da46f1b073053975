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
from numpy.typing import NDArray
from pyproj import Transformer

from service.zonal.edges import Cells, covered, ring_areas
from service.zonal.grid import Grid

MIN_COVERAGE: Final = 1e-6
"""Share of a cell below which the cell does not count for a zone."""

# Fractions are whole multiples of this step (error at most 1.2e-10 of a cell), so that their
# sums in float64 are exact up to 2,000,000 cells, in whatever order and company they are added.
_STEPS: Final = 2.0**32
# An edge of a boundary is straight in longitude and latitude (RFC 7946, section 3.1.1). Cut to
# 1 km, what is straight on the grid is less than 3 cm away from it at middle latitudes.
_LONGEST_EDGE_M: Final = 1000.0
# Length of a degree of latitude at the poles of WGS 84, the longest of any degree.
_DEGREE_M: Final = 111_694.0
# Cells of the boxes around boundaries that are looked at in one go: 12 bytes each.
_CELLS_AT_ONCE: Final = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Zones:
    """The cells of several zones on one grid, one zone after the other.

    Attributes
    ----------
    indptr
        int64, shape (n + 1,): zone i owns the entries ``indptr[i]:indptr[i + 1]``.
    cells
        int32, shape (indptr[n],): row-major index of each cell on the grid, ascending
        within a zone. Zones may share cells.
    weights
        float32, same shape: coverage fraction of each cell, `MIN_COVERAGE` to 1.
    totals
        float64, shape (n,): area of the whole zone in cells, with what lies off the grid.
    """

    indptr: NDArray[np.int64]
    cells: NDArray[np.int32]
    weights: NDArray[np.float32]
    totals: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.totals)


@lru_cache(maxsize=64)
def _to_crs(crs: str) -> Transformer:
    return Transformer.from_crs("OGC:CRS84", crs, always_xy=True)


def project(
    geometries: Sequence[shapely.Geometry] | NDArray[np.object_], crs: str
) -> NDArray[np.object_]:
    """Project boundaries from WGS 84 onto a grid's CRS.

    Parameters
    ----------
    geometries
        Polygons or multipolygons in degrees, longitude first.
    crs
        Target, as an authority code or WKT.

    Returns
    -------
    NDArray
        The boundaries, shape (n,), with their edges cut to at most 1 km before projecting,
        because a long edge bends (20 km are up to 9 m off otherwise). Empty where the CRS
        can't hold one, for instance on the far side of the globe.
    """
    dense = shapely.segmentize(
        np.asarray(geometries, dtype=np.object_), _LONGEST_EDGE_M / _DEGREE_M
    )
    projected: NDArray[np.object_] = shapely.transform(
        dense, _to_crs(crs).transform, interleaved=False
    )
    points, owner = shapely.get_coordinates(projected, return_index=True)
    lost = np.unique(owner[~np.isfinite(points).all(axis=1)])
    projected[lost] = shapely.Polygon()
    return projected


def zones_on(grid: Grid, geometries: Sequence[shapely.Geometry] | NDArray[np.object_]) -> Zones:
    """Lay boundaries over a grid.

    Parameters
    ----------
    grid
        The measuring grid, of any size: memory goes with the boundaries, not with the grid.
    geometries
        Valid polygons or multipolygons in the CRS of the grid, of any orientation.

    Returns
    -------
    Zones
        In the order of `geometries`. A boundary off the grid gives a zone without cells that
        still has its total; an empty one a zone without cells and a total of 0.

    Notes
    -----
    Coverage fractions are the exact areas of the intersections (`service.zonal.edges`), to
    1e-10 of a cell; cells below `MIN_COVERAGE` are left out.
    """
    rings = _rings_of(geometries)
    place = grid.transform
    rings.points[:] = (rings.points - [place.c, place.f]) / [place.a, place.e]
    cells, shares, counts = _shares(grid.shape, rings, least=MIN_COVERAGE, steps=_STEPS)
    areas = np.zeros(rings.zones)
    np.add.at(areas, rings.zone_of, rings.areas())
    return Zones(
        indptr=_indptr(counts), cells=cells, weights=shares.astype(np.float32), totals=areas
    )


def joined(parts: Sequence[Zones]) -> Zones:
    """Return the zones of several parts on one grid, one after the other."""
    counts = [np.diff(part.indptr) for part in parts]
    return Zones(
        indptr=_indptr(np.concatenate([np.empty(0, np.int64), *counts])),
        cells=np.concatenate([np.empty(0, np.int32), *(part.cells for part in parts)]),
        weights=np.concatenate([np.empty(0, np.float32), *(part.weights for part in parts)]),
        totals=np.concatenate([np.empty(0, np.float64), *(part.totals for part in parts)]),
    )


def _indptr(counts: NDArray[np.int64]) -> NDArray[np.int64]:
    return np.concatenate([np.zeros(1, np.int64), np.cumsum(counts, dtype=np.int64)])


def shares_on(shape: tuple[int, int], outlines: NDArray[np.object_], *, least: float) -> Cells:
    """Return the cells of outlines given in columns and rows, as `service.zonal.edges.covered`.

    Parameters
    ----------
    shape
        (rows, cols) of the grid.
    outlines
        Polygons or multipolygons in columns and rows (downwards), shape (n,).
    least
        Smaller shares are left out. They are not rounded.
    """
    return _shares(shape, _rings_of(outlines), least=least, steps=0.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rings:
    """The rings of several zones, zone after zone; of each polygon first its shell.

    `points` has the shape (points, 2), ring i owns the points ``ends[i]:ends[i + 1]``.
    """

    zones: int
    points: NDArray[np.float64]
    ends: NDArray[np.int64]
    is_hole: NDArray[np.bool_]
    zone_of: NDArray[np.int64]

    def areas(self) -> NDArray[np.float64]:
        return ring_areas(self.points, self.ends, self.is_hole)[0]


def _rings_of(outlines: Sequence[shapely.Geometry] | NDArray[np.object_]) -> _Rings:
    parts, owner = shapely.get_parts(np.asarray(outlines, dtype=np.object_), return_index=True)
    lines, part_of = shapely.get_rings(parts, return_index=True)
    points = shapely.get_coordinates(lines)
    counts = shapely.get_num_coordinates(lines)
    is_hole = np.zeros(len(lines), dtype=np.bool_)
    is_hole[1:] = part_of[1:] == part_of[:-1]
    return _Rings(
        zones=len(outlines),
        points=points,
        ends=_indptr(counts),
        is_hole=is_hole,
        zone_of=owner[part_of].astype(np.int64),
    )


def _shares(shape: tuple[int, int], rings: _Rings, *, least: float, steps: float) -> Cells:
    _, signs = ring_areas(rings.points, rings.ends, rings.is_hole)
    places = np.arange(rings.zones)
    zone_rings = np.stack(
        [
            np.searchsorted(rings.zone_of, places),
            np.searchsorted(rings.zone_of, places, side="right"),
        ],
        axis=1,
    ).astype(np.int64)
    turns = list(_in_turns(_windows(shape, rings, zone_rings)))
    found = [
        covered(rings.points, rings.ends, signs, zone_rings[zones], windows, shape[1], least, steps)
        for zones, windows in turns
    ]
    counts = np.zeros(rings.zones, dtype=np.int64)
    for (zones, _), (_, _, own) in zip(turns, found, strict=True):
        counts[zones] += own
    return (
        np.concatenate([np.empty(0, np.int32), *(cells for cells, _, _ in found)]),
        np.concatenate([np.empty(0, np.float64), *(shares for _, shares, _ in found)]),
        counts,
    )


def _windows(
    shape: tuple[int, int], rings: _Rings, zone_rings: NDArray[np.int64]
) -> NDArray[np.int64]:
    """Return the rows and columns of the grid around each zone, shape (zones, 4); maybe none."""
    windows = np.zeros((rings.zones, 4), dtype=np.int64)
    filled = zone_rings[:, 1] > zone_rings[:, 0]
    if not filled.any():
        return windows
    # The points of a zone are neighbours, and none lie between two zones.
    starts = rings.ends[zone_rings[filled, 0]]
    first = np.floor(np.minimum.reduceat(rings.points, starts, axis=0))
    last = np.ceil(np.maximum.reduceat(rings.points, starts, axis=0))
    rows, cols = shape
    windows[filled] = np.stack(
        [
            np.clip(first[:, 1], 0, rows),
            np.clip(last[:, 1], 0, rows),
            np.clip(first[:, 0], 0, cols),
            np.clip(last[:, 0], 0, cols),
        ],
        axis=1,
    )
    return windows


def _in_turns(
    windows: NDArray[np.int64],
) -> Iterator[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    """Yield zones and windows of about `_CELLS_AT_ONCE` cells; a large window in several parts."""
    sizes = np.maximum((windows[:, 1] - windows[:, 0]) * (windows[:, 3] - windows[:, 2]), 0)
    first, filled = 0, 0
    for zone, size in enumerate(sizes.tolist()):
        if filled + size > _CELLS_AT_ONCE and zone > first:
            yield np.arange(first, zone), windows[first:zone]
            first, filled = zone, 0
        if size > _CELLS_AT_ONCE:
            yield from _bands(zone, windows[zone])
            first, filled = zone + 1, 0
        filled += size if first <= zone else 0
    if first < len(windows):
        yield np.arange(first, len(windows)), windows[first:]


def _bands(
    zone: int, window: NDArray[np.int64]
) -> Iterator[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    row0, row1, col0, col1 = window.tolist()
    step = max(1, _CELLS_AT_ONCE // (col1 - col0))
    for row in range(row0, row1, step):
        band = [row, min(row + step, row1), col0, col1]
        yield np.array([zone]), np.array([band], dtype=np.int64)
