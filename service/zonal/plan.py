"""A plan: everything about zones on a grid that does not depend on the scene.

Zones share cells, and bands share grids. A plan holds each cell once, and for every other grid
of a scene the cells there that the zones need: a band is gathered on its own grid, and each
zone's entry finds its number by two steps, entry → cell → cell of the band's grid.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled
from service.zonal.coverage import Zones
from service.zonal.grid import Grid


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class View:
    """The cells of a plan on another grid, each taken at the centre of its own cell.

    Attributes
    ----------
    grid
        The other grid.
    cells
        int32, shape (n,): row-major indices there, ascending and unique.
    at
        int32, shape (cells of the plan,): which of these each cell of the plan takes; -1 where
        its centre is off the other grid.
    """

    grid: Grid
    cells: NDArray[np.int32]
    at: NDArray[np.int32]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Plan:
    """Zones on a measuring grid, and on the other grids of a scene.

    The zones are ordered by their last cell, those without cells first: whoever reads the cells
    in ascending order can finish one zone after the other, and finds neighbours together.

    Attributes
    ----------
    grid
        The measuring grid.
    order
        int64, shape (zones,): which of the boundaries, as they were given, each zone is.
    indptr
        int64, shape (zones + 1,): zone i owns the entries ``indptr[i]:indptr[i + 1]``.
    at
        int32, shape (entries,): which of `cells` each entry is, ascending within a zone.
    weights
        float32, shape (entries,): coverage fractions.
    totals
        float64, shape (zones,): area of the whole zone in cells.
    cells
        int32, shape (cells,): row-major indices on the measuring grid, ascending and unique.
    views
        The same cells on other grids.
    """

    grid: Grid
    order: NDArray[np.int64]
    indptr: NDArray[np.int64]
    at: NDArray[np.int32]
    weights: NDArray[np.float32]
    totals: NDArray[np.float64]
    cells: NDArray[np.int32]
    views: tuple[View, ...]

    def __len__(self) -> int:
        return len(self.totals)

    @property
    def last_cells(self) -> NDArray[np.int64]:
        """Return which of `cells` is the last of each zone, -1 for none, ascending."""
        last = np.full(len(self), -1, dtype=np.int64)
        filled = self.indptr[1:] > self.indptr[:-1]
        last[filled] = self.at[self.indptr[1:][filled] - 1]
        return last

    def own_cells(self) -> NDArray[np.bool_]:
        """Return which boundaries, as they were given, have a cell on the grid."""
        owns = np.empty(len(self), dtype=np.bool_)
        owns[self.order] = np.diff(self.indptr) > 0
        return owns

    def view(self, grid: Grid) -> View | None:
        """Return the cells on another grid; None for the measuring grid itself.

        Raises
        ------
        KeyError
            The plan was not made for that grid.
        """
        if grid == self.grid:
            return None
        for view in self.views:
            if view.grid == grid:
                return view
        raise KeyError("the plan was not made for this grid")


def plan_of(grid: Grid, zones: Zones, others: Iterable[Grid] = ()) -> Plan:
    """Make a plan of zones on a grid for scenes with bands on some other grids too."""
    lengths = np.diff(zones.indptr)
    last = np.full(len(zones), -1, dtype=np.int64)
    last[lengths > 0] = zones.cells[zones.indptr[1:][lengths > 0] - 1]
    order = np.argsort(last, kind="stable").astype(np.int64)
    indptr = np.concatenate([[0], np.cumsum(lengths[order], dtype=np.int64)])
    cells, at = _each_once(_reordered(zones.cells, zones.indptr, order))
    return Plan(
        grid=grid,
        order=order,
        indptr=indptr,
        at=at,
        weights=_reordered(zones.weights.view(np.int32), zones.indptr, order).view(np.float32),
        totals=zones.totals[order],
        cells=cells,
        views=tuple(_view(grid, cells, other) for other in dict.fromkeys(others) if other != grid),
    )


@compiled
def _reordered(
    entries: NDArray[np.int32], indptr: NDArray[np.int64], order: NDArray[np.int64]
) -> NDArray[np.int32]:
    """Return the entries of zones in another order."""
    moved = np.empty(len(entries), np.int32)
    to = 0
    for zone in order:
        for at in range(indptr[zone], indptr[zone + 1]):
            moved[to] = entries[at]
            to += 1
    return moved


def row_starts(cells: NDArray[np.int32], shape: tuple[int, int]) -> NDArray[np.int64]:
    """Return where among ascending cells each row of a grid begins, shape (rows + 1,)."""
    rows, cols = shape
    firsts = np.arange(rows + 1, dtype=np.int64) * cols
    # Of one type, or the cells would be copied; no cell is as large as the last edge.
    edges = np.minimum(firsts, np.iinfo(np.int32).max).astype(np.int32)
    return np.searchsorted(cells, edges).astype(np.int64)


def _view(grid: Grid, cells: NDArray[np.int32], other: Grid) -> View:
    rows = _inside(other.rows_at(grid.centre_ys(0, grid.shape[0])), other.shape[0])
    cols = _inside(other.cols_at(grid.centre_xs(0, grid.shape[1])), other.shape[1])
    there = _placed(cells, row_starts(cells, grid.shape), grid.shape[1], rows, cols, other.shape[1])
    held = there >= 0
    own, places = _each_once(there[held])
    at = np.full(len(cells), -1, dtype=np.int32)
    at[held] = places
    return View(grid=other, cells=own, at=at)


def _inside(places: NDArray[np.int64], size: int) -> NDArray[np.int32]:
    """Return the places, -1 for those that are off the grid."""
    return np.where((places >= 0) & (places < size), places, -1).astype(np.int32)


@compiled
def _placed(
    cells: NDArray[np.int32],
    starts: NDArray[np.int64],
    grid_cols: int,
    rows: NDArray[np.int32],
    cols: NDArray[np.int32],
    their_cols: int,
) -> NDArray[np.int32]:
    """Return each cell's index on another grid, by the rows and columns there; or -1."""
    there = np.empty(len(cells), np.int32)
    for row in range(len(starts) - 1):
        for at in range(starts[row], starts[row + 1]):
            col = cols[cells[at] - row * grid_cols]
            off = rows[row] < 0 or col < 0
            there[at] = -1 if off else rows[row] * their_cols + col
    return there


