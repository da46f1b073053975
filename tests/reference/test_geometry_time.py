"""Geometry, GeoJSON and time against a table of worked examples and rules of the standards.

Sources stand in `checks.csv` and in the name of each case: geodesic areas and positions by
`pyproj`, the grid of a published catalogue item, RFC 7946 (GeoJSON), RFC 3339 (times).
"""

import csv
import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
from affine import Affine
from pyproj import Transformer

from service.tiles.intake import footprint
from service.zonal.boundary import outline_from_shape
from service.zonal.coverage import project, zones_on
from service.zonal.grid import Grid
from tests.serving import SCENE, Service, square, uniform_scene

Row = dict[str, str]
with (Path(__file__).parent / "checks.csv").open(newline="", encoding="utf-8") as _lines:
    ROWS = [
        row for row in csv.DictReader(_lines) if row["group"] in ("geometry", "geojson", "time")
    ]
BY_ID = {row["id"]: row for row in ROWS}


def cases(*prefixes: str) -> pytest.MarkDecorator:
    """Return the rows whose ids begin so, each named by its id and its source."""
    chosen = [row for row in ROWS if row["id"].startswith(prefixes)]
    assert chosen
    return pytest.mark.parametrize(
        "row", chosen, ids=[f"{row['id']} ({row['source']})" for row in chosen]
    )


def given(row: Row) -> dict[str, Any]:
    return dict(json.loads(row["input"]))


def worked(row: Row) -> dict[str, Any]:
    return dict(json.loads(row["expected"]))


def test_every_row_of_these_groups_is_a_case_below() -> None:
    taken = ("utm_", "px_per_ha", "s2_tile", "rfc3339_", "rfc7946_")
    assert [row["id"] for row in ROWS if not row["id"].startswith(taken)] == []
    assert len(ROWS) == 20


@cases("utm_")
def test_a_cell_has_the_areas_and_the_place_that_were_worked_out(row: Row) -> None:
    sent, right = given(row), worked(row)
    crs, x, y, side = f"EPSG:{sent['epsg']}", sent["easting"], sent["northing"], sent["cell_m"]
    grid = Grid(crs=crs, transform=Affine(side, 0, x, 0, -side, y + side), shape=(1, 1))
    assert grid.cell_area_m2 == right["grid_area_m2"]
    # The cell as a parcel: its area is that on the ellipsoid.
    transform = Transformer.from_crs(crs, "OGC:CRS84", always_xy=True).transform
    cell = shapely.transform(shapely.box(*grid.bounds), transform, interleaved=False)
    outline = outline_from_shape(cell, pointer="", repair=False, area_limit_ha=1)
    area_m2 = outline.area_ha * 10_000
    tolerance = float(row["tolerance"])
    assert area_m2 == pytest.approx(right["geodesic_area_m2"], abs=tolerance)
    assert area_m2 / grid.cell_area_m2 == pytest.approx(right["ratio"], abs=tolerance)
    # The place is given to 1e-5 or 1e-4 of a degree: 1 or 10 m.
    (placed,) = project([shapely.Point(right["lon"], right["lat"])], crs)
    assert (placed.x, placed.y) == pytest.approx((x, y), abs=11)


@cases("px_per_ha")
def test_a_hectare_is_as_many_cells_as_arithmetic_says(row: Row) -> None:
    hectare = shapely.box(500_000, 5_499_900, 500_100, 5_500_000)
    told = []
    for side in (10, 20, 30):
        grid = Grid(
            crs="EPSG:32633",
            transform=Affine(side, 0, 500_000, 0, -side, 5_500_000),
            shape=(20, 20),
        )
        zones = zones_on(grid, [hectare])
        assert zones.weights.sum() == pytest.approx(zones.totals[0], rel=1e-6)
        told.append(f"{round(float(zones.totals[0]), 2):g} cells of {side} m")
        cell_ha = grid.cell_area_m2 / 10_000
    assert row["expected"] == f"{', '.join(told)} ({cell_ha:g} ha each)"


@cases("s2_tile")
def test_a_tile_s_grid_lies_where_the_published_one_does(row: Row) -> None:
    if row["id"] == "s2_tile":
        side = 10_980
        grids = [
            Grid(
                crs="EPSG:32633",
                transform=Affine(10, 0, 399_960 + 100_000 * tile, 0, -10, 5_500_020),
                shape=(side, side),
            )
            for tile in (0, 1)
        ]
        (west, _, east, _), (next_west, *_) = (grid.bounds for grid in grids)
        told = (
            f"{side} x {side} cells at 10 m = {(east - west) / 1000:g} km; neighbouring tiles "
            f"overlap {(east - next_west) / 1000:g} km"
        )
        assert row["expected"] == told
        return
    sent, right = given(row), worked(row)
    transform = Affine(*sent["proj:transform"])
    grid = Grid(crs=sent["proj:code"], transform=transform, shape=(10_980, 10_980))
    assert grid.centre_xs(0, 1).tolist() == [right["row0_col0_centre_easting"]]
    assert grid.centre_ys(0, 1).tolist() == [right["row0_col0_centre_northing"]]
    assert grid.cols_at(np.array([600_000.0, 600_009.9, 599_999.9])).tolist() == [0, 0, -1]
    # A hundred-thousandth of a degree is about a metre.
    (corner,) = project([shapely.Point(right["upper_left_lonlat"])], grid.crs)
    assert (corner.x, corner.y) == pytest.approx((transform.c, transform.f), abs=1)
    lon, lat = right["upper_left_lonlat"]
    west, _, _, north = footprint(grid)
    assert west <= lon + 1e-5
    assert north >= lat - 1e-5


