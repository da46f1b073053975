"""Files of outlines for tests, written by others' code or by hand from the standards.

GeoPackages by the standard library's `sqlite3`, their tables as in OGC 12-128r18 (GeoPackage
Encoding Standard 1.3.1, annex C: table definition SQL) and their geometries behind the header
of its clause 2.1.3; Shapefiles by `pyshp`; GeoJSON by `json` (RFC 7946).
"""

import io
import json
import sqlite3
import struct
import zipfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import shapefile
import shapely
from pyproj import CRS, Transformer
from shapely.geometry.base import BaseGeometry

TABLES = """
CREATE TABLE gpkg_spatial_ref_sys (
  srs_name TEXT NOT NULL,
  srs_id INTEGER NOT NULL PRIMARY KEY,
  organization TEXT NOT NULL,
  organization_coordsys_id INTEGER NOT NULL,
  definition TEXT NOT NULL,
  description TEXT
);
CREATE TABLE gpkg_contents (
  table_name TEXT NOT NULL PRIMARY KEY,
  data_type TEXT NOT NULL,
  identifier TEXT UNIQUE,
  description TEXT DEFAULT '',
  last_change DATETIME NOT NULL DEFAULT (strftime('%Y-%m-%dT%H:%M:%fZ','now')),
  min_x DOUBLE, min_y DOUBLE, max_x DOUBLE, max_y DOUBLE,
  srs_id INTEGER,
  CONSTRAINT fk_gc_r_srs_id FOREIGN KEY (srs_id) REFERENCES gpkg_spatial_ref_sys(srs_id)
);
CREATE TABLE gpkg_geometry_columns (
  table_name TEXT NOT NULL,
  column_name TEXT NOT NULL,
  geometry_type_name TEXT NOT NULL,
  srs_id INTEGER NOT NULL,
  z TINYINT NOT NULL,
  m TINYINT NOT NULL,
  CONSTRAINT pk_geom_cols PRIMARY KEY (table_name, column_name),
  CONSTRAINT uk_gc_table_name UNIQUE (table_name),
  CONSTRAINT fk_gc_tn FOREIGN KEY (table_name) REFERENCES gpkg_contents(table_name),
  CONSTRAINT fk_gc_srs FOREIGN KEY (srs_id) REFERENCES gpkg_spatial_ref_sys (srs_id)
);
INSERT INTO gpkg_spatial_ref_sys VALUES
  ('Undefined cartesian', -1, 'NONE', -1, 'undefined', NULL),
  ('Undefined geographic', 0, 'NONE', 0, 'undefined', NULL);
"""
FEATURES = """
CREATE TABLE "fields" (
  fid INTEGER PRIMARY KEY AUTOINCREMENT NOT NULL,
  geom BLOB,
  "ref" TEXT, "title" TEXT, "owner" TEXT, "grown" TEXT, "number" INTEGER, "share" REAL
);
"""
GPKG_ID = 0x47504B47
UTM = "EPSG:32633"


@dataclass(frozen=True, kw_only=True)
class Drawn:
    """A feature: its attributes, and its geometry in the file's own coordinates."""

    shape: BaseGeometry | None
    attributes: Mapping[str, Any] = field(default_factory=dict)


def field_at(
    ref: str, *, col: float = 0, row: float = 0, size: float = 10, **attributes: Any
) -> Drawn:
    """Return a square of so many 10 m cells on the tests' tile, in its own UTM coordinates."""
    x, y = 500_000 + 10 * col, 5_500_000 - 10 * row
    shape = shapely.box(x, y - 10 * size, x + 10 * size, y)
    return Drawn(shape=shape, attributes={"ref": ref, **attributes})


def in_degrees(shape: BaseGeometry, crs: str = UTM) -> BaseGeometry:
    """Return a geometry in WGS 84, by the projection library directly."""
    transformer = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
    return shapely.transform(shape, transformer.transform, interleaved=False)


def gpkg_blob(
    shape: BaseGeometry, srs_id: int, *, envelope: bool = True, flavor: str = "iso"
) -> bytes:
    """Return a GeoPackage geometry: magic, version 0, flags, srs_id, envelope, WKB."""
    west, south, east, north = (0.0, 0.0, 0.0, 0.0) if shape.is_empty else shape.bounds
    head = struct.pack("<2sBBi", b"GP", 0, 0x01 | (0x02 if envelope else 0), srs_id)
    box = struct.pack("<4d", west, east, south, north) if envelope else b""
    return head + box + shapely.to_wkb(shape, byte_order=1, flavor=flavor)


