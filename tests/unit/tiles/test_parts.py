"""The parts of a file that are read: whole blocks that hold wanted cells, each once."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.tiles.parts import Area, blocks_with, take_cells, wanted_areas
from service.zonal.plan import row_starts


def areas_of(wanted: list[str], *, most_cells: int = 10**6) -> list[Area]:
    """Areas of a grid of 10 by 12 cells in blocks of 4 by 5, from a drawing of its blocks."""
    drawn = np.array([[mark == "x" for mark in row] for row in wanted])
    within = Area(row0=0, row1=10, col0=0, col1=12)
    return list(wanted_areas(within, (4, 5), drawn, most_cells=most_cells))


@pytest.mark.parametrize(
    ("wanted", "most_cells", "expected"),
    [
        (["...", "...", "..."], 10**6, []),
        # All of it at once; at the edges blocks end with the grid.
        (["xxx", "xxx", "xxx"], 10**6, [(0, 10, 0, 12)]),
        # A row of blocks at a time, and two blocks at a time.
        (["xxx", "xxx", "xxx"], 60, [(0, 4, 0, 12), (4, 8, 0, 12), (8, 10, 0, 12)]),
        (["xxx", "...", "..."], 40, [(0, 4, 0, 10), (0, 4, 10, 12)]),
        # A block that is too large is read all the same.
        (["x..", "...", "..."], 1, [(0, 4, 0, 5)]),
        (["x.x", "x.x", ".x."], 10**6, [(0, 8, 0, 5), (0, 8, 10, 12), (8, 10, 5, 10)]),
    ],
)
def test_neighbours_are_read_together(
    wanted: list[str], most_cells: int, expected: list[tuple[int, int, int, int]]
) -> None:
    found = [(a.row0, a.row1, a.col0, a.col1) for a in areas_of(wanted, most_cells=most_cells)]
    assert found == expected


sizes = st.integers(1, 40)


@given(
    side=sizes,
    block=st.tuples(sizes, sizes),
    limit=st.integers(1, 2000),
    seed=st.integers(0, 2**16),
    share=st.floats(0, 1),
)
def test_areas_are_disjoint_and_hold_every_wanted_cell_and_no_block_without_one(
    *, side: int, block: tuple[int, int], limit: int, seed: int, share: float
) -> None:
    height, width = block
    random = np.random.default_rng(seed)
    is_cell, is_wanted = random.random((side, side)) < 0.5, random.random((side, side)) < share**3
    cells = np.flatnonzero(is_cell).astype(np.int32)
    wanted = is_wanted.reshape(-1)[cells]
    starts = row_starts(cells, (side, side))
    found = blocks_with(cells, starts, 0, side, side, height, width, 0, wanted)
    held = np.zeros((side, side), dtype=int)
    within = Area(row0=0, row1=side, col0=0, col1=side)
    for area in wanted_areas(within, block, found, most_cells=limit):
        size = (area.row1 - area.row0) * (area.col1 - area.col0)
        assert size <= max(limit, height * width)
        held[area.row0 : area.row1, area.col0 : area.col1] += 1
    assert held.max(initial=0) <= 1
    assert held[is_cell & is_wanted].all()
    for top in range(0, side, height):
        for left in range(0, side, width):
            here = np.s_[top : top + height, left : left + width]
            assert held[here].any() == (is_cell & is_wanted)[here].any()


@given(seed=st.integers(0, 2**16), rows=sizes, cols=sizes)
def test_cells_are_taken_out_of_what_was_read(*, seed: int, rows: int, cols: int) -> None:
    random = np.random.default_rng(seed)
    image = random.integers(0, 2**16, (rows, cols), dtype=np.uint16)
    cells = np.flatnonzero(random.random(rows * cols) < 0.4).astype(np.int32)
    row0, row1 = np.sort(random.integers(0, rows + 1, 2)).tolist()
    col0, col1 = np.sort(random.integers(0, cols + 1, 2)).tolist()
    into = np.full(len(cells), 7, dtype=np.uint16)
    area = (row0, row1, col0, col1)
    starts = row_starts(cells, (rows, cols))
    take_cells(
        np.ascontiguousarray(image[row0:row1, col0:col1]), row0, col0, area, cells, starts, cols,
        0, into,
    )  # fmt: skip
    row, col = np.divmod(cells, cols)
    inside = (row >= row0) & (row < row1) & (col >= col0) & (col < col1)
    np.testing.assert_array_equal(into, np.where(inside, image.reshape(-1)[cells], 7))
