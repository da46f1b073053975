"""Reading: what was written comes back, cell by cell, in strips of bounded size.

The expected numbers are the arrays that were written; on other grids they are worked out
from coordinates, cell centre by cell centre, without the service's own grid arithmetic.
"""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from affine import Affine
from numpy.typing import NDArray

from service.errors import RejectedInput
from service.spectral.roles import BandRole
from service.tiles.reading import BandSource, SceneSource, measuring_grid
from tests.unit.tiles.cells import AS_STORED, band_image, layer_image, plan_for, strips_of
from tests.unit.tiles.conftest import WriteRaster, grid_transform

RED, NIR, SWIR = BandRole.RED, BandRole.NIR, BandRole.SWIR16
RNG = np.random.default_rng(20)
TILED = {"tiled": True, "blockxsize": 32, "blockysize": 16, "compress": "deflate"}
CLOUD, CLEAR = 9, 4


def numbers(rows: int, cols: int, dtype: str = "uint16") -> NDArray[Any]:
    return RNG.integers(1, 200, (rows, cols)).astype(dtype)


def band(role: BandRole, path: Path, **more: Any) -> BandSource:
    return BandSource(role=role, path=path, scaling=AS_STORED, **more)


def scene(*bands: BandSource, quality: BandSource | None = None) -> SceneSource:
    return SceneSource(bands=bands, quality=quality)


def quality_in(path: Path, **more: Any) -> BandSource:
    return BandSource(role="quality", path=path, scaling=None, nodata=0.0, **more)


def is_clear(classes: NDArray[Any]) -> NDArray[np.bool_]:
    return np.asarray(classes == CLEAR)


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


@pytest.mark.parametrize("compress", ["none", "deflate", "lzw", "zstd"])
@pytest.mark.parametrize(
    "blocks",
    [
        {"tiled": True, "blockxsize": 32, "blockysize": 16},
        {"blockysize": 1},
        {"blockysize": 16},
        {"tiled": True, "blockxsize": 256, "blockysize": 256},
    ],
)
def test_strips_put_together_are_what_was_written(
    write_raster: WriteRaster, blocks: dict[str, Any], compress: str
) -> None:
    red, nir = numbers(150, 130), numbers(150, 130, "float32")
    source = scene(
        band(RED, write_raster("red.tif", red, compress=compress, **blocks)),
        band(NIR, write_raster("nir.tif", nir, **TILED)),
    )
    plan = plan_for(source)
    strips = strips_of(source, plan, strip_cells=3_000)
    np.testing.assert_array_equal(band_image(strips, plan, RED), red)
    np.testing.assert_array_equal(band_image(strips, plan, NIR), nir)
    assert [strip.first for strip in strips[1:]] == [strip.last for strip in strips[:-1]]
    assert len(strips) == (1 if blocks.get("blockysize") == 256 else 9)
    (whole,) = strips_of(source, plan)
    np.testing.assert_array_equal(band_image([whole], plan, RED), red)


@pytest.mark.parametrize(
    "dtype", ["uint8", "int8", "uint16", "int16", "uint32", "int32", "float32", "float64"]
)
def test_numbers_of_any_type_are_kept_as_they_are_stored(
    write_raster: WriteRaster, dtype: str
) -> None:
    stored = RNG.integers(1, 100, (40, 50)).astype(dtype)
    stored[3, 4] = 0
    source = scene(band(RED, write_raster("red.tif", stored, **TILED), nodata=0.0))
    plan = plan_for(source)
    expected = np.where(stored == 0, np.nan, stored.astype(float))
    np.testing.assert_array_equal(band_image(strips_of(source, plan), plan, RED), expected)


def test_only_blocks_that_hold_wanted_cells_are_read(write_raster: WriteRaster) -> None:
    path = write_raster("red.tif", numbers(400, 90), **TILED)
    damage(path, 0.5)
    source = scene(band(RED, path))
    outer = plan_for(source, (0, 20, 0, 90), (390, 400, 0, 90))
    assert len(strips_of(source, outer)) == 1
    with pytest.raises(RejectedInput):
        strips_of(source)


def test_a_plan_without_cells_reads_nothing(write_raster: WriteRaster) -> None:
    path = write_raster("red.tif", numbers(40, 90), **TILED)
    damage(path, 0.5)
    source = scene(band(RED, path))
    assert strips_of(source, plan_for(source, (50, 60, 0, 9))) == []


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
    plan = plan_for(source)
    at = grid_transform(10.0)
    for strips in (strips_of(source, plan), strips_of(source, plan, strip_cells=500)):
        for role, expected in (
            (RED, fine.astype(float)),
            (NIR, np.repeat(np.repeat(half, 2, 0), 2, 1)),
            (SWIR, nearest(odd, odd_at, fine.shape, at)),
        ):
            assert np.isfinite(expected).all()
            np.testing.assert_array_equal(band_image(strips, plan, role), expected)


