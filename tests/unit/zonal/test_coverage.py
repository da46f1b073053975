"""Zones: hand-checkable cells and weights, and boundaries projected onto a grid."""

import tracemalloc

import numpy as np
import pytest
import shapely
from affine import Affine
from pyproj import Geod, Transformer

from service.zonal.coverage import project, zones_on
from service.zonal.grid import Grid

UTM_33 = "EPSG:32633"


def grid_of(rows, cols, *, cell=10.0, x0=500_000.0, y0=5_400_000.0, down=True):
    step = -cell if down else cell
    return Grid(crs=UTM_33, transform=Affine(cell, 0, x0, 0, step, y0), shape=(rows, cols))


def box(grid, left, top, right, bottom):
    """A rectangle by columns and rows of the grid, counted from its first corner."""
    place = grid.transform
    xs = place.c + place.a * left, place.c + place.a * right
    ys = place.f + place.e * top, place.f + place.e * bottom
    return shapely.box(min(xs), min(ys), max(xs), max(ys))


def test_a_square_between_nine_cells_has_quarters_halves_and_a_whole():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [box(grid, 0.5, 0.5, 2.5, 2.5)])

    assert zones.indptr.tolist() == [0, 9]
    assert zones.cells.tolist() == list(range(9))
    assert zones.weights.tolist() == [0.25, 0.5, 0.25, 0.5, 1.0, 0.5, 0.25, 0.5, 0.25]
    assert zones.totals.tolist() == [4.0]


def test_the_types_are_those_that_plans_and_statistics_build_on():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [box(grid, 0, 0, 1, 1)])

    types = (zones.indptr.dtype, zones.cells.dtype, zones.weights.dtype, zones.totals.dtype)
    assert types == (np.int64, np.int32, np.float32, np.float64)


def test_a_rectangle_reaches_its_cells_by_row_and_column():
    grid = grid_of(5, 7)

    zones = zones_on(grid, [box(grid, 2, 1, 4, 4)])

    assert zones.cells.tolist() == [9, 10, 16, 17, 23, 24]
    assert zones.weights.tolist() == [1.0] * 6


def test_a_hole_takes_its_share_out():
    grid = grid_of(4, 4)
    ring = box(grid, 0, 0, 4, 4).difference(box(grid, 1.5, 1.5, 2.5, 2.5))

    zones = zones_on(grid, [ring])

    weights = dict(zip(zones.cells.tolist(), zones.weights.tolist(), strict=True))
    assert [weights[cell] for cell in (5, 6, 9, 10)] == [0.75] * 4
    assert sum(weights.values()) == zones.totals[0] == 15.0


def test_parts_of_one_boundary_in_one_cell_add_up():
    grid = grid_of(2, 2)
    parts = shapely.MultiPolygon([box(grid, 0, 0, 0.25, 1), box(grid, 0.5, 0, 1.5, 1)])

    zones = zones_on(grid, [parts])

    assert zones.cells.tolist() == [0, 1]
    assert zones.weights.tolist() == [0.75, 0.5]


def test_a_plot_inside_one_cell_has_its_share_of_it():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [box(grid, 1.25, 1.25, 1.5, 1.75)])

    assert zones.cells.tolist() == [4]
    assert zones.weights.tolist() == [0.125]
    assert zones.totals.tolist() == [0.125]


def test_what_lies_over_the_edge_counts_in_the_total_only():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [box(grid, -1, -1, 1, 1.5)])

    assert zones.cells.tolist() == [0, 3]
    assert zones.weights.tolist() == [1.0, 0.5]
    assert zones.totals.tolist() == [5.0]


@pytest.mark.parametrize(
    "sides", [(10, 0, 12, 2), (-3, 0, -1, 2), (0, -5, 1, -4), (0, 3, 1, 5), (3, 0, 4, 1)]
)
def test_a_boundary_off_the_grid_is_a_zone_without_cells(sides):
    grid = grid_of(3, 3)
    outside = box(grid, *sides)

    zones = zones_on(grid, [box(grid, 0, 0, 1, 1), outside, box(grid, 1, 1, 2, 2)])

    assert len(zones) == 3
    assert zones.indptr.tolist() == [0, 1, 1, 2]
    assert zones.cells.tolist() == [0, 4]
    assert zones.totals[1] == pytest.approx(outside.area / 100, rel=1e-12)


def test_an_empty_boundary_is_a_zone_without_cells_and_without_area():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [shapely.Polygon(), box(grid, 0, 0, 1, 1)])

    assert zones.indptr.tolist() == [0, 0, 1]
    assert zones.totals.tolist() == [0.0, 1.0]


def test_no_boundaries_are_no_zones():
    zones = zones_on(grid_of(3, 3), [])

    assert len(zones) == 0
    assert zones.indptr.tolist() == [0]
    assert len(zones.cells) == len(zones.weights) == 0


def test_zones_keep_the_order_of_the_boundaries_and_may_share_cells():
    grid = grid_of(3, 3)

    zones = zones_on(grid, [box(grid, 2, 2, 3, 3), box(grid, 0, 0, 1, 1), box(grid, 2, 2, 3, 3)])

    assert zones.cells.tolist() == [8, 0, 8]


def test_more_boundaries_than_are_measured_at_once_keep_their_order():
    grid = grid_of(30, 30)
    where = [(row, col) for row in range(30) for col in range(30)]

    zones = zones_on(grid, [box(grid, col, row, col + 1, row + 1) for row, col in where])

    assert zones.cells.tolist() == list(range(900))
    assert zones.weights.tolist() == [1.0] * 900


