"""From a file's own reference system to WGS 84: by definition, across 180°, never by a file."""

from pathlib import Path

import numpy as np
import pyproj
import pytest
import shapely
from pyproj import CRS, Geod, Transformer
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.outlines.projection import projection_from_epsg, projection_from_wkt

NAD83_FEET = 2263


def refusal(wkt: str) -> str:
    """Return the kind of problem that a definition is refused for."""
    with pytest.raises(RejectedInput) as caught:
        projection_from_wkt(wkt)
    assert [fault.pointer for fault in caught.value.faults] == ["/file"]
    return caught.value.code


def to_wgs84(shape: BaseGeometry, epsg: int) -> BaseGeometry:
    return projection_from_epsg(epsg).to_wgs84(shape, pointer="/g")


def test_the_published_example_of_an_oblique_projection_comes_out() -> None:
    """EPSG Guidance Note 7-2 (IOGP 373-7-2), Lambert Azimuthal Equal Area: 50° N 5° E."""
    at = shapely.box(3_962_799.45, 2_999_718.85, 3_962_809.45, 2_999_728.85)
    corner = shapely.get_coordinates(to_wgs84(at, 3035))[
        shapely.get_coordinates(at).sum(axis=1).argmin()
    ]
    assert corner == pytest.approx([5.0, 50.0], abs=2e-7)


def test_feet_are_feet() -> None:
    """At this system's false origin (Snyder 1987 gives the rule, EPSG the parameters)."""
    foot_m = CRS.from_epsg(NAD83_FEET).axis_info[0].unit_conversion_factor
    assert foot_m == pytest.approx(1200 / 3937)
    west, south = 300_000 / foot_m, 60_000 / foot_m
    found = to_wgs84(shapely.box(west, south, west + 100, south + 100), NAD83_FEET)
    lon = shapely.bounds(found)[0]
    assert lon == pytest.approx(-74.0, abs=1e-4)


def test_long_edges_are_cut_so_that_they_stay_where_they_were() -> None:
    """An edge of 20 km is up to 9 m off as a chord of longitudes and latitudes."""
    shape = shapely.box(700_000, 5_500_000, 720_000, 5_500_500)
    found = to_wgs84(shape, 32633)
    back = Transformer.from_crs("OGC:CRS84", 32633, always_xy=True).transform
    spread = shapely.segmentize(found, 0.001)
    again = shapely.transform(spread, back, interleaved=False)
    assert shapely.hausdorff_distance(again, shape) < 0.05
    corners = shapely.get_coordinates(shape)
    chord = shapely.transform(
        shapely.segmentize(
            shapely.Polygon(
                np.column_stack(
                    Transformer.from_crs(32633, "OGC:CRS84", always_xy=True).transform(*corners.T)
                )
            ),
            0.001,
        ),
        back,
        interleaved=False,
    )
    assert shapely.hausdorff_distance(chord, shape) > 5


def test_a_crossing_ring_is_not_mended_on_the_way() -> None:
    crossing = shapely.Polygon(
        [(500_000, 5_500_000), (505_000, 5_505_000), (505_000, 5_500_000), (500_000, 5_505_000)]
    )
    assert not to_wgs84(crossing, 32633).is_valid


@pytest.mark.parametrize(
    ("epsg", "shape"),
    [
        # UTM zone 60 S and a Mercator around 150° E: 180° lies within.
        (32760, shapely.box(810_000, 8_100_000, 820_000, 8_110_000)),
        (3832, shapely.box(3_330_000, -1_900_000, 3_350_000, -1_890_000)),
        # Degrees that go on beyond 180.
        (4326, shapely.box(179.9, -17.0, 180.1, -16.9)),
    ],
)
def test_an_outline_across_the_antimeridian_is_cut_there(epsg: int, shape: BaseGeometry) -> None:
    """RFC 7946, section 3.1.9: one part on either side."""
    found = to_wgs84(shape, epsg)
    assert found.is_valid
    assert found.geom_type == "MultiPolygon"
    west, east = sorted(shapely.get_parts(found), key=lambda part: shapely.bounds(part)[0])
    assert shapely.bounds(west)[0] == -180
    assert shapely.bounds(west)[2] < -179
    assert shapely.bounds(east)[0] > 179
    assert shapely.bounds(east)[2] == 180
    area = abs(Geod(ellps="WGS84").geometry_area_perimeter(found)[0])
    whole = shapely.transform(found, lambda xy: np.where(xy < -90, xy + np.array([360.0, 0.0]), xy))
    other = abs(Geod(ellps="WGS84").geometry_area_perimeter(whole)[0])
    assert area == pytest.approx(other, rel=1e-9)


def test_one_beyond_the_antimeridian_is_turned_back_whole() -> None:
    found = to_wgs84(shapely.box(190, -17, 190.1, -16.9), 4326)
    assert found.equals(shapely.box(-170, -17, -169.9, -16.9).buffer(0)) or (
        shapely.hausdorff_distance(found, shapely.box(-170, -17, -169.9, -16.9)) < 1e-9
    )


