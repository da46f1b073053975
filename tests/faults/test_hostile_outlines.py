"""Files of outlines made to mislead or to exhaust: each is refused in one sentence, at once.

The attacks are those of the design notes, seen there on general vector drivers, and what else
SQLite's documentation ("Defense Against The Dark Arts"), the zip format and the projection
library would let a file do. Each is sent to the running service; nothing of it lands.
"""

import io
import resource
import sqlite3
import struct
import time
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path

import pytest
import shapely

from service.errors import RejectedInput
from service.outlines.features import Drawing, Feature
from service.outlines.files import open_outlines
from service.settings import Settings
from tests.outline_files import (
    Drawn,
    field_at,
    geojson,
    geopackage,
    gpkg_blob,
    new_geopackage,
    shapefile_members,
    zipped,
)
from tests.serving import serving

SECONDS = 20.0
MEBIBYTE = 1024**2
SQUARE = shapely.box(500_000, 5_499_900, 500_100, 5_500_000)


def scripted(path: Path, script: str, *, layer: str = "") -> Path:
    """Return a GeoPackage of whose layer a script makes something else."""
    connection, _ = new_geopackage(path)
    connection.executescript(layer or script)
    if layer:
        connection.executescript(script)
    connection.close()
    return path


def recursive_view(path: Path) -> Path:
    return scripted(
        path,
        "CREATE VIEW fields AS WITH RECURSIVE n(i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM n) "
        "SELECT i AS fid, x'' AS geom, 'a' AS ref FROM n",
    )


def view_that_claims_to_be_a_table(path: Path) -> Path:
    """Return one whose kind was changed in the schema: SQLite by itself finds it malformed."""
    recursive_view(path)
    connection = sqlite3.connect(path)
    connection.execute("PRAGMA writable_schema = ON")
    connection.execute("UPDATE sqlite_master SET type = 'table' WHERE name = 'fields'")
    connection.commit()
    connection.close()
    return path


def view_in_the_catalogue(path: Path) -> Path:
    geopackage(path, field_at("A"))
    connection = sqlite3.connect(path)
    connection.executescript(
        "DROP TABLE gpkg_contents; CREATE VIEW gpkg_contents AS WITH RECURSIVE n(i) AS "
        "(SELECT 1 UNION ALL SELECT i + 1 FROM n) "
        "SELECT 'fields' AS table_name, 'features' AS data_type FROM n"
    )
    connection.close()
    return path


def virtual_table(path: Path) -> Path:
    return scripted(path, "CREATE VIRTUAL TABLE fields USING fts5 (geom, ref)")


def generated_column(path: Path) -> Path:
    """Its expression runs where no authorizer sees it: 400 million letters a row."""
    return scripted(
        path,
        "CREATE TABLE fields (fid INTEGER PRIMARY KEY, geom BLOB, "
        "ref TEXT GENERATED ALWAYS AS (hex(zeroblob(fid * 200000000))) VIRTUAL); "
        "INSERT INTO fields (fid, geom) VALUES (1, x'00')",
    )


def table_valued_function(path: Path) -> Path:
    connection, _ = new_geopackage(path)
    for table in ("gpkg_contents", "gpkg_geometry_columns"):
        connection.execute(f"UPDATE {table} SET table_name = 'pragma_database_list'")  # noqa: S608
    connection.execute("UPDATE gpkg_geometry_columns SET column_name = 'file'")
    connection.commit()
    connection.close()
    return path


def catalogue_itself(path: Path) -> Path:
    connection, _ = new_geopackage(path)
    for table in ("gpkg_contents", "gpkg_geometry_columns"):
        connection.execute(f"UPDATE {table} SET table_name = 'sqlite_master'")  # noqa: S608
    connection.execute("UPDATE gpkg_geometry_columns SET column_name = 'sql'")
    connection.commit()
    connection.close()
    return path


