"""Which parts of a grid are read one after the other."""

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.tiles.intake import Header
from service.zonal.grid import Grid


@dataclass(frozen=True, slots=True, kw_only=True)
class Area:
    """Rows and columns of a grid, half-open."""

    row0: int
    row1: int
    col0: int
    col1: int


def part_shape(grid: Grid, headers: Sequence[Header], *, cells: int) -> tuple[int, int]:
    """Return (rows, cols) of the parts that a grid is read in, of at most `cells` cells.

    Whole blocks of the files, so that each is decoded once, and as wide as the grid if
    memory allows. Where block sizes have no small common multiple, those of a file on
    the grid itself count and others are decoded more than once; memory comes first.

    Parameters
    ----------
    grid
        The grid of at least one of the files.
    headers
        Of all files that are read.
    cells
        How many cells fit into memory, at least 1.
    """
    rows, cols = grid.shape
    if rows * cols <= cells:
        return rows, cols
    nested = [shape for shape in (_block_in_cells(h, grid) for h in headers) if shape is not None]
    height, width = _common_shape(nested, grid)
    if height * width > cells:
        own = max(header.block_shape for header in headers if header.grid == grid)
        height, width = _common_shape([own], grid)
    if height * cols <= cells:
        return min(height * (cells // (height * cols)), rows), cols
    if height * width <= cells:
        return height, width * (cells // (height * width))
    return max(1, cells // width), min(width, cells)


def wanted_areas(grid: Grid, part: tuple[int, int], cells: NDArray[np.int64]) -> Iterator[Area]:
    """Yield the smallest rectangle around the wanted cells of each part that has some.

    Parameters
    ----------
    grid
        The grid that cells are counted on.
    part
        (rows, cols) of a part.
    cells
        Flat row-major indices, ascending and unique, shape (n,).
    """
    rows, cols = grid.shape
    height, width = part
    sides = np.append(np.arange(0, cols, width, dtype=np.int64), cols)
    for top in range(0, rows, height):
        lines = np.arange(top, min(top + height, rows), dtype=np.int64)
        # Where the cells of each line and part begin and end; the cells themselves, which
        # may be most of the grid, are not copied.
        edges = np.searchsorted(cells, lines[:, np.newaxis] * cols + sides)
        for here in range(sides.size - 1):
            first, last = edges[:, here], edges[:, here + 1]
            held = first < last
            if held.any():
                yield Area(
                    row0=int(lines[held][0]),
                    row1=int(lines[held][-1]) + 1,
                    col0=int((cells[first[held]] % cols).min()),
                    col1=int((cells[last[held] - 1] % cols).max()) + 1,
                )


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """Where the cells of an area are on another grid.

    Attributes
    ----------
    inside
        Index of the area's cells that have their centre on the other grid.
    rows, cols
        The other grid's rows and columns at their centres.
    window
        The smallest area of the other grid that has them all, None if there are none.
    """

    inside: tuple[NDArray[Any], ...]
    rows: NDArray[np.int64]
    cols: NDArray[np.int64]
    window: Area | None

    def nearest(self, within: Area) -> tuple[NDArray[Any], ...]:
        """Return the index of the places in an array of an area of the other grid."""
        return np.ix_(self.rows - within.row0, self.cols - within.col0)


def places_on(theirs: Grid, grid: Grid, area: Area) -> Places:
    """Return where the cells of an area of one grid are on another, by their centres."""
    rows = theirs.rows_at(grid.centre_ys(area.row0, area.row1))
    cols = theirs.cols_at(grid.centre_xs(area.col0, area.col1))
    has_row = (rows >= 0) & (rows < theirs.shape[0])
    has_col = (cols >= 0) & (cols < theirs.shape[1])
    rows, cols = rows[has_row], cols[has_col]
    window = None
    if rows.size and cols.size:
        window = Area(
            row0=int(rows.min()),
            row1=int(rows.max()) + 1,
            col0=int(cols.min()),
            col1=int(cols.max()) + 1,
        )
    return Places(inside=np.ix_(has_row, has_col), rows=rows, cols=cols, window=window)


def _common_shape(shapes: Iterable[tuple[int, int]], grid: Grid) -> tuple[int, int]:
    heights, widths = zip(*shapes, strict=True)
    return min(math.lcm(*heights), grid.shape[0]), min(math.lcm(*widths), grid.shape[1])


def _block_in_cells(header: Header, grid: Grid) -> tuple[int, int] | None:
    """Return a file's block shape in cells of the grid, or None if the grids do not nest."""
    ours, theirs = grid.transform, header.grid.transform
    down, across = theirs.e / ours.e, theirs.a / ours.a
    same_corner = (ours.c, ours.f) == (theirs.c, theirs.f)
    if not (same_corner and down.is_integer() and across.is_integer() and down >= 1 <= across):
        return None
    return header.block_shape[0] * int(down), header.block_shape[1] * int(across)
