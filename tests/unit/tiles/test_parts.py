"""The parts of a grid: whole blocks, within memory, around wanted cells only."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.tiles.intake import Header
from service.tiles.parts import Area, part_shape, wanted_areas
from service.zonal.grid import Grid
from tests.unit.tiles.conftest import grid_transform


def header(side: int, cell: float, block_shape: tuple[int, int], *, x: float = 500_000.0) -> Header:
    return Header(
        grid=Grid(crs="EPSG:32633", transform=grid_transform(cell, x=x), shape=(side, side)),
        count=1,
        dtypes=("uint16",),
        nodata=(None,),
        driver="GTiff",
        block_shape=block_shape,
    )


@pytest.mark.parametrize(
    ("headers", "cells", "expected"),
    [
        # All of it fits.
        ([header(1000, 10, (512, 512))], 10**6, (1000, 1000)),
        # Rows of one line: as many as fit.
        ([header(1000, 10, (1, 1000))], 37_500, (37, 1000)),
        # Tiles: whole rows of tiles, or as many tiles of one row as fit.
        ([header(4000, 10, (512, 512))], 5_000_000, (1024, 4000)),
        ([header(4000, 10, (512, 512))], 1_000_000, (512, 1536)),
        # A coarser file that nests: its tiles cover 1024 cells.
        ([header(4000, 10, (512, 512)), header(2000, 20, (512, 512))], 5_000_000, (1024, 4000)),
        ([header(4000, 10, (512, 512)), header(2000, 20, (512, 512))], 2_500_000, (1024, 2048)),
        # No small common multiple of 1024 and 1280: the grid's own tiles count.
        ([header(10980, 10, (1024, 1024)), header(5490, 20, (640, 640))], 4_000_000, (1024, 3072)),
        # A file that does not nest has no say.
        ([header(4000, 10, (512, 512)), header(1400, 30, (7, 7), x=0)], 5_000_000, (1024, 4000)),
        # A tile larger than memory is cut.
        ([header(4000, 10, (4000, 4000))], 1_000_000, (250, 4000)),
        ([header(4000, 10, (4000, 4000))], 100, (1, 100)),
    ],
)
def test_parts_are_whole_blocks_within_memory(
    headers: list[Header], cells: int, expected: tuple[int, int]
) -> None:
    assert part_shape(headers[0].grid, headers, cells=cells) == expected


sizes = st.integers(1, 40)


@given(
    side=sizes,
    block=st.tuples(sizes, sizes),
    limit=st.integers(1, 2000),
    seed=st.integers(0, 2**16),
    share=st.floats(0, 1),
)
def test_areas_are_disjoint_within_memory_and_hold_every_wanted_cell(
    *, side: int, block: tuple[int, int], limit: int, seed: int, share: float
) -> None:
    of = header(side, 10, (min(block[0], side), min(block[1], side)))
    wanted = np.random.default_rng(seed).random((side, side)) < share
    cells = np.flatnonzero(wanted).astype(np.int64)
    part = part_shape(of.grid, [of], cells=limit)
    assert part[0] * part[1] <= limit
    held = np.zeros((side, side), dtype=int)
    for area in wanted_areas(of.grid, part, cells):
        inside = np.s_[area.row0 : area.row1, area.col0 : area.col1]
        assert held[inside].size <= limit
        # No row or column at the rim without a wanted cell.
        rim = wanted[inside]
        assert rim[0].any()
        assert rim[-1].any()
        assert rim[:, 0].any()
        assert rim[:, -1].any()
        held[inside] += 1
    assert held.max(initial=0) <= 1
    assert held[wanted].all()


def test_no_wanted_cells_give_no_area() -> None:
    of = header(10, 10, (1, 10))
    assert list(wanted_areas(of.grid, (2, 10), np.empty(0, dtype=np.int64))) == []
    (area,) = wanted_areas(of.grid, (2, 10), np.array([99], dtype=np.int64))
    assert area == Area(row0=9, row1=10, col0=9, col1=10)
