"""Coverage fractions of any boundary, against GEOS (shapely) cell by cell."""

import numpy as np
import shapely
from affine import Affine
from hypothesis import given
from hypothesis import strategies as st

from service.zonal.coverage import MIN_COVERAGE, shares_on, zones_on
from service.zonal.grid import Grid
from service.zonal.statistics import mean_and_sd

ROWS, COLS = 9, 12
# Not a whole number of cells from zero, and five million metres away from it.
GRID = Grid(
    crs="EPSG:32633", transform=Affine(10, 0, 499_983.0, 0, -10, 5_400_007.0), shape=(ROWS, COLS)
)
# Fractions are kept in single precision.
SINGLE = 1e-6

LEFT, TOP = 499_983.0, 5_400_007.0
RIGHT, BOTTOM = LEFT + 10 * COLS, TOP - 10 * ROWS
_ROW, _COL = np.divmod(np.arange(ROWS * COLS), COLS)
CELLS = shapely.box(LEFT + 10 * _COL, TOP - 10 * _ROW - 10, LEFT + 10 * _COL + 10, TOP - 10 * _ROW)


@st.composite
def stars(draw, *, smallest=0.02, largest=60.0):
    """An irregular plot around a point on, near or beyond the edge of the grid."""
    centre_x = LEFT + draw(st.floats(-20, 140))
    centre_y = TOP - draw(st.floats(-20, 110))
    radius = draw(st.floats(smallest, largest))
    parts = draw(st.lists(st.floats(0.3, 1.0), min_size=3, max_size=14))
    angles = np.linspace(0, 2 * np.pi, len(parts), endpoint=False)
    reach = radius * np.array(parts)
    return shapely.Polygon(
        np.column_stack([centre_x + reach * np.cos(angles), centre_y + reach * np.sin(angles)])
    )


@st.composite
def boundaries(draw):
    """A plot, one with a hole, one of several parts, a strip thinner than a cell."""
    first = draw(stars())
    kind = draw(st.sampled_from(["plain", "hole", "parts", "strip"]))
    if kind == "hole":
        hole = shapely.affinity.scale(first, 0.4, 0.4, origin=first.representative_point())
        return first.difference(hole)
    if kind == "parts":
        return first.union(draw(stars()))
    if kind == "strip":
        width = draw(st.floats(0.01, 4))
        return shapely.LineString(shapely.get_coordinates(first)[:2]).buffer(
            width, cap_style="flat"
        )
    return first


def fractions_of(boundary):
    zones = zones_on(GRID, [boundary])
    image = np.zeros(ROWS * COLS)
    image[zones.cells] = zones.weights
    return image, zones


@given(boundaries())
def test_every_cell_has_the_share_that_its_intersection_has(boundary):
    image, zones = fractions_of(boundary)

    truth = shapely.area(shapely.intersection(CELLS, boundary)) / 100
    np.testing.assert_allclose(image, truth, atol=MIN_COVERAGE + SINGLE)
    assert np.all(np.diff(zones.cells) > 0)
    assert np.all((zones.weights >= np.float32(MIN_COVERAGE)) & (zones.weights <= 1))


@given(boundaries())
def test_the_shares_times_the_cell_add_up_to_the_area_on_the_grid(boundary):
    _, zones = fractions_of(boundary)

    on_grid = boundary.intersection(shapely.box(LEFT, BOTTOM, RIGHT, TOP)).area
    tolerance = (MIN_COVERAGE + SINGLE) * 100 * len(zones.cells) + MIN_COVERAGE * 100 * 4
    assert abs(zones.weights.sum(dtype=np.float64) * GRID.cell_area_m2 - on_grid) <= tolerance
    np.testing.assert_allclose(zones.totals[0] * GRID.cell_area_m2, boundary.area, rtol=1e-7)


@given(st.lists(boundaries(), min_size=1, max_size=6), st.randoms())
def test_a_zone_does_not_depend_on_its_company(several, random):
    order = list(range(len(several)))
    random.shuffle(order)

    together = zones_on(GRID, [several[place] for place in order])

    for place, original in enumerate(order):
        alone = zones_on(GRID, [several[original]])
        mine = slice(together.indptr[place], together.indptr[place + 1])
        np.testing.assert_array_equal(together.cells[mine], alone.cells)
        np.testing.assert_array_equal(together.weights[mine], alone.weights)
        assert together.totals[place] == alone.totals[0]


