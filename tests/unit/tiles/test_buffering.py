"""Cells near cloud, on grids that a person can check and cut into blocks in any way."""

from typing import Any

import numpy as np
import pytest
from affine import Affine
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.typing import NDArray

from service.spectral.gathered import Gathered
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.buffering import CloudBuffer
from service.tiles.parts import Area
from service.tiles.reading import BandSource, SceneSource
from tests.unit.tiles.cells import image, layer_image, plan_for, strips_of
from tests.unit.tiles.conftest import WriteRaster, grid_transform

CLOUD = 9
TILED = {"tiled": True, "blockxsize": 16, "blockysize": 16, "compress": "deflate"}


def buffer(cells: int) -> CloudBuffer:
    return CloudBuffer(cells=cells, is_cloud=lambda numbers: numbers == CLOUD)


def by_hand(clouds: NDArray[np.bool_], cells: int) -> NDArray[np.bool_]:
    """Near is what has a cloud in the square around it, cell by cell."""
    rows, cols = clouds.shape
    return np.array(
        [
            [
                clouds[max(r - cells, 0) : r + cells + 1, max(c - cells, 0) : c + cells + 1].any()
                for c in range(cols)
            ]
            for r in range(rows)
        ],
        dtype=bool,
    ).reshape(clouds.shape)


def scene(write_raster: WriteRaster, quality: NDArray[Any], **more: Any) -> SceneSource:
    """A red band of 10 m cells on 60 by 80, and a quality layer."""
    red = write_raster("red.tif", np.ones((60, 80), np.uint16), **TILED)
    layer = write_raster("quality.tif", quality, **TILED, **more)
    return SceneSource(
        bands=(BandSource(role=BandRole.RED, path=red, scaling=Scaling(scale=1, offset=0)),),
        quality=BandSource(role="quality", path=layer, scaling=None, nodata=0),
        cloud_buffer=buffer(2),
    )


def some_clouds(rows: int, cols: int) -> NDArray[np.uint8]:
    random = np.random.default_rng(7)
    return np.where(random.random((rows, cols)) < 0.02, CLOUD, 4).astype(np.uint8)


@given(hnp.arrays(bool, hnp.array_shapes(min_dims=2, max_dims=2, max_side=9)), st.integers(1, 12))
def test_near_is_the_square_around_each_cloud(clouds: NDArray[np.bool_], cells: int) -> None:
    numbers = np.where(clouds, CLOUD, 4)
    np.testing.assert_array_equal(buffer(cells).near(numbers), by_hand(clouds, cells))


def test_what_decides_about_an_area_ends_at_the_layer() -> None:
    area = Area(row0=1, row1=4, col0=6, col1=9)
    assert buffer(3).around(area, (20, 10)) == Area(row0=0, row1=7, col0=3, col1=10)


def test_a_buffer_without_cells_is_none() -> None:
    with pytest.raises(ValueError, match="at least one"):
        buffer(0)


def near_cloud(source: SceneSource, strip_cells: int = 10**6) -> NDArray[np.float64]:
    """Which cells of the scene are near cloud."""
    plan = plan_for(source)
    strips = strips_of(source, plan, strip_cells=strip_cells)

    def near(strip: Gathered) -> NDArray[np.bool_]:
        assert strip.near_cloud is not None
        return strip.near_cloud

    return image(strips, plan, near)


@pytest.mark.parametrize("coarse", [1, 2])
@pytest.mark.parametrize("strip_cells", [10**6, 1_000])
def test_strips_know_of_clouds_beyond_their_edges(
    write_raster: WriteRaster, coarse: int, strip_cells: int
) -> None:
    quality = some_clouds(60 // coarse, 80 // coarse)
    source = scene(write_raster, quality, transform=grid_transform(10.0 * coarse))
    near = by_hand(quality == CLOUD, 2)
    expected = np.repeat(np.repeat(near, coarse, 0), coarse, 1)
    assert 0.1 < expected.mean() < 0.9

    np.testing.assert_array_equal(near_cloud(source, strip_cells), expected)


def test_a_parcel_knows_of_clouds_beyond_its_block(write_raster: WriteRaster) -> None:
    quality = np.full((60, 80), 4, np.uint8)
    quality[15, 16] = CLOUD
    source = scene(write_raster, quality)
    plan = plan_for(source, (16, 18, 14, 16))

    (strip,) = strips_of(source, plan)

    # Rows 16 and 17, columns 14 and 15, of which the cloud is within two of each.
    assert strip.near_cloud is not None
    assert strip.near_cloud.tolist() == [True, True, True, True]


def test_where_the_quality_layer_ends_nothing_is_near_cloud(write_raster: WriteRaster) -> None:
    quality = np.full((30, 80), CLOUD, np.uint8)
    near = near_cloud(scene(write_raster, quality))
    assert near[:30].all()
    assert not near[30:].any()


def test_rows_of_the_quality_layer_may_run_north(write_raster: WriteRaster) -> None:
    quality = some_clouds(60, 80)
    up = Affine(10.0, 0.0, 500_000.0, 0.0, 10.0, 5_400_000.0 - 600.0)
    near = near_cloud(scene(write_raster, quality[::-1], transform=up))
    np.testing.assert_array_equal(near, by_hand(quality == CLOUD, 2))


def test_a_layer_in_the_bands_own_file_is_buffered_too(write_raster: WriteRaster) -> None:
    quality = some_clouds(60, 80)
    stack = np.stack([np.ones((60, 80)), quality]).astype(np.uint16)
    path = write_raster("stack.tif", stack, **TILED)
    source = SceneSource(
        bands=(BandSource(role=BandRole.RED, path=path, scaling=Scaling(scale=1, offset=0)),),
        quality=BandSource(role="quality", path=path, band=2, scaling=None, nodata=0),
        cloud_buffer=buffer(1),
    )
    plan = plan_for(source)
    np.testing.assert_array_equal(near_cloud(source), by_hand(quality == CLOUD, 1))
    classes = layer_image(strips_of(source, plan), plan, lambda strip: strip.classes)
    np.testing.assert_array_equal(classes, quality)


def test_without_a_buffer_a_strip_does_not_speak_of_clouds(write_raster: WriteRaster) -> None:
    red = write_raster("red.tif", np.ones((20, 20), np.uint16))
    bits = write_raster("bits.tif", np.full((20, 20), 8, np.uint16))
    source = SceneSource(
        bands=(
            BandSource(
                role=BandRole.RED, path=red, scaling=Scaling(scale=1, offset=0), saturation_bit=3
            ),
        ),
        saturation=BandSource(role="saturation", path=bits, scaling=None, nodata=0),
    )
    (strip,) = strips_of(source)
    assert strip.near_cloud is None
    assert strip.bits is not None
    assert (strip.bits.numbers == 8).all()
    assert strip.saturated.all()
    assert not strip.seen.any()
