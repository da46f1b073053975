"""Weighted statistics of any cells, against `exactextract` and numpy, and among themselves."""

import dataclasses
import itertools

import numpy as np
import shapely
from affine import Affine
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from hypothesis import assume, given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from service.zonal.coverage import MIN_COVERAGE, zones_on
from service.zonal.grid import Grid
from service.zonal.statistics import mean_and_sd, summarise

# Few distinct values, so that many are equal, or many; with unknown cells among them.
INDEX_VALUES = st.one_of(
    st.sampled_from([np.nan, -0.5, -0.0, 0.0, 0.25, 0.7]),
    st.floats(-1, 1, width=32),
    st.floats(-300, 300, width=32),
)
SHARES = st.floats(2.0**-19, 1, width=32)


@st.composite
def zoned_cells(draw):
    counts = draw(st.lists(st.integers(0, 12), min_size=1, max_size=8))
    size = sum(counts)
    values = draw(hnp.arrays(np.float32, size, elements=INDEX_VALUES))
    weights = draw(hnp.arrays(np.float32, size, elements=SHARES))
    return values, weights, np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)


def as_rows(found):
    return np.column_stack([getattr(found, field.name) for field in dataclasses.fields(found)])


@st.composite
def plots(draw):
    """An irregular plot of up to a hundred cells on a 12 by 12 grid of unit cells, y up."""
    parts = draw(st.lists(st.floats(0.3, 1.0), min_size=3, max_size=12))
    angles = np.linspace(0, 2 * np.pi, len(parts), endpoint=False)
    reach = draw(st.floats(0.1, 7)) * np.array(parts)
    x, y = draw(st.floats(2, 10)), draw(st.floats(2, 10))
    return shapely.Polygon(
        np.column_stack([x + reach * np.cos(angles), y + reach * np.sin(angles)])
    )


@given(plots(), hnp.arrays(np.float32, (12, 12), elements=INDEX_VALUES))
def test_every_statistic_is_that_of_the_general_zonal_library(plot, image):
    # Oracle: exactextract's own statistics over the same cells, with the same minimum
    # coverage on its side.
    least = f"min_coverage_frac={MIN_COVERAGE}"
    names = {
        "mean": f"mean({least})", "sd": f"stdev({least})", "min": f"min({least})",
        "p10": f"quantile(q=0.1,{least})", "p50": f"quantile(q=0.5,{least})",
        "p90": f"quantile(q=0.9,{least})", "max": f"max({least})", "weight": f"count({least})",
    }  # fmt: skip
    feature = {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(plot)}
    source = NumPyRasterSource(image, 0, 0, 12, 12)
    truth = []
    for stat in names.values():
        (answer,) = exact_extract(source, JSONFeatureSource([feature]), [stat])
        (figure,) = answer["properties"].values()
        truth.append(figure)

    grid = Grid(crs="EPSG:32633", transform=Affine(1, 0, 0, 0, -1, 12), shape=(12, 12))
    zones = zones_on(grid, [plot])
    found = summarise(image.reshape(-1)[zones.cells], zones.weights, zones.indptr)

    expected = np.array([np.nan if figure is None else figure for figure in truth], dtype=float)
    got = np.array([getattr(found, name)[0] for name in names])
    np.testing.assert_allclose(got, expected, rtol=1e-5, atol=1e-5)


@given(zoned_cells())
def test_mean_and_spread_are_those_of_numpy(cells):
    values, weights, indptr = cells

    mean, sd = mean_and_sd(values, weights, indptr)
    found = summarise(values, weights, indptr)

    for zone, (start, stop) in enumerate(itertools.pairwise(indptr)):
        known = ~np.isnan(values[start:stop])
        inside = values[start:stop][known].astype(float)
        shares = weights[start:stop][known].astype(float)
        if not len(inside):
            assert np.isnan([mean[zone], sd[zone], found.mean[zone], found.sd[zone]]).all()
            continue
        expected = np.average(inside, weights=shares)
        spread = np.sqrt(np.average((inside - expected) ** 2, weights=shares))
        np.testing.assert_allclose([mean[zone], found.mean[zone]], expected, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose([sd[zone], found.sd[zone]], spread, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(found.weight[zone], shares.sum(), rtol=1e-12)


@given(zoned_cells())
def test_the_figures_are_in_order(cells):
    found = summarise(*cells)

    known = found.weight > 0
    ladder = np.array([found.min, found.p10, found.p50, found.p90, found.max])[:, known]
    assert np.all(np.diff(ladder, axis=0) >= -1e-12 * np.abs(ladder[1:]))
    assert np.all((found.min[known] <= found.mean[known]) & (found.mean[known] <= found.max[known]))
    assert np.all(found.sd[known] <= (found.max - found.min)[known] / 2 + 1e-9)
    assert np.isnan(as_rows(found)[~known, :-1]).all()


@given(zoned_cells())
def test_many_zones_at_once_are_each_as_alone(cells):
    values, weights, indptr = cells

    together = as_rows(summarise(values, weights, indptr))

    for zone, (start, stop) in enumerate(itertools.pairwise(indptr)):
        ends = np.array([0, stop - start])
        alone = as_rows(summarise(values[start:stop], weights[start:stop], ends))
        np.testing.assert_array_equal(together[zone], alone[0])


@given(zoned_cells(), st.randoms())
def test_the_order_of_the_cells_in_a_zone_does_not_matter(cells, random):
    values, weights, indptr = cells
    order = np.arange(len(values))
    for start, stop in itertools.pairwise(indptr):
        places = list(range(start, stop))
        random.shuffle(places)
        order[start:stop] = places

    first = as_rows(summarise(values, weights, indptr))
    second = as_rows(summarise(values[order], weights[order], indptr))

    np.testing.assert_array_equal(first, second)


@given(zoned_cells())
def test_an_unknown_cell_is_as_good_as_none(cells):
    values, weights, indptr = cells
    known = ~np.isnan(values)
    ends = np.concatenate([[0], np.cumsum(known)])[indptr]

    with_gaps = as_rows(summarise(values, weights, indptr))
    without = as_rows(summarise(values[known], weights[known], ends))

    np.testing.assert_array_equal(with_gaps, without)


@given(zoned_cells(), st.integers(0, 11))
def test_cutting_a_cell_in_two_halves_changes_nothing(cells, which):
    values, weights, indptr = cells
    assume(which < len(values))
    halves = np.insert(weights, which, weights[which] / 2)
    halves[which + 1] /= 2

    whole = as_rows(summarise(values, weights, indptr))
    ends = indptr + (indptr > which)
    cut = as_rows(summarise(np.insert(values, which, values[which]), halves, ends))

    np.testing.assert_array_equal(cut, whole)
