"""GeoPackages as others write them (OGC 12-128r18): headers, systems, tables beside the layer."""

import sqlite3
import struct
import time
from pathlib import Path
from typing import Any

import pytest
import shapely
from pyproj import CRS

from service.errors import RejectedInput
from service.outlines.features import Drawing
from service.outlines.files import open_outlines
from service.outlines.geopackage import _Database
from service.zonal.boundary import Outline
from tests.outline_files import (
    FEATURES,
    Drawn,
    field_at,
    geopackage,
    gpkg_blob,
    in_degrees,
    new_geopackage,
)

DRAWING = Drawing(repair=False, area_limit_ha=1e6)
SQUARE = shapely.box(500_000, 5_499_900, 500_100, 5_500_000)


def outlines(path: Path) -> list[Outline]:
    with open_outlines(path) as file:
        return [file.outline(one, DRAWING, pointer="/g") for one in file.features(["ref"])]


def of_blobs(path: Path, *blobs: bytes | str | int | None) -> Path:
    """Write a GeoPackage with these values as geometries."""
    connection, _ = new_geopackage(path)
    connection.executescript(FEATURES)
    connection.executemany("INSERT INTO fields (geom, ref) VALUES (?, 'x')", [(b,) for b in blobs])
    connection.commit()
    connection.close()
    return path


def refusal(path: Path) -> tuple[str | None, str]:
    """Return the pointer and the detail of what a file, or its first outline, is refused for."""
    with pytest.raises(RejectedInput) as caught:
        outlines(path)
    assert str(path) not in caught.value.detail
    return caught.value.faults[0].pointer, caught.value.detail


def test_rows_come_in_their_order_with_their_numbers(tmp_path: Path) -> None:
    path = geopackage(
        tmp_path / "a.gpkg", field_at("A", number=7, share=0.5), field_at("B", title="Ü")
    )
    connection = sqlite3.connect(path)
    connection.execute("UPDATE fields SET fid = 40 WHERE ref = 'A'")
    # An index over all that is asked for must not change the order.
    connection.execute("CREATE INDEX by_ref ON fields (ref, title, number, share, geom)")
    connection.commit()
    connection.close()
    with open_outlines(path) as file:
        assert file.count() == 2
        found = [(f.name, dict(f.attributes)) for f in file.features(["ref", "number", "share"])]
        assert [file.has_field(name) for name in ("ref", "fid", "REF", "geom", "x")] == [
            *(True, True),
            *(False, False, False),
        ]
    assert found == [
        ("Row 2", {"ref": "B", "number": None, "share": None}),
        ("Row 40", {"ref": "A", "number": 7, "share": 0.5}),
    ]


def test_geometries_are_read_behind_any_header(tmp_path: Path) -> None:
    wkb = shapely.to_wkb(SQUARE, byte_order=1)
    box = struct.pack("<4d", 500_000, 500_100, 5_499_900, 5_500_000)
    headers = [
        struct.pack("<2sBBi", b"GP", 0, 0x01, 32633),
        struct.pack(">2sBBi", b"GP", 0, 0x00, 32633),
        struct.pack("<2sBBi", b"GP", 0, 0x03, 32633) + box,
        struct.pack("<2sBBi", b"GP", 0, 0x05, 32633) + box + bytes(16),
        struct.pack("<2sBBi", b"GP", 0, 0x07, 32633) + box + bytes(16),
        struct.pack("<2sBBi", b"GP", 0, 0x09, 32633) + box + bytes(32),
        struct.pack("<2sBBi", b"GP", 0, 0x01, 0),
        struct.pack("<2sBBi", b"GP", 0, 0x01, -1),
    ]
    found = outlines(of_blobs(tmp_path / "a.gpkg", *(head + wkb for head in headers)))
    assert len(found) == len(headers)
    for outline in found:
        assert outline.geometry.equals(in_degrees(SQUARE))


@pytest.mark.parametrize("flavor", ["iso", "extended"])
def test_heights_are_dropped(tmp_path: Path, flavor: str) -> None:
    drawn = Drawn(shape=shapely.force_3d(SQUARE, 300.0), attributes={"ref": "A"})
    (outline,) = outlines(geopackage(tmp_path / "a.gpkg", drawn, flavor=flavor))
    assert not outline.geometry.has_z
    assert outline.geometry.equals(in_degrees(SQUARE))


