"""What must hold for the observation of any scene and any parcels."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import shapely
from affine import Affine
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from hypothesis import assume, given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from service.observe import LOOK_FIGURES, observe
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.zonal.coverage import MIN_COVERAGE, zones_on
from service.zonal.grid import Grid
from service.zonal.plan import plan_of
from tests.scenes_in_memory import ArrayScene

ROWS, COLS = 8, 10
LEFT, TOP = 500_000.0, 5_400_000.0
GRID = Grid(crs="EPSG:32633", transform=Affine(10, 0, LEFT, 0, -10, TOP), shape=(ROWS, COLS))
ROLES = (BandRole.GREEN, BandRole.RED, BandRole.NIR)
CHOSEN = (INDICES["ndvi"], INDICES["evi2"], INDICES["ndwi"])
SCALE, OFFSET = 1e-4, -0.1
_ROW, _COL = np.divmod(np.arange(ROWS * COLS), COLS)
CELLS = shapely.box(LEFT + 10 * _COL, TOP - 10 * _ROW - 10, LEFT + 10 * _COL + 10, TOP - 10 * _ROW)
SHARES = [LOOK_FIGURES.index(name) for name in LOOK_FIGURES if name not in ("pixels", "water")]
KEPT = sorted(SCL.rules["clear"].keep)

# Nodata, a reflectance of nothing, of less than nothing, of usual surfaces, saturated.
NUMBERS = st.one_of(st.sampled_from([0, 1_000, 950, 65_535]), st.integers(1_050, 9_000))


@st.composite
def scenes(draw):
    bands = {role: draw(hnp.arrays(np.uint16, (ROWS, COLS), elements=NUMBERS)) for role in ROLES}
    quality = draw(hnp.arrays(np.uint8, (ROWS, COLS), elements=st.integers(0, 12)))
    return bands, quality


@st.composite
def parcels(draw):
    """An irregular parcel on the scene or over its edge."""
    parts = draw(st.lists(st.floats(0.3, 1.0), min_size=3, max_size=9))
    angles = np.linspace(0, 2 * np.pi, len(parts), endpoint=False)
    reach = draw(st.floats(1, 45)) * np.array(parts)
    x, y = LEFT + draw(st.floats(0, 100)), TOP - draw(st.floats(0, 80))
    return shapely.Polygon(
        np.column_stack([x + reach * np.cos(angles), y + reach * np.sin(angles)])
    )


SOME_PARCELS = st.lists(parcels(), min_size=1, max_size=5)


def as_scene(scene, *, as_type=np.uint16):
    bands, quality = scene
    numbers = {role: numbers.astype(as_type) for role, numbers in bands.items()}
    return ArrayScene(bands=numbers, quality=quality, scale=SCALE, offset=OFFSET)


def figures(scene, geometries, *, cuts=(), grid=GRID):
    plan = plan_of(grid, zones_on(grid, geometries))
    # A share may be too small for single precision once it is squared, nothing else.
    with np.errstate(all="raise", under="ignore"):
        return observe(
            scene.strips(plan, cuts), plan, roles=ROLES, indices=CHOSEN, quality=SCL, rule="clear"
        )


@given(scenes(), SOME_PARCELS, st.sets(st.integers(1, ROWS * COLS), max_size=6))
def test_how_a_scene_is_cut_into_strips_does_not_matter(scene, geometries, cuts):
    in_parts = figures(as_scene(scene), geometries, cuts=cuts)

    np.testing.assert_array_equal(in_parts.figures, figures(as_scene(scene), geometries).figures)


@given(scenes(), SOME_PARCELS, st.data())
def test_the_order_of_the_parcels_does_not_matter(scene, geometries, data):
    order = data.draw(st.permutations(range(len(geometries))))

    shuffled = figures(as_scene(scene), [geometries[place] for place in order]).figures

    np.testing.assert_array_equal(shuffled, figures(as_scene(scene), geometries).figures[order])


@given(scenes(), SOME_PARCELS)
def test_several_threads_at_once_give_the_same_figures(scene, geometries):
    alone = figures(as_scene(scene), geometries).figures

    with ThreadPoolExecutor(4) as pool:
        several = list(pool.map(lambda _: figures(as_scene(scene), geometries).figures, range(4)))

    for one in several:
        np.testing.assert_array_equal(one, alone)


@given(scenes(), SOME_PARCELS, st.sampled_from([np.int32, np.uint32, np.float32, np.float64]))
def test_the_type_that_holds_the_numbers_does_not_matter(scene, geometries, as_type):
    other = figures(as_scene(scene, as_type=as_type), geometries).figures

    np.testing.assert_array_equal(other, figures(as_scene(scene), geometries).figures)


@given(scenes(), SOME_PARCELS)
def test_a_grid_whose_rows_run_north_gives_the_same_figures(scene, geometries):
    bands, quality = scene
    upside_down = {role: numbers[::-1] for role, numbers in bands.items()}, quality[::-1]
    bottom = TOP - 10 * ROWS
    turned = Grid(crs=GRID.crs, transform=Affine(10, 0, LEFT, 0, 10, bottom), shape=(ROWS, COLS))
    # A sliver just at the least coverage may count on one side and not on the other.
    shares = shapely.area(shapely.intersection(CELLS[:, np.newaxis], geometries)) / 100
    assume(not np.any(np.abs(shares / MIN_COVERAGE - 1) < 1e-3))

    turned_figures = figures(as_scene(upside_down), geometries, grid=turned)

    np.testing.assert_allclose(
        turned_figures.figures, figures(as_scene(scene), geometries).figures, rtol=1e-5, atol=1e-6
    )


@given(scenes(), SOME_PARCELS)
def test_the_shares_add_up_to_the_whole_parcel(scene, geometries):
    shares = figures(as_scene(scene), geometries).figures[:, SHARES]

    np.testing.assert_allclose(shares.sum(axis=1, dtype=np.float64), 1, atol=1e-6)
    assert np.all((shares >= 0) & (shares <= 1))


@given(scenes(), SOME_PARCELS)
def test_every_mean_lies_between_its_extremes_and_every_count_within_the_look(scene, geometries):
    seen = figures(as_scene(scene), geometries)
    by_name = dict(zip(seen.columns, seen.figures.T, strict=True))

    for index in CHOSEN:
        known = by_name[f"{index.id}.pixels"] > 0
        ladder = [
            by_name[f"{index.id}.{stat}"][known] for stat in ("min", "p10", "p50", "p90", "max")
        ]
        assert np.all(np.diff(ladder, axis=0) >= 0)
        mean = by_name[f"{index.id}.mean"]
        assert np.all((ladder[0] <= mean[known]) & (mean[known] <= ladder[-1]))
        assert np.isnan(mean[~known]).all()
        assert np.all(by_name[f"{index.id}.pixels"] <= by_name["clear.pixels"])


@given(scenes(), SOME_PARCELS, hnp.arrays(bool, (ROWS, COLS)), st.integers(0, 12))
def test_masking_only_removes_pixels(scene, geometries, masked, by):
    bands, quality = scene
    before = figures(as_scene(scene), geometries)
    covered = np.where(masked & ~np.isin(by, KEPT), np.uint8(by), quality)

    after = figures(as_scene((bands, covered)), geometries)

    for name, had, has in zip(before.columns, before.figures.T, after.figures.T, strict=True):
        if name.endswith(("valid_share", "pixels")):
            assert np.all(has <= had)
        if name.endswith(".min"):
            assert np.all((has >= had) | np.isnan(has))
        if name.endswith(".max"):
            assert np.all((has <= had) | np.isnan(has))


@given(scenes(), SOME_PARCELS, st.sampled_from([0, 1, 3, 8, 9, 10, 11, 12]))
def test_a_fully_masked_parcel_is_unknown_and_never_zero(scene, geometries, by):
    bands, quality = scene

    seen = figures(as_scene((bands, np.full_like(quality, by))), geometries)

    for name, figure in zip(seen.columns, seen.figures.T, strict=True):
        if name.endswith(("valid_share", "pixels")):
            assert np.all(figure == 0)
        elif not name.startswith("clear."):
            assert np.isnan(figure).all()


@given(scenes(), parcels())
def test_the_figures_are_those_of_the_general_zonal_library(scene, geometry):
    # Oracle: exactextract over an index image computed here from the published formulas
    # (Rouse et al. 1974; Jiang et al. 2008; McFeeters 1996), with the same minimum coverage.
    bands, quality = scene
    numbers = {
        role: np.where(np.isin(bands[role], [0, 65_535]), np.nan, bands[role]) for role in ROLES
    }
    green, red, nir = (
        np.where(np.isin(quality, KEPT), numbers[role] * SCALE + OFFSET, np.nan) for role in ROLES
    )

    shares = shapely.area(shapely.intersection(CELLS, geometry)) / 100
    assume(not np.any(np.abs(shares / MIN_COVERAGE - 1) < 0.5))

    def ratio(top, bottom):
        return top / np.where(np.abs(bottom) < 1e-6, np.nan, bottom)

    images = {
        "ndvi": ratio(nir - red, nir + red),
        "evi2": ratio(2.5 * (nir - red), nir + 2.4 * red + 1),
        "ndwi": ratio(green - nir, green + nir),
    }
    usable = np.isfinite([green, red, nir]).any(axis=0)
    least = f"min_coverage_frac={MIN_COVERAGE}"
    feature = {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(geometry)}

    def library(image, stat):
        source = NumPyRasterSource(image, LEFT, TOP - 10 * ROWS, LEFT + 10 * COLS, TOP)
        (answer,) = exact_extract(source, JSONFeatureSource([feature]), [stat])
        (figure,) = answer["properties"].values()
        return np.nan if figure is None else figure

    seen = figures(as_scene(scene), [geometry])
    found = dict(zip(seen.columns, seen.figures[0].tolist(), strict=True))

    def close(column, truth):
        assert found[column] == pytest.approx(truth, rel=2e-5, abs=2e-5, nan_ok=True), column

    for id_, image in images.items():
        single = image.astype(np.float32)
        close(f"{id_}.mean", library(single, f"mean({least})"))
        close(f"{id_}.sd", library(single, f"stdev({least})"))
        close(f"{id_}.min", library(single, f"min({least})"))
        close(f"{id_}.max", library(single, f"max({least})"))
        close(f"{id_}.pixels", library(single, f"count({least})"))
        for share in (10, 50, 90):
            close(f"{id_}.p{share}", library(single, f"quantile(q={share / 100},{least})"))
    for role, image in zip(ROLES, (green, red, nir), strict=True):
        close(f"{role}.mean", library(image, f"mean({least})"))
        close(f"{role}.sd", library(image, f"stdev({least})"))
    whole = geometry.area / 100
    close("clear.valid_share", library(usable.astype(np.float64), f"sum({least})") / whole)
