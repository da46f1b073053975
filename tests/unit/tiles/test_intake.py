"""What a good header says, and what a scene's files must have in common.

Footprints are checked against pyproj; headers against what rasterio was asked to write.
"""

from dataclasses import replace

import numpy as np
import pytest
from affine import Affine
from pyproj import Transformer

from service.errors import RejectedInput
from service.tiles.intake import Header, check_together, footprint, inspect
from service.zonal.grid import Grid
from tests.unit.tiles.conftest import WriteRaster, grid_transform

NUMBERS = np.arange(40 * 50, dtype=np.uint16).reshape(40, 50)


def header_of(grid: Grid) -> Header:
    return Header(
        grid=grid,
        count=1,
        dtypes=("uint16",),
        nodata=(None,),
        driver="GTiff",
        block_shape=(1, grid.shape[1]),
    )


def grid_at(x: float, *, cell: float = 10.0, crs: str = "EPSG:32633") -> Grid:
    return Grid(crs=crs, transform=grid_transform(cell, x=x), shape=(100, 100))


@pytest.mark.parametrize("dtype", ["uint8", "int8", "uint16", "int16", "uint32", "int32",
                                   "float32", "float64"])  # fmt: skip
def test_a_geotiff_header_is_read_in_full(write_raster: WriteRaster, dtype: str) -> None:
    path = write_raster("a.tif", NUMBERS.astype(dtype), nodata=7, blockysize=8)
    assert inspect(path, pointer="/red") == Header(
        grid=Grid(crs="EPSG:32633", transform=grid_transform(10.0), shape=(40, 50)),
        count=1,
        dtypes=(dtype,),
        nodata=(7.0,),
        driver="GTiff",
        block_shape=(8, 50),
    )


def test_a_tiled_stack_is_read_in_full(write_raster: WriteRaster) -> None:
    path = write_raster(
        "a.tif", np.stack([NUMBERS] * 3), tiled=True, blockxsize=32, blockysize=16,
        compress="deflate", interleave="band", BIGTIFF="YES", ENDIANNESS="BIG",
    )  # fmt: skip
    header = inspect(path, pointer="/stack")
    assert (header.count, header.block_shape, header.nodata) == (3, (16, 32), (None,) * 3)
    assert header.dtypes == ("uint16",) * 3


def test_a_jpeg2000_header_is_read_in_full(write_raster: WriteRaster) -> None:
    header = inspect(write_raster("a.jp2", NUMBERS), pointer="/red")
    assert (header.driver, header.dtypes, header.count) == ("JP2OpenJPEG", ("uint16",), 1)
    assert header.grid == Grid(
        crs="EPSG:32633", transform=grid_transform(10.0), shape=NUMBERS.shape
    )


def test_a_cloud_optimised_geotiff_is_accepted(write_raster: WriteRaster) -> None:
    big = np.random.default_rng(0).integers(0, 9, (600, 700)).astype(np.uint8)
    path = write_raster("a.tif", big, driver="COG", BLOCKSIZE=128, COMPRESS="DEFLATE")
    header = inspect(path, pointer="/red")
    assert (header.grid.shape, header.block_shape) == ((600, 700), (128, 128))


def test_a_file_with_empty_blocks_is_accepted(write_raster: WriteRaster) -> None:
    path = write_raster(
        "a.tif", np.zeros((64, 64), np.uint16), SPARSE_OK="TRUE", nodata=0, blockysize=8
    )
    assert inspect(path, pointer="/red").grid.shape == (64, 64)


def test_a_reference_system_without_code_is_kept_as_text(write_raster: WriteRaster) -> None:
    own = "+proj=laea +lat_0=40 +lon_0=11 +datum=WGS84 +units=m +no_defs"
    grid = inspect(write_raster("a.tif", NUMBERS, crs=own), pointer="/red").grid
    assert "Lambert" in grid.crs
    assert footprint(grid) == footprint(header_of(grid))


def test_rows_may_run_north(write_raster: WriteRaster) -> None:
    up = Affine(10.0, 0.0, 500_000.0, 0.0, 10.0, 5_400_000.0)
    grid = inspect(write_raster("a.tif", NUMBERS, transform=up), pointer="/red").grid
    assert grid.bounds == (500_000.0, 5_400_000.0, 500_500.0, 5_400_400.0)


def test_a_footprint_holds_every_corner_of_the_grid() -> None:
    grid = Grid(crs="EPSG:32633", transform=grid_transform(10.0, x=300_000.0), shape=(10980, 10980))
    to_degrees = Transformer.from_crs("EPSG:32633", "EPSG:4326", always_xy=True)
    west, south, east, north = footprint(grid)
    xmin, ymin, xmax, ymax = grid.bounds
    edge = np.linspace(0.0, 1.0, 1001)
    xs, ys = xmin + edge * (xmax - xmin), ymin + edge * (ymax - ymin)
    lons, lats = to_degrees.transform(
        np.concatenate([xs, xs, np.full_like(ys, xmin), np.full_like(ys, xmax)]),
        np.concatenate([np.full_like(xs, ymin), np.full_like(xs, ymax), ys, ys]),
    )
    expected = (lons.min(), lats.min(), lons.max(), lats.max())
    # Edges are sampled at 21 points by the library: within 30 m here.
    assert (west, south, east, north) == pytest.approx(expected, abs=3e-4)


def test_files_of_one_area_and_system_go_together() -> None:
    grids = {"/red": grid_at(500_000.0), "/swir16": grid_at(500_090.0, cell=20.0)}
    check_together({pointer: header_of(grid) for pointer, grid in grids.items()})
    check_together({})


def test_a_part_in_another_system_is_named() -> None:
    headers = {
        "/red": header_of(grid_at(500_000.0)),
        "/nir": header_of(grid_at(500_000.0, crs="EPSG:32634")),
        "/green": header_of(grid_at(500_000.0)),
    }
    with pytest.raises(RejectedInput) as caught:
        check_together(headers)
    assert caught.value.code == "crs-differs"
    assert [fault.pointer for fault in caught.value.faults] == ["/nir"]


@pytest.mark.parametrize("x", [501_000.0, 499_000.0, 600_000.0])
def test_a_part_that_does_not_overlap_is_named(x: float) -> None:
    headers = {"/red": header_of(grid_at(500_000.0)), "/nir": header_of(grid_at(x))}
    with pytest.raises(RejectedInput) as caught:
        check_together(headers)
    assert caught.value.code == "no-overlap"
    assert [fault.pointer for fault in caught.value.faults] == ["/nir"]


def test_a_code_and_its_text_are_one_system() -> None:
    coded = header_of(grid_at(500_000.0))
    from_text = replace(coded, grid=replace(coded.grid, crs=TEXT_OF_32633))
    check_together({"/red": coded, "/nir": from_text})


TEXT_OF_32633 = Transformer.from_crs("EPSG:32633", "EPSG:4326").source_crs.to_wkt()