def test_geometries_that_are_none_are_refused_alone(tmp_path: Path) -> None:
    good = gpkg_blob(SQUARE, 32633)
    for value, says in [
        (None, "Polygon or MultiPolygon"),
        ("POLYGON", "Polygon or MultiPolygon"),
        (7, "Polygon or MultiPolygon"),
        (b"", "no GeoPackage geometry"),
        (good[:7], "no GeoPackage geometry"),
        (b"XX" + good[2:], "no GeoPackage geometry"),
        (good[:2] + b"\x01" + good[3:], "no GeoPackage geometry"),
        (good[:3] + b"\x0b" + good[4:], "no GeoPackage geometry"),
        (good[:3] + b"\x23" + good[4:], "no GeoPackage geometry"),
        (good[:30], "damaged"),
        (gpkg_blob(SQUARE, 4326), "another coordinate reference system"),
        (gpkg_blob(shapely.Polygon(), 32633), "Polygon or MultiPolygon"),
        (gpkg_blob(shapely.Point(500_000, 5_500_000), 32633), "points, lines"),
    ]:
        pointer, detail = refusal(of_blobs(tmp_path / "a.gpkg", value))
        assert pointer == "/g"
        assert says in detail, value


def test_the_system_is_that_of_the_code_else_of_the_definition(tmp_path: Path) -> None:
    drawn = Drawn(shape=SQUARE, attributes={"ref": "A"})
    utm = CRS.from_epsg(32633).to_wkt("WKT1_GDAL")
    expected = in_degrees(SQUARE)
    for options in (
        {"epsg": 32633},
        {"epsg": 32633, "srs_id": 5},
        {"epsg": None, "wkt": utm},
        # A code that the tables here do not have.
        {"epsg": 998_877, "wkt": utm},
    ):
        (outline,) = outlines(geopackage(tmp_path / "a.gpkg", drawn, **options))
        assert shapely.hausdorff_distance(outline.geometry, expected) < 1e-9


def test_a_layer_in_no_known_system_is_refused(tmp_path: Path) -> None:
    drawn = Drawn(shape=SQUARE, attributes={"ref": "A"})
    for options in ({"srs_id": 0}, {"srs_id": -1}, {"epsg": None}, {"epsg": 998_877}):
        path = geopackage(tmp_path / "a.gpkg", drawn, **options)
        with pytest.raises(RejectedInput) as caught:
            outlines(path)
        assert caught.value.code == "no-crs"
    path = geopackage(tmp_path / "b.gpkg", drawn)
    connection = sqlite3.connect(path)
    connection.execute("DELETE FROM gpkg_spatial_ref_sys WHERE srs_id = 32633")
    connection.commit()
    connection.close()
    assert refusal(path)[0] == "/file"


def test_a_database_that_is_no_geopackage_with_one_layer_is_refused(tmp_path: Path) -> None:
    plain = tmp_path / "plain.gpkg"
    connection = sqlite3.connect(plain)
    connection.execute("CREATE TABLE x (y)")
    connection.commit()
    connection.close()
    assert "no GeoPackage" in refusal(plain)[1]
    for change, says in [
        ("DELETE FROM gpkg_contents", "one layer"),
        ("DELETE FROM gpkg_geometry_columns", "one layer"),
        ("UPDATE gpkg_contents SET data_type = 'tiles'", "one layer"),
        ("DROP TABLE gpkg_contents", "lacks a table"),
        ("DROP TABLE fields", "lacks a table"),
        ("UPDATE gpkg_geometry_columns SET column_name = 'shape'", "lacks a table"),
        (
            "INSERT INTO gpkg_contents (table_name, data_type) VALUES ('two', 'features'); "
            "INSERT INTO gpkg_geometry_columns VALUES ('two', 'geom', 'POLYGON', 32633, 0, 0)",
            "one layer",
        ),
    ]:
        path = geopackage(tmp_path / "a.gpkg", field_at("A"))
        connection = sqlite3.connect(path)
        connection.executescript(change)
        connection.close()
        pointer, detail = refusal(path)
        assert pointer == "/file"
        assert says in detail, change