def new_geopackage(
    path: Path, *, epsg: int | None = 32633, wkt: str = "undefined", srs_id: int | None = None
) -> tuple[sqlite3.Connection, int]:
    """Make the tables of a GeoPackage with one layer; return the connection and the srs_id."""
    path.unlink(missing_ok=True)
    connection = sqlite3.connect(path)
    number = srs_id if srs_id is not None else (epsg if epsg is not None else 100_000)
    connection.execute(f"PRAGMA application_id = {GPKG_ID}")
    connection.executescript(TABLES)
    if number > 0:
        organization = ("EPSG", epsg) if epsg is not None else ("own", number)
        connection.execute(
            "INSERT INTO gpkg_spatial_ref_sys VALUES ('of the layer', ?, ?, ?, ?, NULL)",
            (number, *organization, wkt),
        )
    connection.execute(
        "INSERT INTO gpkg_contents (table_name, data_type, identifier, srs_id) "
        "VALUES ('fields', 'features', 'fields', ?)",
        (number,),
    )
    connection.execute(
        "INSERT INTO gpkg_geometry_columns VALUES ('fields', 'geom', 'GEOMETRY', ?, 2, 2)",
        (number,),
    )
    return connection, number


def geopackage(path: Path, *drawn: Drawn, flavor: str = "iso", **options: Any) -> Path:
    """Write a GeoPackage of some features."""
    connection, number = new_geopackage(path, **options)
    connection.executescript(FEATURES)
    names = ("ref", "title", "owner", "grown", "number", "share")
    connection.executemany(
        f"INSERT INTO fields (geom, {', '.join(names)}) VALUES (?, ?, ?, ?, ?, ?, ?)",  # noqa: S608
        (
            (
                None if one.shape is None else gpkg_blob(one.shape, number, flavor=flavor),
                *(one.attributes.get(name) for name in names),
            )
            for one in drawn
        ),
    )
    connection.commit()
    connection.close()
    return path


def shapefile_members(
    drawn: Sequence[Drawn],
    *,
    epsg: int | None = 32633,
    encoding: str = "utf-8",
    cpg: str | None = "UTF-8",
    kind: int = shapefile.POLYGON,
) -> dict[str, bytes]:
    """Return the members of a Shapefile as `pyshp` writes them, with ESRI's WKT beside them."""
    shp, shx, dbf = io.BytesIO(), io.BytesIO(), io.BytesIO()
    with shapefile.Writer(shp=shp, shx=shx, dbf=dbf, shapeType=kind, encoding=encoding) as writer:
        for name, length in (("ref", 40), ("title", 80), ("owner", 40), ("grown", 40)):
            writer.field(name, "C", length)
        writer.field("number", "N", 12)
        writer.field("share", "N", 12, 3)
        for one in drawn:
            if one.shape is None:
                writer.null()
            elif kind == shapefile.POLYGONZ:
                writer.polyz(_rings(one.shape, 210.5))
            elif kind == shapefile.POLYGONM:
                writer.polym(_rings(one.shape, 7.0))
            else:
                writer.shape(shapely.geometry.mapping(one.shape))
            writer.record(**{name: one.attributes.get(name) for name in _COLUMNS})
    members = {"x.shp": shp.getvalue(), "x.shx": shx.getvalue(), "x.dbf": dbf.getvalue()}
    if epsg is not None:
        members["x.prj"] = CRS.from_epsg(epsg).to_wkt("WKT1_ESRI").encode()
    if cpg is not None:
        members["x.cpg"] = cpg.encode()
    return members


def _rings(shape: BaseGeometry, third: float) -> list[list[list[float]]]:
    """Return a geometry's rings, outer ones clockwise, each position with a third number."""
    turned = shapely.orient_polygons(shape, exterior_cw=True)
    rings = [
        ring for part in shapely.get_parts(turned) for ring in (part.exterior, *part.interiors)
    ]
    return [[[x, y, third] for x, y in ring.coords] for ring in rings]


_COLUMNS = ("ref", "title", "owner", "grown", "number", "share")


def zipped(path: Path, members: Mapping[str, bytes], *, folder: str = "") -> Path:
    """Write a zip archive."""
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members.items():
            archive.writestr(f"{folder}{name}", content)
    return path


def zipped_shapefile(path: Path, *drawn: Drawn, **options: Any) -> Path:
    """Write a zipped Shapefile of some features."""
    return zipped(path, shapefile_members(drawn, **options))


def geojson(path: Path, *drawn: Drawn, **members: Any) -> Path:
    """Write a GeoJSON file of some features, with further members of the collection."""
    features = [
        {
            "type": "Feature",
            "properties": dict(one.attributes),
            "geometry": None
            if one.shape is None
            else json.loads(shapely.to_geojson(in_degrees(one.shape))),
        }
        for one in drawn
    ]
    body = {"type": "FeatureCollection", **members, "features": features}
    path.write_text(json.dumps(body), "utf-8")
    return path
