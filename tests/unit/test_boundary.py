"""Outlines: their area on the ellipsoid, and what is refused before it is believed."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from service.errors import RejectedInput
from service.zonal.boundary import (
    MAX_REPAIR_VERTICES,
    MAX_VERTICES,
    Outline,
    outline_from_geojson,
)

# WGS 84: NGA.STND.0036 (2014), tables 3.1 and 3.2.
A_M = 6_378_137.0
F = 1 / 298.257223563
B_M = A_M * (1 - F)
E = math.sqrt(F * (2 - F))

Ring = list[list[float]]


def outline(geometry: object, **changed: Any) -> Outline:
    """Return the outline of a geometry, under rules that hold unless changed."""
    rules: dict[str, Any] = {"pointer": "/g", "repair": False, "area_limit_ha": math.inf}
    return outline_from_geojson(geometry, **(rules | changed))


def polygon(*rings: Ring) -> dict[str, Any]:
    return {"type": "Polygon", "coordinates": list(rings)}


def box(west: float, south: float, east: float, north: float) -> Ring:
    return [[west, south], [east, south], [east, north], [west, north], [west, south]]


def band_m2(south: float, north: float) -> float:
    """Area of the whole ellipsoid between two parallels, in square metres.

    Snyder 1987, Map projections: a working manual, USGS Professional Paper 1395, the
    integral behind equation 3-12, in closed form.
    """

    def up_to(latitude: float) -> float:
        s = math.sin(math.radians(latitude))
        return s / (1 - (E * s) ** 2) + math.atanh(E * s) / E

    return math.pi * B_M**2 * (up_to(north) - up_to(south))


def refusal(geometry: object, **changed: Any) -> tuple[str | None, str]:
    """Return pointer and detail of the one fault for which a geometry is refused."""
    with pytest.raises(RejectedInput) as caught:
        outline(geometry, **changed)
    assert caught.value.code == "invalid-geometry"
    (fault,) = caught.value.faults
    return fault.pointer, fault.detail


def test_an_eighth_of_the_earth_is_an_eighth_of_its_surface() -> None:
    """The edges are geodesics: a quarter of the equator and two meridians, so it is exact."""
    octant = [[0.0, 0.0], [90.0, 0.0], [90.0, 90.0], [0.0, 90.0], [0.0, 0.0]]
    # Surface of an oblate spheroid: 2πa² + (πb²/e) ln((1+e)/(1-e)); textbook geometry.
    surface = 2 * math.pi * A_M**2 + math.pi * B_M**2 / E * math.log((1 + E) / (1 - E))
    # Karney 2013, Algorithms for geodesics, Journal of Geodesy 87: 510,065,621.7 km².
    assert surface == pytest.approx(510_065_621.7e6, rel=1e-9)
    assert outline(polygon(octant)).area_ha == pytest.approx(surface / 8 / 10_000, rel=1e-9)


@given(
    west=st.floats(-179, 178),
    south=st.floats(-80, 79),
    width=st.floats(0.001, 0.01),
    height=st.floats(0.001, 0.01),
)
def test_a_small_box_has_its_share_of_the_band_between_its_parallels(
    west: float, south: float, width: float, height: float
) -> None:
    """A parallel and the geodesic beside it enclose below 1e-6 of boxes this small."""
    east, north = west + width, south + height
    expected = band_m2(south, north) * (east - west) / 360 / 10_000
    found = outline(polygon(box(west, south, east, north)))
    assert found.area_ha == pytest.approx(expected, rel=2e-6)
    assert found.bounds == (west, south, east, north)


@given(turn=st.integers(0, 4), step=st.sampled_from([1, -1]), height_m=st.floats(0, 5_000))
def test_area_knows_no_starting_point_direction_or_height(
    turn: int, step: int, height_m: float
) -> None:
    ring = [[15.0, 50.0], [15.02, 50.0], [15.03, 50.01], [15.01, 50.02], [14.99, 50.01]]
    turned = [*ring[turn:], *ring[: turn + 1]][::step]
    raised = [[*position, height_m] for position in turned]
    expected = outline(polygon([*ring, ring[0]]))
    for found in (outline(polygon(turned)), outline(polygon(raised))):
        assert found.area_ha == pytest.approx(expected.area_ha, rel=1e-12)
        assert found.geometry.normalize() == expected.geometry.normalize()
        # RFC 7946, section 3.1.6: exterior rings are counter-clockwise.
        assert found.geometry.exterior.is_ccw
        assert not found.geometry.has_z


def test_holes_are_left_out_and_parts_add_up() -> None:
    outer, hole, far = (
        box(15, 50, 15.04, 50.04),
        box(15.01, 50.01, 15.02, 50.02),
        box(15.1, 50, 15.12, 50.02),
    )
    whole, inner, other = (outline(polygon(ring)).area_ha for ring in (outer, hole, far))
    holed = outline(polygon(outer, hole))
    assert holed.area_ha == pytest.approx(whole - inner, rel=1e-12)
    assert not holed.geometry.interiors[0].is_ccw
    parts = outline({"type": "MultiPolygon", "coordinates": [[outer, hole], [far]]})
    assert parts.area_ha == pytest.approx(whole - inner + other, rel=1e-12)


SQUARE = box(15, 50, 15.01, 50.01)
BOW_TIE: Ring = [[15, 50], [15.02, 50.02], [15.02, 50], [15, 50.02], [15, 50]]


@pytest.mark.parametrize(
    ("geometry", "pointer", "says"),
    [
        (None, "/g", "Polygon or MultiPolygon"),
        ([], "/g", "Polygon or MultiPolygon"),
        ({"type": ["Polygon"], "coordinates": [SQUARE]}, "/g", "Polygon or MultiPolygon"),
        ({"type": "Point", "coordinates": [15, 50]}, "/g", "points, lines"),
        ({"type": "LineString", "coordinates": SQUARE}, "/g", "points, lines"),
        ({"type": "GeometryCollection", "geometries": []}, "/g", "collections"),
        ({"type": "Polygon"}, "/g/coordinates", "non-empty"),
        (polygon(), "/g/coordinates", "non-empty"),
        ({"type": "MultiPolygon", "coordinates": []}, "/g/coordinates", "non-empty"),
        ({"type": "MultiPolygon", "coordinates": [[SQUARE], []]}, "/g/coordinates/1", "non-empty"),
        ({"type": "MultiPolygon", "coordinates": [SQUARE]}, "/g/coordinates/0/0", "two numbers"),
        ({"type": "Polygon", "coordinates": SQUARE}, "/g/coordinates/0", "two numbers"),
        (polygon(SQUARE, []), "/g/coordinates/1", "non-empty"),
        (polygon(SQUARE[:-1]), "/g/coordinates/0", "last equal to the first"),
        (polygon([SQUARE[0], SQUARE[1], SQUARE[0]]), "/g/coordinates/0", "four positions"),
        (polygon(SQUARE, SQUARE[:-1]), "/g/coordinates/1", "last equal to the first"),
        (polygon([[50, 150], [50.1, 150], [50, 150.1], [50, 150]]), "/g/coordinates/0", "longit"),
        (polygon(box(500_000, 5_500_000, 500_100, 5_500_100)), "/g/coordinates/0", "WGS 84"),
        (polygon(box(179.9, 10, 180.1, 10.1)), "/g/coordinates/0", "-180 to 180"),
        (polygon([[math.nan, 1], [1, 1], [1, 2], [math.nan, 1]]), "/g/coordinates/0", ""),
        (polygon([[math.inf, 1], [1, 1], [1, 2], [math.inf, 1]]), "/g/coordinates/0", "WGS 84"),
        (polygon([[10**400, 1], [1, 1], [1, 2], [10**400, 1]]), "/g/coordinates/0", "numbers"),
        ({"type": "Polygon", "coordinates": [[["15", "50"]] * 4]}, "/g/coordinates/0", "numbers"),
        ({"type": "Polygon", "coordinates": [[[True, False]] * 4]}, "/g/coordinates/0", "numbers"),
        ({"type": "Polygon", "coordinates": [[[15]] * 4]}, "/g/coordinates/0", "two numbers"),
        ({"type": "Polygon", "coordinates": [[15, 50, 15, 50]]}, "/g/coordinates/0", "numbers"),
        (polygon([[*p, 1.0, 2.0] for p in SQUARE]), "/g/coordinates/0", "with a height"),
        ({**polygon(SQUARE), "crs": {"type": "name"}}, "/g", "nothing else"),
        (polygon(BOW_TIE), "/g", "self-intersection at longitude 15.01, latitude 50.01"),
        (polygon(box(15, 50, 15, 50.01)), "/g", "not valid"),
        (polygon([[15, 50], [16, 51], [17, 52], [15, 50]]), "/g", "not valid"),
        # Not on one line in binary fractions, so valid, and of a few square millimetres.
        (polygon([[15, 50], [15.01, 50.01], [15.02, 50.02], [15, 50]]), "/g", "no area"),
        (polygon([[15.0, 50.0]] * 5), "/g", "not valid"),
        (polygon(SQUARE, box(16, 50, 16.01, 50.01)), "/g", "not valid"),
    ],
)
def test_what_is_no_outline_is_refused_where_it_is_wrong(
    geometry: object, pointer: str, says: str
) -> None:
    assert (refusal(geometry)[0], says in refusal(geometry)[1]) == (pointer, True)


def circle(vertices: int, wave: Callable[[Any], Any] = np.ones_like) -> Ring:
    """Return a ring of so many positions, the last equal to the first."""
    angle = np.linspace(0, 2 * np.pi, vertices)[:-1]
    radius = 0.01 * wave(angle)
    ring = np.column_stack([15 + radius * np.cos(angle), 50 + radius * np.sin(angle)]).tolist()
    return [*ring, ring[0]]


def test_vertices_and_area_have_a_limit() -> None:
    assert outline(polygon(circle(MAX_VERTICES))).area_ha > 0
    assert refusal(polygon(circle(MAX_VERTICES + 1)))[0] == "/g"
    area_ha = outline(polygon(SQUARE)).area_ha
    assert outline(polygon(SQUARE), area_limit_ha=area_ha).area_ha == area_ha
    pointer, detail = refusal(polygon(SQUARE), area_limit_ha=area_ha / 2)
    assert pointer == "/g"
    assert "Check that coordinates are longitude, latitude" in detail


def test_a_ring_that_crosses_itself_is_mended_on_request() -> None:
    mended = outline(polygon(BOW_TIE), repair=True)
    assert mended.was_repaired
    assert shapely.is_valid(mended.geometry)
    # Two triangles that meet in the middle remain, a quarter of the square each.
    assert len(mended.geometry.geoms) == 2
    halves = [
        outline(polygon([[15, 50], [15.01, 50.01], [15, 50.02], [15, 50]])).area_ha,
        outline(polygon([[15.02, 50], [15.02, 50.02], [15.01, 50.01], [15.02, 50]])).area_ha,
    ]
    assert mended.area_ha == pytest.approx(sum(halves), rel=1e-9)
    assert not outline(polygon(SQUARE), repair=True).was_repaired


def test_mending_neither_invents_an_area_nor_takes_for_ever() -> None:
    line = [[15, 50], [16, 51], [17, 52], [15, 50]]
    assert "no area" in refusal(polygon(line), repair=True)[1]
    crossing = circle(MAX_REPAIR_VERTICES + 1, lambda angle: np.cos(2 * angle))
    assert "mended here" in refusal(polygon(crossing), repair=True)[1]
    assert outline(polygon(circle(200, lambda angle: np.cos(2 * angle))), repair=True).was_repaired


def test_an_error_never_echoes_what_was_sent() -> None:
    for geometry in (
        {"type": "zebra", "coordinates": [SQUARE]},
        {**polygon(SQUARE), "zebra": 1},
        {"type": "Polygon", "coordinates": [[["zebra", 1]] * 4]},
    ):
        assert "zebra" not in refusal(geometry)[1]