def pages_in_circles(path: Path) -> Path:
    """Return a table whose inner pages all point at one leaf: millions of rows in 270 kB.

    Page layout: SQLite's "Database File Format", section 1.6 (b-tree pages).
    """
    connection, _ = new_geopackage(path)
    connection.executescript("CREATE TABLE fields (fid INTEGER PRIMARY KEY, geom BLOB, ref TEXT)")
    connection.execute("INSERT INTO fields VALUES (1, x'00', 'a')")
    connection.executemany("INSERT INTO fields (geom, ref) VALUES (x'00', ?)", [("a",)] * 20_000)
    connection.commit()
    (root,) = connection.execute(
        "SELECT rootpage FROM sqlite_master WHERE name = 'fields'"
    ).fetchone()
    (size,) = connection.execute("PRAGMA page_size").fetchone()
    connection.close()
    content = bytearray(path.read_bytes())
    start = (root - 1) * size
    assert content[start] == 5
    (cells,) = struct.unpack_from(">H", content, start + 3)
    (first_cell,) = struct.unpack_from(">H", content, start + 12)
    (child,) = struct.unpack_from(">I", content, start + first_cell)
    # A chain of pages above the root, each pointing to the one below as often as it has cells.
    below = child
    chain = []
    for level in range(4):
        page = bytearray(content[start : start + size])
        for cell in range(cells):
            (at,) = struct.unpack_from(">H", page, 12 + 2 * cell)
            struct.pack_into(">I", page, at, below)
        struct.pack_into(">I", page, 8, below)
        if level < 3:
            chain.append(page)
            below = len(content) // size + len(chain)
        else:
            content[start : start + size] = page
    for page in chain:
        content += page
    struct.pack_into(">I", content, 28, len(content) // size)
    path.write_bytes(content)
    return path


def huge_blob(path: Path) -> Path:
    connection, _ = new_geopackage(path)
    connection.executescript("CREATE TABLE fields (fid INTEGER PRIMARY KEY, geom BLOB, ref TEXT)")
    connection.execute("INSERT INTO fields VALUES (1, zeroblob(50000000), 'a')")
    connection.commit()
    connection.close()
    return path


def huge_text(path: Path) -> Path:
    connection, _ = new_geopackage(path)
    connection.executescript("CREATE TABLE fields (fid INTEGER PRIMARY KEY, geom BLOB, ref TEXT)")
    connection.execute("INSERT INTO fields VALUES (1, x'00', ?)", ("a" * 50_000_000,))
    connection.commit()
    connection.close()
    return path


def nested_multipolygons(path: Path) -> Path:
    """Parsed by the geometry library they end the process."""
    connection, number = new_geopackage(path)
    connection.executescript("CREATE TABLE fields (fid INTEGER PRIMARY KEY, geom BLOB, ref TEXT)")
    head = gpkg_blob(SQUARE, number)[:40]
    blob = head + struct.pack("<BII", 1, 6, 1) * 50_000
    connection.execute("INSERT INTO fields VALUES (1, ?, 'a')", (blob,))
    connection.commit()
    connection.close()
    return path


def cut_database(path: Path) -> Path:
    geopackage(path, *(field_at(str(n)) for n in range(500)))
    path.write_bytes(path.read_bytes()[:60_000])
    return path


def disguised(content: bytes) -> Callable[[Path], Path]:
    def write(path: Path) -> Path:
        path.write_bytes(content)
        return path

    return write


VRT = (
    b'<OGRVRTDataSource><OGRVRTLayer name="fields"><SrcDataSource>/vsicurl/http://127.0.0.1:9/x'
    b"</SrcDataSource></OGRVRTLayer></OGRVRTDataSource>"
)


def bomb_of_one_layer(path: Path) -> Path:
    """Blanks that shrink a thousandfold: 200 MiB in 200 kB."""
    members = shapefile_members([field_at("A")])
    return zipped(path, {**members, "x.dbf": members["x.dbf"] + b" " * (200 * MEBIBYTE)})


def bomb_that_lies(path: Path) -> Path:
    """Return an archive whose directory says that a member is small."""
    bomb_of_one_layer(path)
    content = bytearray(path.read_bytes())
    with zipfile.ZipFile(path) as archive:
        size = archive.getinfo("x.dbf").file_size
    for at in range(len(content) - 4):
        if content[at : at + 4] == struct.pack("<I", size):
            content[at : at + 4] = struct.pack("<I", 1_000)
    path.write_bytes(content)
    return path


def members_by_the_thousand(path: Path) -> Path:
    return zipped(path, {f"{n}.txt": b"" for n in range(5_000)})


def directory_of_a_million(path: Path) -> Path:
    """Return an archive whose end says there are few members before a long directory."""
    entry = struct.pack("<4s6H3L5H2L", b"PK\1\2", 20, 20, 0, 0, 0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0, 0)
    directory = (entry + b"x") * 1_000_000
    end = struct.pack("<4s4H2LH", b"PK\5\6", 0, 0, 5, 5, len(directory), 4, 0)
    path.write_bytes(b"PK\3\4" + directory + end)
    return path


def overlapping_members(path: Path) -> Path:
    """Return an archive whose members are all the same bytes, a thousandfold each."""
    packer = zlib.compressobj(9, zlib.DEFLATED, -15)
    plain = b" " * (100 * MEBIBYTE)
    packed = packer.compress(plain) + packer.flush()
    crc = zlib.crc32(plain)
    local = struct.pack("<4s5H3L2H", b"PK\3\4", 20, 0, 8, 0, 0, crc, len(packed), len(plain), 5, 0)
    names = (b"x.shp", b"x.dbf", b"x.prj", b"x.cpg")
    directory = b"".join(
        struct.pack(
            *("<4s6H3L5H2L", b"PK\1\2", 20, 20, 0, 8, 0, 0, crc, len(packed), len(plain), 5),
            *(0, 0, 0, 0, 0, 0),
        )
        + name
        for name in names
    )
    start = len(local) + 5 + len(packed)
    end = struct.pack("<4s4H2LH", b"PK\5\6", 0, 0, 4, 4, len(directory), start, 0)
    path.write_bytes(local + names[0] + packed + directory + end)
    return path


def paths_that_lead_out(path: Path) -> Path:
    members = shapefile_members([field_at("A")])
    return zipped(path, members, folder="../../../../")


def absolute_paths(path: Path) -> Path:
    return zipped(path, shapefile_members([field_at("A")]), folder="/etc/")


def nested_archive(path: Path) -> Path:
    inner = io.BytesIO()
    with zipfile.ZipFile(inner, "w") as archive:
        for name, content in shapefile_members([field_at("A")]).items():
            archive.writestr(name, content)
    return zipped(path, {"inner.zip": inner.getvalue()})


def cut_archive(path: Path) -> Path:
    zipped(path, shapefile_members([field_at("A")]))
    path.write_bytes(path.read_bytes()[:-30])
    return path


def changed_member(suffix: str, at: int, content: bytes) -> Callable[[Path], Path]:
    """Return a Shapefile one member of which has other bytes at a place."""

    def write(path: Path) -> Path:
        members = shapefile_members([field_at("A"), field_at("B", col=30)])
        changed = bytearray(members[f"x{suffix}"])
        changed[at : at + len(content)] = content
        return zipped(path, {**members, f"x{suffix}": bytes(changed)})

    return write


def another_kind_of_packing(path: Path) -> Path:
    with zipfile.ZipFile(path, "w", zipfile.ZIP_LZMA) as archive:
        for name, content in shapefile_members([field_at("A")]).items():
            archive.writestr(name, content)
    return path


def missing_prj(path: Path) -> Path:
    return zipped(path, shapefile_members([field_at("A")], epsg=None))


def prj_that_names_a_file(path: Path) -> Path:
    wkt = (
        'PROJCS["x",GEOGCS["g",DATUM["d",SPHEROID["s",6378137,298.257]],PRIMEM["Greenwich",0],'
        'UNIT["degree",0.0174532925199433]],PROJECTION["Mercator_1SP"],UNIT["metre",1],'
        'EXTENSION["PROJ4","+proj=merc +nadgrids=/etc/hostname +wktext"]]'
    )
    members = shapefile_members([field_at("A")], epsg=None)
    return zipped(path, {**members, "x.prj": wkt.encode()})


def deep_json(path: Path) -> Path:
    path.write_text('{"type": "FeatureCollection", "features": [' + "[" * 500_000, "utf-8")
    return path


def other_crs(path: Path) -> Path:
    name = {"type": "name", "properties": {"name": "urn:ogc:def:crs:EPSG::32633"}}
    return geojson(path, field_at("A"), crs=name)


WHOLE_FILES = [
    (recursive_view, "unreadable-outlines"),
    (view_that_claims_to_be_a_table, "unreadable-outlines"),
    (view_in_the_catalogue, "unreadable-outlines"),
    (virtual_table, "unreadable-outlines"),
    (generated_column, "unreadable-outlines"),
    (table_valued_function, "unreadable-outlines"),
    (catalogue_itself, "unreadable-outlines"),
    (pages_in_circles, "invalid-input"),
    (huge_text, "unreadable-outlines"),
    (cut_database, "unreadable-outlines"),
    (disguised(VRT), "not-outlines"),
    (disguised(b""), "not-outlines"),
    (disguised(b"\x00\x00\x27\x0a" + bytes(96)), "not-outlines"),
    (disguised(b"SQLite format 3\0"), "unreadable-outlines"),
    (disguised(b"PK\3\4"), "unreadable-outlines"),
    (disguised(b"PK\5\6" + bytes(18)), "not-outlines"),
    (disguised(b"{"), "unreadable-outlines"),
    (disguised(b"{}"), "unreadable-outlines"),
    (bomb_of_one_layer, "outlines-too-large"),
    (bomb_that_lies, "unreadable-outlines"),
    (overlapping_members, "unreadable-outlines"),
    (members_by_the_thousand, "outlines-too-large"),
    (directory_of_a_million, "outlines-too-large"),
    (paths_that_lead_out, "unreadable-outlines"),
    (absolute_paths, "unreadable-outlines"),
    (nested_archive, "unreadable-outlines"),
    (cut_archive, "unreadable-outlines"),
    (another_kind_of_packing, "unreadable-outlines"),
    (missing_prj, "no-crs"),
    (prj_that_names_a_file, "unsupported-crs"),
    # Lengths and counts that are not so: of the outlines, of a record, of the table's rows.
    (changed_member(".shp", 0, b"\0\0\0\0"), "unreadable-outlines"),
    (changed_member(".shp", 24, b"\x7f\xff\xff\xff"), "unreadable-outlines"),
    (changed_member(".shp", 104, b"\x7f\xff\xff\xff"), "unreadable-outlines"),
    (changed_member(".shp", 104, b"\xff\xff\xff\xff"), "unreadable-outlines"),
    (changed_member(".dbf", 4, b"\xff\xff\xff\xff"), "unreadable-outlines"),
    (changed_member(".dbf", 8, b"\xff\xff"), "unreadable-outlines"),
    (changed_member(".dbf", 10, b"\0\0"), "unreadable-outlines"),
    (changed_member(".dbf", 48, b"\xff"), "unreadable-outlines"),
    (deep_json, "invalid-input"),
    (other_crs, "unsupported-crs"),
]

# Of two features the second is good, or there is only one.
FEATURES = [
    (huge_blob, "10,000 vertices"),
    (nested_multipolygons, "points, lines"),
    # Counts of parts and positions that the record can't hold.
    (changed_member(".shp", 144, b"\xff\xff\xff\x7f"), "damaged"),
    (changed_member(".shp", 144, b"\0\0\0\0"), "damaged"),
    (changed_member(".shp", 148, b"\xff\xff\xff\x7f"), "10,000 vertices"),
    (changed_member(".shp", 148, b"\xff\xff\xff\xff"), "damaged"),
    (changed_member(".shp", 148, b"\x0f\x27\0\0"), "damaged"),
    (changed_member(".shp", 152, b"\x04\0\0\0"), "damaged"),
    (changed_member(".shp", 108, b"\x01\0\0\0"), "points, lines"),
    (changed_member(".shp", 172, struct.pack("<d", float("nan"))), "finite"),
]


def test_no_file_as_a_whole_does_anything_but_be_refused_at_once(
    settings: Settings, tmp_path: Path
) -> None:
    with serving(settings) as service:
        for number, (write, code) in enumerate(WHOLE_FILES):
            path = write(tmp_path / f"{number}.gpkg")
            before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
            started = time.monotonic()
            answer = service.call(
                "POST",
                "/v1/parcels/import",
                data={"ref_field": "ref"},
                files={"file": ("parcels.gpkg", path.read_bytes())},
            )
            document = answer.json()
            told = (number, write, answer.text)
            assert (answer.status_code, document["type"]) == (422, f"/problems/{code}"), told
            assert [error["pointer"] for error in document["errors"]] == ["/file"], told
            assert time.monotonic() - started < SECONDS, told
            grown_kib = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before
            assert grown_kib < 400 * 1024, told
            assert str(settings.data) not in answer.text
            path.unlink()
        assert service.get("/v1/parcels")["features"] == []
        assert [p for p in (settings.data / "files").rglob("*") if p.suffix == ".bin"] == []
        assert list((settings.data / "files" / "incoming").iterdir()) == []
        assert service.get("/healthz") is not None


@pytest.mark.parametrize(("write", "says"), FEATURES)
def test_a_feature_that_lies_is_refused_alone(
    tmp_path: Path, write: Callable[[Path], Path], says: str
) -> None:
    drawing = Drawing(repair=False, area_limit_ha=1e5)
    with open_outlines(write(tmp_path / "a")) as file:

        def outcome(feature: Feature) -> str:
            try:
                file.outline(feature, drawing, pointer="/g")
            except RejectedInput as error:
                return error.detail
            return "kept"

        first, *others = [outcome(feature) for feature in file.features(["ref"])]
    assert says in first
    assert set(others) <= {"kept"}


def test_shapes_that_lie_on_one_another_do_not_hold_the_database_up(
    settings: Settings, tmp_path: Path
) -> None:
    """Pairs grow by the square: without a limit 5,000 of them took gigabytes."""
    drawn = [Drawn(shape=SQUARE, attributes={"ref": str(number)}) for number in range(4_000)]
    path = geopackage(tmp_path / "a.gpkg", *drawn)
    with serving(settings) as service:
        before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        answer = service.call(
            "POST",
            "/v1/parcels/import",
            data={"ref_field": "ref"},
            files={"file": path.read_bytes()},
        )
        assert answer.json()["created"] == 4_000
        assert len(answer.json()["warnings"]) == 100
        assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 400 * 1024
