"""Reading: what was written comes back, cell by cell, in blocks of bounded size.

The expected numbers are the arrays that were written; on other grids they are worked out
from coordinates, cell centre by cell centre, without the service's own grid arithmetic.
"""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from affine import Affine
from numpy.typing import NDArray

from service.errors import RejectedInput
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.reading import (
    BandSource,
    SceneSource,
    measuring_grid,
    read_blocks,
    read_tile,
)
from tests.unit.tiles.conftest import WriteRaster, grid_transform

RED, NIR, SWIR = BandRole.RED, BandRole.NIR, BandRole.SWIR16
SCALING = Scaling(scale=1e-4, offset=-0.1)
RNG = np.random.default_rng(20)
TILED = {"tiled": True, "blockxsize": 32, "blockysize": 16, "compress": "deflate"}


def numbers(rows: int, cols: int, dtype: str = "uint16") -> NDArray[Any]:
    return RNG.integers(1, 200, (rows, cols)).astype(dtype)


def band(role: BandRole, path: Path, **more: Any) -> BandSource:
    return BandSource(role=role, path=path, scaling=SCALING, **more)


def scene(*bands: BandSource, quality: BandSource | None = None) -> SceneSource:
    return SceneSource(bands=bands, quality=quality)


def all_cells(source: SceneSource) -> NDArray[np.int64]:
    rows, cols = measuring_grid(source).shape
    return np.arange(rows * cols, dtype=np.int64)


def put_together(blocks: Sequence[xr.Dataset], name: str, shape: tuple[int, int]) -> NDArray[Any]:
    """Return the blocks as one float array; NaN where none was given; blocks must not overlap."""
    whole = np.full(shape, np.nan)
    seen = np.zeros(shape, dtype=bool)
    for block in blocks:
        rows, cols = block[name].shape
        part = np.s_[
            block.attrs["row0"] : block.attrs["row0"] + rows,
            block.attrs["col0"] : block.attrs["col0"] + cols,
        ]
        assert not seen[part].any()
        seen[part] = True
        whole[part] = block[name].to_numpy()
    return whole