@pytest.mark.parametrize("nodata", [0.0, None, -9999.0])
@pytest.mark.parametrize("dtype", ["uint16", "int32", "float32"])
def test_outside_a_bands_extent_it_has_no_number(
    write_raster: WriteRaster, dtype: str, nodata: float | None
) -> None:
    fine, part = numbers(60, 60), numbers(10, 8, dtype)
    part_at = grid_transform(30.0, x=500_145.0, y=5_399_700.0)
    source = scene(
        band(RED, write_raster("red.tif", fine, **TILED)),
        band(NIR, write_raster("nir.tif", part, transform=part_at), nodata=nodata),
    )
    expected = nearest(part, part_at, fine.shape, grid_transform(10.0))
    assert np.isnan(expected).any()
    plan = plan_for(source)
    for strips in (strips_of(source, plan), strips_of(source, plan, strip_cells=500)):
        np.testing.assert_array_equal(band_image(strips, plan, NIR), expected)


@pytest.mark.parametrize("interleave", ["pixel", "band"])
def test_bands_of_a_stack_are_counted_from_one(write_raster: WriteRaster, interleave: str) -> None:
    stack = np.stack([numbers(70, 80, "uint8") for _ in range(4)])
    path = write_raster("stack.tif", stack, interleave=interleave, **TILED)
    source = scene(
        band(NIR, path, band=3), band(RED, path, band=1), quality=quality_in(path, band=4)
    )
    plan = plan_for(source)
    strips = strips_of(source, plan, strip_cells=500)
    assert len(strips) > 3
    for role, index in ((RED, 0), (NIR, 2)):
        np.testing.assert_array_equal(band_image(strips, plan, role), stack[index])
    classes = layer_image(strips, plan, lambda strip: strip.classes)
    np.testing.assert_array_equal(classes, stack[3])


@pytest.mark.parametrize("place", [0, 3])
def test_a_band_that_the_file_lacks_is_refused(write_raster: WriteRaster, place: int) -> None:
    path = write_raster("stack.tif", np.stack([numbers(8, 8), numbers(8, 8)]))
    with pytest.raises(RejectedInput) as caught:
        strips_of(scene(band(RED, path, band=place, part="/stack")))
    assert caught.value.code == "band-missing"
    assert caught.value.faults[0].pointer == "/stack"


def test_lossless_jpeg2000_comes_back_as_written(write_raster: WriteRaster) -> None:
    red, quality = numbers(300, 280), numbers(150, 140, "uint8")
    source = scene(
        band(RED, write_raster("red.jp2", red, BLOCKXSIZE=128, BLOCKYSIZE=128)),
        quality=quality_in(write_raster("scl.jp2", quality, transform=grid_transform(20.0))),
    )
    plan = plan_for(source)
    strips = strips_of(source, plan, strip_cells=30_000)
    assert len(strips) == 3
    np.testing.assert_array_equal(band_image(strips, plan, RED), red)
    classes = layer_image(strips, plan, lambda strip: strip.classes)
    np.testing.assert_array_equal(classes, np.repeat(np.repeat(quality, 2, 0), 2, 1))


@pytest.mark.parametrize("coarse_runs_north", [True, False])
def test_rows_that_run_north_are_read_as_they_lie(
    write_raster: WriteRaster, *, coarse_runs_north: bool
) -> None:
    up = Affine(10.0, 0.0, 500_000.0, 0.0, 10.0, 5_400_000.0)
    coarse_up = Affine(20.0, 0.0, 500_000.0, 0.0, 20.0, 5_400_000.0)
    red, nir = numbers(80, 90), numbers(40, 45)
    coarse = (
        write_raster("nir.tif", nir, transform=coarse_up, blockysize=2)
        if coarse_runs_north
        else write_raster(
            "nir.tif", nir[::-1], transform=grid_transform(20.0, y=5_400_800.0), blockysize=2
        )
    )
    source = scene(
        band(RED, write_raster("red.tif", red, transform=up, **TILED)), band(NIR, coarse)
    )
    plan = plan_for(source)
    strips = strips_of(source, plan, strip_cells=500)
    assert len(strips) == 5
    np.testing.assert_array_equal(band_image(strips, plan, RED), red)
    expected = np.repeat(np.repeat(nir, 2, 0), 2, 1)
    np.testing.assert_array_equal(band_image(strips, plan, NIR), expected)


def damage(path: Path, where: float) -> None:
    """Break some bytes of a file, in the middle or elsewhere."""
    content = bytearray(path.read_bytes())
    middle = int(len(content) * where)
    content[middle : middle + 400] = bytes(400)
    path.write_bytes(content)