@given(boundaries(), st.floats(0, 2 * np.pi))
def test_cutting_a_parcel_in_two_shares_its_weight_between_the_parts(boundary, angle):
    x, y = boundary.centroid.coords[0]
    far = 1_000
    line = shapely.LineString([(x - far * np.cos(angle), y - far * np.sin(angle)),
                               (x + far * np.cos(angle), y + far * np.sin(angle))])  # fmt: skip
    side = line.buffer(far, single_sided=True)

    parts = [boundary.intersection(side), boundary.difference(side)]
    halves = [fractions_of(part)[0] for part in parts]

    whole, _ = fractions_of(boundary)
    np.testing.assert_allclose(halves[0] + halves[1], whole, atol=3 * (MIN_COVERAGE + SINGLE))


# In columns and rows, where the oracle's own rounding is small.
UNIT_CELLS = shapely.box(_COL, _ROW, _COL + 1, _ROW + 1)


def in_cells(boundary):
    return shapely.transform(boundary, lambda points: (points - [LEFT, TOP]) / [10, -10])


def exact_shares(outline, *, turned=False):
    """Every cell's share in float64, none left out; rows may be counted from the other end."""
    if turned:
        outline = shapely.transform(outline, lambda points: points * [1, -1] + [0, ROWS])
    cells, shares, _ = shares_on((ROWS, COLS), np.array([outline], dtype=object), least=1e-300)
    image = np.zeros(ROWS * COLS)
    image[cells] = shares
    return image.reshape(ROWS, COLS)[:: -1 if turned else 1]


@given(boundaries())
def test_areas_on_the_grid_are_exact_to_a_billionth(boundary):
    outline = in_cells(boundary)

    shares = exact_shares(outline)

    truth = shapely.area(shapely.intersection(UNIT_CELLS, outline)).reshape(ROWS, COLS)
    np.testing.assert_allclose(shares, truth, atol=1e-9)
    whole = shapely.area(shapely.intersection(outline, shapely.box(0, 0, COLS, ROWS)))
    np.testing.assert_allclose(shares.sum(), whole, rtol=1e-9, atol=1e-9)


@given(boundaries(), st.booleans(), st.integers(0, 12))
def test_neither_direction_nor_start_of_a_ring_matters(boundary, backwards, start):
    outline = in_cells(boundary)

    def turned(ring):
        points = shapely.get_coordinates(ring)[:-1]
        points = np.roll(points, start, axis=0)
        points = points[::-1] if backwards else points
        return np.vstack([points, points[:1]])

    parts = [
        shapely.Polygon(turned(part.exterior), [turned(hole) for hole in part.interiors])
        for part in shapely.get_parts(outline)
    ]

    np.testing.assert_allclose(
        exact_shares(shapely.MultiPolygon(parts)), exact_shares(outline), atol=1e-12
    )


@given(boundaries(), st.integers(0, 2**32))
def test_rows_counted_from_the_other_end_give_the_same_to_a_trillionth(boundary, seed):
    outline = in_cells(boundary)
    # A whole number of 2^-40 of a cell, so that turning it loses nothing by itself.
    outline = shapely.transform(outline, lambda points: np.rint(points * 2.0**40) * 2.0**-40)

    here, there = exact_shares(outline), exact_shares(outline, turned=True)

    np.testing.assert_allclose(there, here, rtol=0, atol=1e-12)
    values = np.random.default_rng(seed).uniform(-1, 1, (ROWS, COLS))
    one_zone = np.array([0, ROWS * COLS])
    # With float64 weights, and each in its own order of cells.
    mean, sd = mean_and_sd(values.ravel(), here.ravel(), one_zone)
    other_mean, other_sd = mean_and_sd(values[::-1].ravel(), there[::-1].ravel(), one_zone)
    if here.sum() > 0.01:
        np.testing.assert_allclose(other_mean, mean, rtol=0, atol=1e-12)
        np.testing.assert_allclose(other_sd**2, sd**2, rtol=0, atol=1e-12)