def told_instants(service: Service, text: str) -> list[str]:
    """Return an instant as the service tells it, sent to it in two places."""
    service.put_parcels(square("A", col=0, row=0))
    answer = service.put_parcels(square("A", col=1, row=0, valid_from=text))
    assert answer.status_code == 200, answer.text
    first, second = service.get("/v1/parcels/A/boundaries")["boundaries"]
    assert first["valid_to"] == second["valid_from"]
    return [str(second["valid_from"])]


@cases("rfc3339_19")
def test_a_date_time_of_the_standard_is_the_instant_that_it_says(
    service: Service, tmp_path: Path, row: Row
) -> None:
    text, right = given(row)["text"], worked(row)["utc"]
    # A leap second is the first moment of the next minute here, as in POSIX time.
    instant = datetime(1991, 1, 1, tzinfo=UTC) if "leap" in right else datetime.fromisoformat(right)
    found = told_instants(service, text)
    if instant.year >= 1972:
        files = uniform_scene(tmp_path / "s", {"red": 0.1, "nir": 0.4}, cells=4)
        scene = service.post_scene({**SCENE, "acquired_at": text}, files)
        assert scene.status_code == 200, scene.text
        found.append(scene.json()["acquired_at"])
        listed = service.get("/v1/scenes", params={"from": text})["scenes"]
        assert [one["ref"] for one in listed] == ["s1"]
        assert service.get("/v1/scenes", params={"to": text})["scenes"] == []
    for told in found:
        assert told.endswith("Z")
        assert datetime.fromisoformat(told) == instant


@cases("rfc3339_bad_")
def test_what_the_standard_does_not_allow_is_refused_where_it_stands(
    service: Service, tmp_path: Path, row: Row
) -> None:
    text = given(row)["text"]
    check_refused(service, tmp_path, text)


@pytest.mark.parametrize(
    "text",
    ["2024-06-03T10:10:60Z", "2016-12-31T23:59:60-08:00", "2016-12-30T23:59:60Z"],
    ids=[f"{what} (RFC 3339 section 5.7)" for what in ("mid-day", "local midnight", "mid-month")],
)
def test_a_leap_second_where_there_can_be_none_is_refused(
    service: Service, tmp_path: Path, text: str
) -> None:
    check_refused(service, tmp_path, text)


def check_refused(service: Service, tmp_path: Path, text: str) -> None:
    files = uniform_scene(tmp_path / "s", {"red": 0.1, "nir": 0.4}, cells=4)
    service.put_parcels(square("A", col=0, row=0))
    observed = {"parcel": "A", "index": "ndvi", "observed_at": text, "mean": 0.5}
    asked = {
        "/features/0/properties/valid_from": service.put_parcels(
            square("A", col=1, row=0, valid_from=text)
        ),
        "/0/observed_at": service.call(
            "POST", "/v1/observations", json=[{**observed, "sensor": "s", "source": "s"}]
        ),
        "/scene/acquired_at": service.post_scene({**SCENE, "acquired_at": text}, files, wait=0),
    }
    for pointer, answer in asked.items():
        assert answer.status_code == 422, (pointer, answer.text)
        (error,) = answer.json()["errors"]
        assert error["pointer"] == pointer
        assert text not in answer.text
    assert len(service.get("/v1/parcels/A/boundaries")["boundaries"]) == 1
    assert service.get("/v1/scenes")["scenes"] == []


def box_at(ref: str, lon: float, lat: float, **more: Any) -> dict[str, Any]:
    """Return a parcel of a thousandth of a degree, by its south-western corner."""
    ring = shapely.box(lon, lat, lon + 0.001, lat + 0.001).exterior.coords
    geometry = {"type": "Polygon", "coordinates": [[list(position) for position in ring]]}
    return {"type": "Feature", "properties": {"ref": ref}, "geometry": geometry, **more}