def test_what_programs_put_beside_a_layer_does_no_harm(tmp_path: Path) -> None:
    """A spatial index with its triggers, a view, an attribute table, a write-ahead journal."""
    path = geopackage(tmp_path / "a.gpkg", field_at("A"), field_at("B", col=20))
    connection = sqlite3.connect(path)
    connection.executescript(
        """
        PRAGMA journal_mode = WAL;
        CREATE VIRTUAL TABLE rtree_fields_geom USING rtree (id, minx, maxx, miny, maxy);
        INSERT INTO rtree_fields_geom VALUES (1, 0, 1, 0, 1);
        CREATE TRIGGER rtree_fields_geom_delete AFTER DELETE ON fields
          BEGIN DELETE FROM rtree_fields_geom WHERE id = OLD.fid; END;
        CREATE VIEW named AS SELECT ref FROM fields;
        CREATE TABLE notes (id INTEGER PRIMARY KEY, text TEXT);
        INSERT INTO gpkg_contents (table_name, data_type) VALUES ('notes', 'attributes');
        """
    )
    connection.close()
    before = path.read_bytes()
    assert len(outlines(path)) == 2
    assert path.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["a.gpkg"]


def test_names_with_quotes_and_keywords_are_names(tmp_path: Path) -> None:
    path = geopackage(tmp_path / "a.gpkg", field_at("A"))
    connection = sqlite3.connect(path)
    odd = '"; DROP TABLE fields; --'
    connection.executescript(
        """
        ALTER TABLE fields RENAME COLUMN title TO "select";
        ALTER TABLE fields RENAME TO "of ""this"" year";
        UPDATE gpkg_contents SET table_name = 'of "this" year';
        UPDATE gpkg_geometry_columns SET table_name = 'of "this" year';
        """
    )
    quoted = odd.replace('"', '""')
    connection.execute(f'ALTER TABLE "of ""this"" year" ADD COLUMN "{quoted}" TEXT')
    changed = f'UPDATE "of ""this"" year" SET "{quoted}" = ?, "select" = ?'  # noqa: S608
    connection.execute(changed, ("x", "y"))
    connection.commit()
    connection.close()
    with open_outlines(path) as file:
        (feature,) = file.features([odd, "select", "ref"])
    values: dict[str, Any] = dict(feature.attributes)
    assert values == {odd: "x", "select": "y", "ref": "A"}


def test_text_that_is_no_utf_8_is_kept_as_what_no_text_can_hold(tmp_path: Path) -> None:
    path = geopackage(tmp_path / "a.gpkg", field_at("A"))
    connection = sqlite3.connect(path)
    connection.execute("UPDATE fields SET ref = CAST(x'41ff' AS TEXT)")
    connection.commit()
    connection.close()
    with open_outlines(path) as file:
        (feature,) = file.features(["ref"])
    assert feature.attributes["ref"] == "A\udcff"


def test_a_statement_that_takes_too_long_is_ended(tmp_path: Path) -> None:
    """The last line of defence: nothing that is read here should ever take so long."""
    path = geopackage(tmp_path / "a.gpkg", *(field_at(str(n)) for n in range(300)))
    connection = sqlite3.connect(path)
    database = _Database(connection, seconds=0.2)
    database.columns_of("fields")
    tables = ", ".join(f"fields f{n}" for n in range(8))
    endless = f"SELECT 1 FROM {tables} WHERE f0.share + f7.share < 0"  # noqa: S608
    started = time.monotonic()
    with pytest.raises(RejectedInput) as caught:
        list(database.rows(endless))
    assert "takes too long" in caught.value.detail
    assert time.monotonic() - started < 5
    connection.close()


@pytest.mark.parametrize(
    "statement",
    [
        "SELECT 1 FROM sqlite_sequence",
        "SELECT upper('a')",
        "SELECT load_extension('x')",
        "WITH RECURSIVE n(i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM n) SELECT i FROM n",
        "ATTACH 'x' AS other",
        "PRAGMA database_list",
        "INSERT INTO fields (ref) VALUES ('x')",
        "CREATE TEMP TABLE x (y)",
        "DELETE FROM fields",
    ],
)
def test_no_other_statement_than_reading_the_layer_is_let_through(
    tmp_path: Path, statement: str
) -> None:
    connection = sqlite3.connect(geopackage(tmp_path / "a.gpkg", field_at("A")))
    database = _Database(connection)
    database.columns_of("fields")
    assert database.one("SELECT ref FROM fields") == ("A",)
    with pytest.raises(RejectedInput) as caught:
        list(database.rows(statement))
    assert isinstance(caught.value.__cause__, sqlite3.DatabaseError)
    connection.close()