def cloudy(write_raster: WriteRaster, clouds: NDArray[np.bool_], coarse: int = 1) -> SceneSource:
    """A scene of three bands, one of 20 m, under some clouds."""
    rows, cols = clouds.shape[0] * coarse, clouds.shape[1] * coarse
    classes = np.where(clouds, CLOUD, CLEAR).astype(np.uint8)
    swir = write_raster(
        "swir.tif", numbers(rows // 2, cols // 2), transform=grid_transform(20.0), **TILED
    )
    return scene(
        band(RED, write_raster("red.tif", numbers(rows, cols), **TILED)),
        band(NIR, write_raster("nir.tif", numbers(rows, cols), **TILED)),
        band(SWIR, swir, nodata=5.0),
        quality=quality_in(
            write_raster("scl.tif", classes, transform=grid_transform(10.0 * coarse), **TILED)
        ),
    )


def test_blocks_under_cloud_are_not_decoded(write_raster: WriteRaster) -> None:
    clouds = np.zeros((160, 96), dtype=bool)
    clouds[60:100] = True
    source = cloudy(write_raster, clouds)
    # One band is asked whether a cell has data at all, the coarsest: it stays as it is, and has
    # data everywhere, or the next one would be asked.
    source = replace(source, bands=(*source.bands[:2], replace(source.bands[2], nodata=None)))
    for sound in source.bands[:2]:
        damage(sound.path, 0.5)
    (strip,) = strips_of(source, may_count=is_clear)
    assert strip.seen.all()
    with pytest.raises(RejectedInput):
        strips_of(source)


@pytest.mark.parametrize("coarse", [1, 2])
@pytest.mark.parametrize("strip_cells", [10**6, 700])
def test_what_may_count_is_read_whatever_is_left_out(
    write_raster: WriteRaster, coarse: int, strip_cells: int
) -> None:
    clouds = np.kron(RNG.random((5, 4)) < 0.6, np.ones((16 // coarse, 32 // coarse))) > 0
    source = cloudy(write_raster, clouds, coarse)
    plan = plan_for(source)
    everything = strips_of(source, plan)
    frugal = strips_of(source, plan, may_count=is_clear, strip_cells=strip_cells)
    clear = ~np.kron(clouds, np.ones((coarse, coarse), dtype=bool))
    for role in (RED, NIR, SWIR):
        whole, part = (band_image(some, plan, role) for some in (everything, frugal))
        np.testing.assert_array_equal(part[clear], whole[clear])
        left_out = np.isnan(part) & ~np.isnan(whole)
        assert left_out.any() == (role != SWIR)
    for seen in (everything, frugal):
        assert all(strip.seen.all() for strip in seen)


def test_damaged_pixels_fail_with_one_sentence(write_raster: WriteRaster) -> None:
    path = write_raster("red.tif", numbers(256, 256), compress="deflate")
    content = bytearray(path.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 4000] = bytes(4000)
    path.write_bytes(content)
    with pytest.raises(RejectedInput) as caught:
        strips_of(scene(band(RED, path)))
    assert caught.value.code == "unreadable-pixels"
    assert caught.value.faults[0].pointer == "/red"
    assert path.name not in caught.value.detail


def test_a_file_replaced_by_another_kind_is_not_opened(
    write_raster: WriteRaster, tmp_path: Path
) -> None:
    path = write_raster("red.tif", numbers(16, 16))
    path.write_text("<VRTDataset rasterXSize='8' rasterYSize='8'/>", encoding="ascii")
    with pytest.raises(RejectedInput) as caught:
        strips_of(scene(band(RED, path)))
    assert caught.value.code == "not-a-raster"
    assert str(tmp_path) not in caught.value.detail


def test_bands_of_two_systems_are_not_read_together(write_raster: WriteRaster) -> None:
    source = scene(
        band(RED, write_raster("red.tif", numbers(16, 16))),
        band(NIR, write_raster("nir.tif", numbers(16, 16), crs="EPSG:32634")),
    )
    with pytest.raises(RejectedInput) as caught:
        strips_of(source, plan_for(scene(source.bands[0])))
    assert caught.value.code == "crs-differs"


def test_a_scene_names_scalings_and_a_nodata_class(tmp_path: Path) -> None:
    unscaled = BandSource(role=RED, path=tmp_path, scaling=None)
    with pytest.raises(ValueError, match="scaling"):
        scene(unscaled)
    with pytest.raises(ValueError, match="bands"):
        scene()
    with pytest.raises(ValueError, match="nodata class"):
        scene(band(RED, tmp_path), quality=BandSource(role="quality", path=tmp_path, scaling=None))