def test_a_share_below_a_millionth_of_a_cell_does_not_count():
    grid = grid_of(3, 3)
    just_less = box(grid, 0, 0, 1 + 0.9e-6, 1)
    just_more = box(grid, 0, 0, 1 + 1.1e-6, 1)

    zones = zones_on(grid, [just_less, just_more])

    assert zones.cells.tolist() == [0, 0, 1]
    assert zones.totals[0] == pytest.approx(1 + 0.9e-6, abs=1e-9)


def test_a_grid_whose_rows_run_north_gives_the_same_ground_the_same_weight():
    down = grid_of(4, 3, y0=5_400_040.0)
    up = grid_of(4, 3, y0=5_400_000.0, down=False)
    ground = shapely.Polygon(
        [(500_003, 5_400_002), (500_028, 5_400_011), (500_017, 5_400_038), (500_003, 5_400_002)]
    )

    images = []
    for grid in (down, up):
        zones = zones_on(grid, [ground])
        image = np.zeros(12)
        image[zones.cells] = zones.weights
        images.append(image.reshape(4, 3))

    assert images[0].sum() == pytest.approx(ground.area / 100, abs=1e-6)
    np.testing.assert_allclose(images[1][::-1], images[0], atol=1e-6)


def test_cells_need_not_be_square():
    grid = Grid(crs=UTM_33, transform=Affine(20, 0, 0, 0, -10, 100), shape=(4, 4))

    zones = zones_on(grid, [shapely.box(10, 75, 40, 100)])

    assert zones.cells.tolist() == [0, 1, 4, 5, 8, 9]
    assert zones.weights.tolist() == [0.5, 1.0, 0.5, 1.0, 0.25, 0.5]
    assert zones.totals.tolist() == [3.75]


def test_a_plot_on_a_full_tile_does_not_cost_a_full_tile():
    grid = grid_of(10_980, 10_980)
    plot = box(grid, 8_000.5, 9_000.5, 8_010.5, 9_010.5)
    zones_on(grid, [plot])

    tracemalloc.start()
    zones = zones_on(grid, [plot])
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()

    assert zones.weights.sum() == 100.0
    assert zones.cells[0] == 9_000 * 10_980 + 8_000
    assert peak < 1_000_000  # bytes; the tile has 120,000,000 cells


# Boundaries projected. Oracle: pyproj (PROJ) itself, on points every 10 m along the edges,
# which are straight in longitude and latitude (RFC 7946, section 3.1.1).


def field_with_a_long_edge(length_deg=0.28):
    return shapely.box(15.3, 49.0, 15.3 + length_deg, 49.05)


def dense_reference(field):
    points = shapely.get_coordinates(shapely.segmentize(field, 1e-4))
    xs, ys = Transformer.from_crs(4326, 32633, always_xy=True).transform(*points.T)
    return shapely.points(xs, ys), shapely.Polygon(np.column_stack([xs, ys]))


def test_an_edge_of_20_km_follows_its_bend_on_the_grid():
    field = field_with_a_long_edge()
    _, _, length_m = Geod(ellps="WGS84").inv(15.3, 49.0, 15.58, 49.0)
    points, truth = dense_reference(field)

    projected = project([field], UTM_33)[0]

    assert length_m == pytest.approx(20_480, abs=20)
    assert shapely.distance(points, projected.exterior).max() < 0.03
    assert shapely.area(shapely.symmetric_difference(projected, truth)) < 1_000  # of 114 km²


def test_the_same_edge_by_its_ends_alone_would_be_9_m_off():
    field = field_with_a_long_edge()
    points, _ = dense_reference(field)
    corners = Transformer.from_crs(4326, 32633, always_xy=True)
    bare = shapely.transform(field, corners.transform, interleaved=False)

    assert 8 < shapely.distance(points, bare.exterior).max() < 11


def test_a_field_of_short_edges_keeps_its_vertices():
    field = shapely.Polygon([(15.300, 49.000), (15.304, 49.001), (15.301, 49.003)])
    xs, ys = Transformer.from_crs(4326, 32633, always_xy=True).transform(
        *shapely.get_coordinates(field).T
    )

    projected = project([field], UTM_33)[0]

    np.testing.assert_array_equal(shapely.get_coordinates(projected), np.column_stack([xs, ys]))


def test_longitude_comes_first():
    # The equator at the central meridian of zone 33 is at 500,000 m east, 0 m north
    # (definition of the UTM zone; NGA.SIG.0012).
    corner = project([shapely.box(15.0, 0.0, 15.001, 0.001)], UTM_33)[0].bounds

    assert corner[0] == pytest.approx(500_000, abs=0.001)
    assert corner[1] == pytest.approx(0, abs=0.001)


def test_holes_and_parts_are_projected_too():
    holed = shapely.box(15.0, 49.0, 15.1, 49.1).difference(shapely.box(15.02, 49.02, 15.04, 49.04))
    parts = shapely.MultiPolygon([holed, shapely.box(15.2, 49.0, 15.21, 49.01)])

    projected = project([parts], UTM_33)[0]

    assert [len(part.interiors) for part in projected.geoms] == [1, 0]
    # On the ellipsoid by Geod; the scale of UTM changes areas by less than 1 in 1,000 here.
    on_ground, _ = Geod(ellps="WGS84").geometry_area_perimeter(shapely.normalize(parts))
    assert projected.area == pytest.approx(abs(on_ground), rel=1e-3)


def test_a_boundary_that_the_projection_cannot_hold_is_empty():
    far_away = project([shapely.box(105.0, 0.0, 105.01, 0.01)], UTM_33)[0]

    assert far_away.is_empty
    assert zones_on(grid_of(3, 3), [far_away]).totals.tolist() == [0.0]