@cases("rfc7946_bbox")
def test_a_box_whose_west_is_east_of_its_east_crosses_the_antimeridian(
    service: Service, tmp_path: Path, row: Row
) -> None:
    west, south, east, north = given(row)["bbox"]
    assert row["expected"].endswith(f"width {east - west + 360:g} degrees")
    service.put_parcels(
        box_at("west end", west + 0.01, -18),
        box_at("middle", 179.995, -17),
        box_at("past it", -179.995, -19),
        box_at("east end", east - 0.02, -18),
        box_at("west of it", west - 0.02, -18),
        box_at("east of it", east + 0.01, -18),
        box_at("far side", 0, -18),
        box_at("north of it", 179, north + 0.01),
    )

    def within(path: str, box: str, plural: str) -> set[str]:
        found = service.get(path, params={"bbox": box})[plural]
        return {one["properties"]["ref"] if plural == "features" else one["ref"] for one in found}

    inside = {"west end", "middle", "past it", "east end"}
    fiji = f"{west},{south},{east},{north}"
    assert within("/v1/parcels", fiji, "features") == inside
    # The same numbers the other way round are the rest of the world.
    rest = within("/v1/parcels", f"{east},{south},{west},{north}", "features")
    assert rest == {"west of it", "east of it", "far side"}
    # The tests' tile lies at 15 degrees east.
    service.post_scene(SCENE, uniform_scene(tmp_path / "s", {"red": 0.1, "nir": 0.4}, cells=4))
    assert within("/v1/scenes", fiji, "scenes") == set()
    assert within("/v1/scenes", "14,49,-178,50", "scenes") == {"s1"}


def turn_of(ring: list[list[float]]) -> float:
    """Return twice the signed area of a ring (shoelace formula): above 0 is counter-clockwise."""
    x, y = np.array(ring).T
    return float((x[:-1] * y[1:] - x[1:] * y[:-1]).sum())


@cases("rfc7946_ring")
def test_rings_are_taken_in_either_direction_and_answered_in_the_right_one(
    service: Service, row: Row
) -> None:
    assert "readers must not reject wrong winding" in row["expected"]
    outer = [[15.0, 49.6], [15.004, 49.6], [15.004, 49.604], [15.0, 49.604], [15.0, 49.6]]
    inner = [[15.001, 49.601], [15.001, 49.603], [15.003, 49.603], [15.003, 49.601]]
    inner.append(inner[0])
    assert turn_of(outer) > 0 > turn_of(inner)
    areas = set()
    for number, rings in enumerate(
        [[outer, inner], [outer[::-1], inner], [outer, inner[::-1]], [outer[::-1], inner[::-1]]]
    ):
        ref = f"ring-{number}"
        geometry = {"type": "Polygon", "coordinates": rings}
        answer = service.put_parcels({**box_at(ref, 0, 0), "geometry": geometry})
        assert answer.json()["created"] == 1, answer.text
        told = service.get(f"/v1/parcels/{ref}")
        exterior, hole = told["geometry"]["coordinates"]
        assert turn_of(exterior) > 0 > turn_of(hole)
        assert exterior[0] == exterior[-1]
        areas.add(told["properties"]["area_ha"])
    assert len(areas) == 1
    for rings in ([outer[:-1]], [[outer[0], outer[1], outer[0]]], [outer, inner[:-1]]):
        geometry = {"type": "Polygon", "coordinates": rings}
        answer = service.put_parcels({**box_at("open", 0, 0), "geometry": geometry})
        assert answer.status_code == 422
        (error,) = answer.json()["errors"]
        assert error["pointer"] == f"/features/0/geometry/coordinates/{len(rings) - 1}"


@cases("rfc7946_crs")
def test_positions_are_longitude_and_latitude_and_a_crs_member_is_not_ignored(
    service: Service, row: Row
) -> None:
    assert row["expected"].startswith("longitude, latitude order in WGS 84")
    service.put_parcels(box_at("A", 15, 49.6))
    for bbox, count in (("14.9,49.5,15.1,49.7", 1), ("49.5,14.9,49.7,15.1", 0)):
        assert len(service.get("/v1/parcels", params={"bbox": bbox})["features"]) == count
    # Old files name their system in `crs`. To ignore it could move every parcel, so it is refused.
    named = {"type": "name", "properties": {"name": "EPSG:25833"}}
    body = {"type": "FeatureCollection", "features": [box_at("B", 15, 49.6)]}
    geometry = {**box_at("B", 15, 49.6)["geometry"], "crs": named}
    for sent, pointer in (
        ({**body, "crs": named}, "/crs"),
        ({**body, "features": [box_at("B", 15, 49.6, crs=named)]}, "/features/0/crs"),
        ({**body, "features": [box_at("B", 15, 49.6, geometry=geometry)]}, "/features/0/geometry"),
    ):
        answer = service.call("PUT", "/v1/parcels", json=sent)
        assert answer.status_code == 422, answer.text
        assert [error["pointer"] for error in answer.json()["errors"]] == [pointer]
    assert service.call("GET", "/v1/parcels/B").status_code == 404