def _each_once(cells: NDArray[np.int32]) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """Return the distinct cells, ascending, and which of them each cell is."""
    if not len(cells):
        return np.empty(0, np.int32), np.empty(0, np.int32)
    return _ranked(cells, int(cells.min()), int(cells.max()))


@compiled
def _bits_set(word: np.uint64) -> np.int32:
    """Count the bits that are set, by adding up halves, quarters, bytes."""
    word -= (word >> np.uint64(1)) & np.uint64(0x5555555555555555)
    pairs = np.uint64(0x3333333333333333)
    word = (word & pairs) + ((word >> np.uint64(2)) & pairs)
    word = (word + (word >> np.uint64(4))) & np.uint64(0x0F0F0F0F0F0F0F0F)
    return np.int32((word * np.uint64(0x0101010101010101)) >> np.uint64(56))


@compiled
def _ranked(
    cells: NDArray[np.int32], lowest: int, highest: int
) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """Rank cells by a map of one bit to a cell: no sorting, and 16 MB for the largest tile."""
    words = np.zeros((highest - lowest) // 64 + 1, np.uint64)
    one = np.uint64(1)
    for cell in cells:
        place = cell - lowest
        words[place >> 6] |= one << np.uint64(place & 63)
    before = np.empty(len(words), np.int32)
    total = 0
    for at in range(len(words)):
        before[at] = total
        total += int(_bits_set(words[at]))
    each = np.empty(total, np.int32)
    ranks = np.empty(len(cells), np.int32)
    for at in range(len(cells)):
        place = cells[at] - lowest
        below = words[place >> 6] & ((one << np.uint64(place & 63)) - one)
        rank = before[place >> 6] + _bits_set(below)
        ranks[at] = rank
        each[rank] = cells[at]
    return each, ranks