def test_where_a_system_is_not_defined_the_outline_is_refused() -> None:
    projection = projection_from_epsg(32633)
    with np.errstate(invalid="ignore"):
        nowhere = shapely.Polygon([(0, 0), (1, np.nan), (1, 1), (0, 0)])
    for box in (shapely.box(5e10, 5e10, 5.1e10, 5.1e10), nowhere):
        with pytest.raises(RejectedInput) as caught:
            projection.to_wgs84(box, pointer="/g")
        assert caught.value.faults[0].pointer == "/g"
        assert "not defined" in caught.value.detail


def test_a_datum_that_nobody_knows_is_told_of() -> None:
    known = projection_from_wkt(CRS.from_epsg(25833).to_wkt("WKT1_ESRI"))
    assert known.warning is None
    unknown = projection_from_wkt(
        'GEOGCS["GCS_Unknown",DATUM["D_unknown",SPHEROID["GRS80",6378137,298.257222101]],'
        'PRIMEM["Greenwich",0],UNIT["Degree",0.017453292519943295]]'
    )
    assert unknown.warning is not None
    assert "some hundred metres" in unknown.warning
    # A shift that is written in the file is a known one.
    shifted = projection_from_wkt(
        'GEOGCS["x",DATUM["x",SPHEROID["Bessel 1841",6377397.155,299.1528128],'
        "TOWGS84[598.1,73.7,418.2,0.202,0.045,-2.455,6.7]],"
        'PRIMEM["Greenwich",0],UNIT["degree",0.0174532925199433]]'
    )
    assert shifted.warning is None


def test_heights_and_their_systems_are_left_aside() -> None:
    compound = CRS.from_user_input("EPSG:25833+7837").to_wkt()
    plain = to_wgs84(shapely.box(5e5, 5.5e6, 5.001e5, 5.5001e6), 25833)
    shape = shapely.force_3d(shapely.box(5e5, 5.5e6, 5.001e5, 5.5001e6), 300.0)
    found = projection_from_wkt(compound).to_wgs84(shape, pointer="/g")
    assert not found.has_z
    assert found.equals(plain)


@pytest.mark.parametrize("dialect", ["WKT1_ESRI", "WKT1_GDAL", "WKT2_2015", "WKT2_2019"])
@pytest.mark.parametrize("epsg", [3857, 32633, 3035, 4326])
def test_a_definition_is_read_in_each_dialect(dialect: str, epsg: int) -> None:
    crs = CRS.from_epsg(epsg)
    projection = projection_from_wkt(crs.to_wkt(dialect))
    x, y = Transformer.from_crs("OGC:CRS84", epsg, always_xy=True).transform(15.0, 49.6)
    step = 1e-4 if epsg == 4326 else 10.0
    found = projection.to_wgs84(shapely.box(x, y, x + step, y + step), pointer="/g")
    assert shapely.get_coordinates(found).min(axis=0) == pytest.approx([15.0, 49.6], abs=2e-5)


def test_a_file_without_a_system_and_kinds_that_are_not_read_are_refused() -> None:
    assert refusal("") == "no-crs"
    assert refusal(" \n") == "no-crs"
    assert refusal("EPSG:4326") == "unsupported-crs"
    assert refusal("+proj=utm +zone=33") == "unsupported-crs"
    assert refusal('LOCAL_CS["site",UNIT["metre",1]]') == "unsupported-crs"
    assert refusal(CRS.from_epsg(4978).to_wkt()) == "unsupported-crs"
    assert refusal(CRS.from_epsg(5773).to_wkt()) == "unsupported-crs"
    assert refusal("GEOGCS[" * 2_000) == "unsupported-crs"
    assert refusal("x" * 20_000) == "unsupported-crs"
    assert refusal("\0") == "unsupported-crs"
    with pytest.raises(RejectedInput):
        projection_from_epsg(999_999)


def test_no_definition_makes_the_library_open_a_file(tmp_path: Path) -> None:
    """A grid of shifts named in a definition would be opened: seen with a file that is there."""
    grid = tmp_path / "grid.gsb"
    grid.write_bytes(b"no grid")
    utm = CRS.from_epsg(32633).to_wkt("WKT2_2019")
    merc = CRS.from_epsg(3857).to_wkt("WKT1_GDAL")
    nzgd49 = CRS.from_proj4(f"+proj=longlat +ellps=intl +nadgrids={grid} +type=crs")
    method = 'METHOD["Transverse Mercator",ID["EPSG",9807]]'
    assert method in utm
    attacks = [
        merc.replace("@null", str(grid)),
        merc.replace("@null", f"@null,{grid}"),
        merc.replace("+no_defs", f"+no_defs +geoidgrids={grid}"),
        nzgd49.to_wkt("WKT2_2019"),
        nzgd49.to_wkt("WKT1_GDAL"),
        utm.replace(method, f'METHOD["PROJ hgridshift grids={grid}"]'),
    ]
    assert all(str(grid) in attack for attack in attacks)
    for attack in attacks:
        assert refusal(attack) == "unsupported-crs"
    assert "@null" in merc
    assert projection_from_wkt(merc).warning is None


def test_the_projection_library_is_kept_off_the_network() -> None:
    projection_from_wkt(CRS.from_epsg(32633).to_wkt())
    assert not pyproj.network.is_network_enabled()  # type: ignore[attr-defined]
