"""Which parts of a file are read one after the other: those that hold wanted cells."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled


@dataclass(frozen=True, slots=True, kw_only=True)
class Area:
    """Rows and columns of a grid, half-open."""

    row0: int
    row1: int
    col0: int
    col1: int


def wanted_areas(
    within: Area,
    block_shape: tuple[int, int],
    wanted: NDArray[np.bool_],
    *,
    most_cells: int,
) -> Iterator[Area]:
    """Yield rectangles of whole blocks that together hold every wanted block once.

    Neighbouring blocks of a row are read at once, because several can be decoded side by
    side, and rows of blocks with the same ones together.

    Parameters
    ----------
    within
        Rows and columns to look at; its first row begins a row of blocks, its first column is
        0, and it ends with the grid or with a row of blocks.
    block_shape
        (rows, cols) of a block.
    wanted
        Which blocks are wanted, shape (rows of blocks, columns of blocks).
    most_cells
        How many cells a rectangle may have, unless a block has more.
    """
    height, width = block_shape
    across = max(1, most_cells // (height * width))
    open_runs: list[tuple[int, int]] = []
    top = 0
    for row in range(len(wanted) + 1):
        runs = _runs(wanted[row], across) if row < len(wanted) else []
        cells = max((stop - start for start, stop in open_runs), default=0) * width * height
        if runs == open_runs and cells * (row - top + 1) <= most_cells:
            continue
        for start, stop in open_runs:
            yield Area(
                row0=within.row0 + top * height,
                row1=min(within.row0 + row * height, within.row1),
                col0=start * width,
                col1=min(stop * width, within.col1),
            )
        open_runs, top = runs, row


def _runs(wanted: NDArray[np.bool_], longest: int) -> list[tuple[int, int]]:
    """Return where runs of wanted blocks begin and end, none longer than `longest`."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], wanted.view(np.int8), [0]])))
    return [
        (start, min(start + longest, stop))
        for begin, stop in edges.reshape(-1, 2).tolist()
        for start in range(begin, stop, longest)
    ]


@compiled
def blocks_with(
    cells: NDArray[np.int32],
    starts: NDArray[np.int64],
    row0: int,
    row1: int,
    grid_cols: int,
    height: int,
    width: int,
    first: int,
    wanted: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Return which blocks of some rows hold a wanted cell.

    Parameters
    ----------
    cells, starts
        Cells of the grid, ascending, and where each row begins among them.
    row0, row1, grid_cols, height, width
        The rows to look at, from the first of a row of blocks; columns of the grid; size of a
        block.
    first, wanted
        Which cells are wanted, from the one at `first` on; those beyond its end are, those
        before are not.
    """
    found = np.zeros(((row1 - row0 - 1) // height + 1, (grid_cols - 1) // width + 1), np.bool_)
    for row in range(row0, row1):
        own = found[(row - row0) // height]
        base = row * grid_cols
        block, edge = -1, 0
        for at in range(starts[row], starts[row + 1]):
            if at < first or (at - first < len(wanted) and not wanted[at - first]):
                continue
            col = cells[at] - base
            if col >= edge:
                block = col // width
                edge = (block + 1) * width
                own[block] = True
    return found


@compiled
def take_cells(
    numbers: NDArray[np.unsignedinteger],
    row0: int,
    col0: int,
    area: tuple[int, int, int, int],
    cells: NDArray[np.int32],
    starts: NDArray[np.int64],
    grid_cols: int,
    first: int,
    into: NDArray[np.unsignedinteger],
) -> None:
    """Take the cells of an area out of numbers that were read.

    Parameters
    ----------
    numbers, row0, col0
        What was read, shape (rows, cols), and the first row and column of it on the grid.
    area
        Rows and columns to take, ``row0, row1, col0, col1``, half-open; all of it was read.
    cells, starts, grid_cols
        As in `blocks_with`.
    first, into
        Where the numbers go, from that of the cell at `first` on.
    """
    for row in range(area[0], area[1]):
        base = row * grid_cols
        low, high = starts[row], starts[row + 1]
        stop = high
        while low < stop:
            middle = (low + stop) // 2
            if cells[middle] - base < area[2]:
                low = middle + 1
            else:
                stop = middle
        line = numbers[row - row0]
        shift = base + col0
        end = base + area[3]
        for at in range(low, high):
            cell = cells[at]
            if cell >= end:
                break
            into[at - first] = line[cell - shift]