def nearest(
    coarse: NDArray[Any], transform: Affine, fine: tuple[int, int], fine_transform: Affine
) -> NDArray[np.float64]:
    """Return the coarse number at each fine cell's centre, one cell after the other."""
    found = np.full(fine, np.nan)
    for row in range(fine[0]):
        for col in range(fine[1]):
            x = fine_transform.c + (col + 0.5) * fine_transform.a
            y = fine_transform.f + (row + 0.5) * fine_transform.e
            at_col = int((x - transform.c) // transform.a)
            at_row = int((y - transform.f) // transform.e)
            if 0 <= at_row < coarse.shape[0] and 0 <= at_col < coarse.shape[1]:
                found[row, col] = coarse[at_row, at_col]
    return found


@pytest.mark.parametrize("options", [TILED, {"blockysize": 1}, {"blockysize": 16}])
def test_blocks_put_together_are_what_was_written(
    write_raster: WriteRaster, options: dict[str, Any]
) -> None:
    red, nir = numbers(150, 130), numbers(150, 130, "float32")
    source = scene(
        band(RED, write_raster("red.tif", red, **options)),
        band(NIR, write_raster("nir.tif", nir, **TILED)),
    )
    blocks = list(read_blocks(source, all_cells(source), block_bytes=10_000))
    assert len(blocks) > 10
    assert max(block.nbytes for block in blocks) < 2 * 10_000
    assert {block["red"].dtype for block in blocks} == {np.dtype("uint16")}
    np.testing.assert_array_equal(put_together(blocks, "red", red.shape), red)
    np.testing.assert_array_equal(put_together(blocks, "nir", nir.shape), nir)
    tile = read_tile(source)
    np.testing.assert_array_equal(tile["red"], red)
    np.testing.assert_array_equal(tile["nir"], nir)


def test_a_block_says_where_it_lies_and_what_its_numbers_mean(write_raster: WriteRaster) -> None:
    red = numbers(60, 50)
    path = write_raster("red.tif", red, blockysize=4)
    source = scene(band(RED, path, nodata=0.0, saturated=65_535.0))
    wanted = np.array([11 * 50 + 7, 13 * 50 + 20], dtype=np.int64)
    (block,) = read_blocks(source, wanted)
    assert block.attrs == {"row0": 11, "col0": 7, "grid_cols": 50}
    np.testing.assert_array_equal(block["red"], red[11:14, 7:21])
    meaning = {"nodata": 0.0, "saturated": 65_535.0, "scale": 1e-4, "offset": -0.1}
    assert block["red"].attrs == meaning
    np.testing.assert_array_equal(block["x"], 500_000 + 10 * (np.arange(7, 21) + 0.5))
    np.testing.assert_array_equal(block["y"], 5_400_000 - 10 * (np.arange(11, 14) + 0.5))
    assert block.rio.crs.to_epsg() == 32633
    assert block.rio.transform()[:6] == (10.0, 0.0, 500_070.0, 0.0, -10.0, 5_399_890.0)


def test_only_parts_that_hold_wanted_cells_are_read(write_raster: WriteRaster) -> None:
    red = numbers(400, 90)
    source = scene(band(RED, write_raster("red.tif", red, **TILED)))
    wanted = np.array([5 * 90 + 3, 5 * 90 + 4, 300 * 90 + 80, 310 * 90 + 70], dtype=np.int64)
    blocks = list(read_blocks(source, wanted, block_bytes=10_000))
    places = [(b.attrs["row0"], b.attrs["col0"], b["red"].shape) for b in blocks]
    assert places == [(5, 3, (1, 2)), (300, 70, (11, 11))]
    assert list(read_blocks(source, np.empty(0, dtype=np.int64))) == []


def test_every_wanted_cell_comes_exactly_once(write_raster: WriteRaster) -> None:
    red = numbers(200, 300)
    source = scene(band(RED, write_raster("red.tif", red, **TILED)))
    wanted = np.sort(RNG.choice(red.size, 500, replace=False)).astype(np.int64)
    blocks = list(read_blocks(source, wanted, block_bytes=10_000))
    assert len(blocks) > 3
    whole = put_together(blocks, "red", red.shape)
    np.testing.assert_array_equal(whole.ravel()[wanted], red.ravel()[wanted])


def test_coarser_bands_are_taken_at_the_finer_cells_centre(write_raster: WriteRaster) -> None:
    fine, half = numbers(60, 66), numbers(30, 33)
    # 30 m from a corner of its own, so that cells neither nest nor share an edge.
    odd, odd_at = numbers(24, 26), grid_transform(30.0, x=499_993.0, y=5_400_011.0)
    source = scene(
        band(SWIR, write_raster("swir.tif", odd, transform=odd_at)),
        band(RED, write_raster("red.tif", fine, **TILED)),
        band(NIR, write_raster("nir.tif", half, transform=grid_transform(20.0), blockysize=3)),
    )
    assert measuring_grid(source).shape == fine.shape
    blocks = list(read_blocks(source, all_cells(source), block_bytes=10_000))
    assert len(blocks) > 3
    at = grid_transform(10.0)
    for name, expected in (
        ("red", fine.astype(float)),
        ("nir", np.repeat(np.repeat(half, 2, 0), 2, 1)),
        ("swir16", nearest(odd, odd_at, fine.shape, at)),
    ):
        assert np.isfinite(expected).all()
        np.testing.assert_array_equal(put_together(blocks, name, fine.shape), expected)
    np.testing.assert_array_equal(read_tile(source)["swir16"], nearest(odd, odd_at, fine.shape, at))


@pytest.mark.parametrize(
    ("dtype", "nodata", "expected_dtype"),
    [
        ("uint16", 0.0, "uint16"),
        ("uint16", None, "float32"),
        ("uint16", -9999.0, "float32"),
        ("int32", None, "float64"),
        ("float32", -1.0, "float32"),
        ("float32", None, "float32"),
        ("float32", 1e300, "float32"),
    ],
)
def test_outside_a_bands_extent_stands_its_nodata_or_nan(
    write_raster: WriteRaster, *, dtype: str, nodata: float | None, expected_dtype: str
) -> None:
    fine, part = numbers(60, 60), numbers(10, 8, dtype)
    part_at = grid_transform(30.0, x=500_145.0, y=5_399_700.0)
    source = scene(
        band(RED, write_raster("red.tif", fine, **TILED)),
        band(NIR, write_raster("nir.tif", part, transform=part_at), nodata=nodata),
    )
    expected = nearest(part, part_at, fine.shape, grid_transform(10.0))
    assert np.isnan(expected).any()
    if nodata in (0.0, -1.0):
        expected = np.where(np.isnan(expected), nodata, expected)
    blocks = list(read_blocks(source, all_cells(source), block_bytes=10_000))
    assert len(blocks) > 1
    assert {block["nir"].dtype for block in blocks} == {np.dtype(expected_dtype)}
    np.testing.assert_array_equal(put_together(blocks, "nir", fine.shape), expected)


@pytest.mark.parametrize("interleave", ["pixel", "band"])
def test_bands_of_a_stack_are_counted_from_one(write_raster: WriteRaster, interleave: str) -> None:
    stack = np.stack([numbers(70, 80, "uint8") for _ in range(4)])
    path = write_raster("stack.tif", stack, interleave=interleave, **TILED)
    quality = BandSource(role="quality", path=path, scaling=None, band=4, nodata=0.0)
    source = scene(band(NIR, path, band=3), band(RED, path, band=1), quality=quality)
    blocks = list(read_blocks(source, all_cells(source), block_bytes=10_000))
    for name, index in (("nir", 2), ("red", 0), ("quality", 3)):
        np.testing.assert_array_equal(put_together(blocks, name, stack.shape[1:]), stack[index])
    assert blocks[0]["quality"].dtype == np.uint8
    assert "scale" not in blocks[0]["quality"].attrs


@pytest.mark.parametrize("place", [0, 3])
def test_a_band_that_the_file_lacks_is_refused(write_raster: WriteRaster, place: int) -> None:
    path = write_raster("stack.tif", np.stack([numbers(8, 8), numbers(8, 8)]))
    with pytest.raises(RejectedInput) as caught:
        read_tile(scene(band(RED, path, band=place, part="/stack")))
    assert caught.value.code == "band-missing"
    assert caught.value.faults[0].pointer == "/stack"


def test_lossless_jpeg2000_comes_back_as_written(write_raster: WriteRaster) -> None:
    red, quality = numbers(300, 280), numbers(150, 140, "uint8")
    source = scene(
        band(RED, write_raster("red.jp2", red, BLOCKXSIZE=128, BLOCKYSIZE=128)),
        quality=BandSource(
            role="quality",
            path=write_raster("scl.jp2", quality, transform=grid_transform(20.0)),
            scaling=None,
            nodata=0.0,
        ),
    )
    tile = read_tile(source)
    np.testing.assert_array_equal(tile["red"], red)
    np.testing.assert_array_equal(tile["quality"], np.repeat(np.repeat(quality, 2, 0), 2, 1))


def test_rows_that_run_north_are_read_as_they_lie(write_raster: WriteRaster) -> None:
    up = Affine(10.0, 0.0, 500_000.0, 0.0, 10.0, 5_400_000.0)
    coarse_up = Affine(20.0, 0.0, 500_000.0, 0.0, 20.0, 5_400_000.0)
    red, nir = numbers(80, 90), numbers(40, 45)
    source = scene(
        band(RED, write_raster("red.tif", red, transform=up)),
        band(NIR, write_raster("nir.tif", nir, transform=coarse_up)),
    )
    blocks = list(read_blocks(source, all_cells(source), block_bytes=10_000))
    np.testing.assert_array_equal(put_together(blocks, "red", red.shape), red)
    np.testing.assert_array_equal(
        put_together(blocks, "nir", red.shape), np.repeat(np.repeat(nir, 2, 0), 2, 1)
    )
    assert float(blocks[0]["y"][0]) == 5_400_005.0


def test_damaged_pixels_fail_with_one_sentence(write_raster: WriteRaster) -> None:
    path = write_raster("red.tif", numbers(256, 256), compress="deflate")
    content = bytearray(path.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 4000] = bytes(4000)
    path.write_bytes(content)
    with pytest.raises(RejectedInput) as caught:
        read_tile(scene(band(RED, path)))
    assert caught.value.code == "unreadable-pixels"
    assert caught.value.faults[0].pointer == "/red"
    assert path.name not in caught.value.detail


def test_a_file_replaced_by_another_kind_is_not_opened(
    write_raster: WriteRaster, tmp_path: Path
) -> None:
    path = write_raster("red.tif", numbers(16, 16))
    path.write_text("<VRTDataset rasterXSize='8' rasterYSize='8'/>", encoding="ascii")
    with pytest.raises(RejectedInput) as caught:
        read_tile(scene(band(RED, path)))
    assert caught.value.code == "not-a-raster"
    assert str(tmp_path) not in caught.value.detail


def test_bands_of_two_systems_are_not_read_together(write_raster: WriteRaster) -> None:
    source = scene(
        band(RED, write_raster("red.tif", numbers(16, 16))),
        band(NIR, write_raster("nir.tif", numbers(16, 16), crs="EPSG:32634")),
    )
    with pytest.raises(RejectedInput) as caught:
        list(read_blocks(source, np.array([0], dtype=np.int64)))
    assert caught.value.code == "crs-differs"


def test_a_scene_names_scalings_and_a_nodata_class(tmp_path: Path) -> None:
    unscaled = BandSource(role=RED, path=tmp_path, scaling=None)
    with pytest.raises(ValueError, match="scaling"):
        scene(unscaled)
    with pytest.raises(ValueError, match="bands"):
        scene()
    with pytest.raises(ValueError, match="nodata class"):
        scene(band(RED, tmp_path), quality=BandSource(role="quality", path=tmp_path, scaling=None))
