"""A grid: coordinate reference system, affine transform and shape."""

from dataclasses import dataclass

import numpy as np
from affine import Affine
from numpy.typing import NDArray

Bounds = tuple[float, float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Grid:
    """The cells of a raster on the ground.

    Attributes
    ----------
    crs
        Coordinate reference system, as an authority code (``EPSG:32633``) or WKT.
    transform
        Affine transform from (column, row) to (x, y) of the upper-left corner of a cell.
        Only axis-aligned grids exist here: no rotation, no shear.
    shape
        (rows, cols).
    """

    crs: str
    transform: Affine
    shape: tuple[int, int]

    @property
    def cell_area_m2(self) -> float:
        """Area of one cell on the grid, in square metres (CRS in metres)."""
        return abs(float(self.transform.a) * float(self.transform.e))

    @property
    def bounds(self) -> Bounds:
        """(xmin, ymin, xmax, ymax) in CRS units."""
        rows, cols = self.shape
        x0, y0 = float(self.transform.c), float(self.transform.f)
        x1, y1 = x0 + cols * float(self.transform.a), y0 + rows * float(self.transform.e)
        return (min(x0, x1), min(y0, y1), max(x0, x1), max(y0, y1))

    def centre_xs(self, start: int, stop: int) -> NDArray[np.float64]:
        """Return x of the cell centres of columns ``start`` to ``stop``, shape (stop - start,)."""
        steps = np.arange(start, stop, dtype=np.float64) + 0.5
        return np.asarray(float(self.transform.c) + steps * float(self.transform.a))

    def centre_ys(self, start: int, stop: int) -> NDArray[np.float64]:
        """Return y of the cell centres of rows ``start`` to ``stop``, shape (stop - start,)."""
        steps = np.arange(start, stop, dtype=np.float64) + 0.5
        return np.asarray(float(self.transform.f) + steps * float(self.transform.e))

    def cols_at(self, xs: NDArray[np.float64]) -> NDArray[np.int64]:
        """Return the column that holds each x, on or off the grid; a cell owns its left edge."""
        return np.floor((xs - float(self.transform.c)) / float(self.transform.a)).astype(np.int64)

    def rows_at(self, ys: NDArray[np.float64]) -> NDArray[np.int64]:
        """Return the row that holds each y, on or off the grid; a cell owns its first edge."""
        return np.floor((ys - float(self.transform.f)) / float(self.transform.e)).astype(np.int64)
