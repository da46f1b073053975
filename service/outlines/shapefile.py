"""Shapefiles in a zip archive: outlines, table, reference system and encoding of one layer.

Layout: ESRI Shapefile Technical Description, July 1998. Read by a reader of our own, because
no count in a record may be believed before it is held against the record's length, and a
record not before it is held against the file's.
"""

import struct
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path, PurePosixPath
from typing import IO, Final

import numpy as np
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.outlines.dbase import Table, encoding_named
from service.outlines.features import (
    FILE,
    MAX_GEOMETRY_BYTES,
    Drawing,
    Feature,
    unreadable,
    without_crs,
)
from service.outlines.projection import Projection, projection_from_wkt
from service.outlines.rings import polygons_of
from service.outlines.zipped import Archive, open_archive
from service.streams import BULK_LIMIT_ROWS, too_many_in
from service.zonal.boundary import (
    MAX_VERTICES,
    Outline,
    check_vertices,
    not_polygonal,
    outline_from_shape,
)

MAGIC: Final = b"\x00\x00\x27\x0a"
_HEAD: Final = struct.Struct(">i20xi")
_HEAD_BYTES: Final = 100
_KIND_AT: Final = 32
_RECORD_HEAD: Final = struct.Struct(">ii")
_WORD_BYTES: Final = 2
_COUNTS: Final = struct.Struct("<i32xii")
_POSITION_BYTES: Final = 16
_NULL: Final = 0
_POLYGONS: Final = (5, 15, 25)
"""Plain, with heights, with measures."""
_SMALL_MEMBER_BYTES: Final = 65_536


class Shapefile:
    """An open Shapefile layer."""

    def __init__(self, shapes: IO[bytes], table: Table, projection: Projection) -> None:
        self._shapes = shapes
        self._table = table
        self._projection = projection
        head = shapes.read(_HEAD_BYTES)
        if len(head) < _HEAD_BYTES or head[:4] != MAGIC:
            raise unreadable("The archive's .shp member is no Shapefile.")
        _, words = _HEAD.unpack_from(head)
        self._size = shapes.seek(0, 2)
        if words * _WORD_BYTES > self._size:
            raise _cut_short()
        (kind,) = struct.unpack_from("<i", head, _KIND_AT)
        if kind not in _POLYGONS:
            raise unreadable(
                "The Shapefile holds no polygons; points, lines and patches have no area to "
                "measure."
            )

    @property
    def warning(self) -> str | None:
        """What is worth knowing of the file's coordinate reference system."""
        return self._projection.warning

    def has_field(self, name: str) -> bool:
        """Whether the table has a column of text or numbers with this name."""
        return self._table.has_field(name)

    def count(self) -> int:
        """Return how many rows the table has; it may hold deleted ones."""
        if self._table.rows > BULK_LIMIT_ROWS:
            raise too_many_in(FILE)
        return self._table.rows

    def features(self, fields: Sequence[str]) -> Iterator[Feature]:
        """Yield records with their rows, in the order of both; deleted rows are left out."""
        self.count()
        contents = self._contents()
        for number, cells in enumerate(self._table.cells(fields), start=1):
            content = next(contents, None)
            if content is None:
                raise unreadable("The Shapefile has fewer outlines than rows in its table.")
            if cells is not None:
                yield Feature(name=f"Record {number}", attributes=cells, geometry=content)
        if next(contents, None) is not None:
            raise unreadable("The Shapefile has more outlines than rows in its table.")

    def _contents(self) -> Iterator[bytes | int]:
        """Yield each record's content, or only its length where that is beyond any outline."""
        at = _HEAD_BYTES
        while at < self._size:
            self._shapes.seek(at)
            head = self._shapes.read(_RECORD_HEAD.size)
            if len(head) < _RECORD_HEAD.size:
                raise _cut_short()
            length = _RECORD_HEAD.unpack(head)[1] * _WORD_BYTES
            at += _RECORD_HEAD.size + length
            if length < 0 or at > self._size:
                raise _cut_short()
            yield length if length > MAX_GEOMETRY_BYTES else self._shapes.read(length)

    def outline(self, feature: Feature, drawing: Drawing, *, pointer: str) -> Outline:
        """Return a record's outline in WGS 84."""
        content = feature.geometry
        if isinstance(content, int):
            check_vertices(MAX_VERTICES + 1, pointer)
        shape = _shape_of(content, pointer)
        return outline_from_shape(
            self._projection.to_wgs84(shape, pointer=pointer),
            pointer=pointer,
            repair=drawing.repair,
            area_limit_ha=drawing.area_limit_ha,
        )


def _shape_of(content: bytes, pointer: str) -> BaseGeometry:
    damaged = RejectedInput.at(pointer, "The record is damaged.", code="invalid-geometry")
    if len(content) < struct.calcsize("<i"):
        raise damaged
    (kind,) = struct.unpack_from("<i", content)
    if kind not in _POLYGONS:
        raise not_polygonal(pointer)
    if len(content) < _COUNTS.size:
        raise damaged
    _, parts, positions = _COUNTS.unpack_from(content)
    check_vertices(positions, pointer)
    start = _COUNTS.size + 4 * parts
    is_whole = 0 < parts <= positions and start + _POSITION_BYTES * positions <= len(content)
    if not is_whole:
        raise damaged
    begins = np.frombuffer(content, "<i4", parts, _COUNTS.size).astype(np.int64)
    if begins[0] != 0 or begins[-1] >= positions or (np.diff(begins) <= 0).any():
        raise damaged
    flat: NDArray[np.float64] = np.frombuffer(content, "<f8", 2 * positions, start)
    return polygons_of(np.split(flat.reshape(-1, 2), begins[1:]), pointer=pointer)


def _cut_short() -> RejectedInput:
    return unreadable("The Shapefile's outlines (.shp) are damaged or cut short. Write it again.")


@contextmanager
def open_zipped_shapefile(path: Path) -> Iterator[Shapefile]:
    """Open the one Shapefile in a zip archive.

    Raises
    ------
    RejectedInput
        The archive holds none or several, or lacks the table or the reference system.
    """
    with ExitStack() as stack:
        archive = stack.enter_context(open_archive(path))
        members = _members_of(archive)
        projection = projection_from_wkt(_text_of(archive, members[".prj"]))
        encoding = encoding_named(_text_of(archive, members[".cpg"])) if ".cpg" in members else None
        table = stack.enter_context(archive.member(members[".dbf"]))
        shapes = stack.enter_context(archive.member(members[".shp"]))
        yield Shapefile(shapes, Table(table, encoding=encoding), projection)


def _members_of(archive: Archive) -> dict[str, str]:
    """Return the members of the one layer by their suffix, in lower case."""
    paths = [PurePosixPath(name) for name in archive.names()]
    layers = [path for path in paths if path.suffix.lower() == ".shp"]
    if len(layers) != 1:
        raise unreadable(
            "The zip archive must hold one Shapefile (.shp, .dbf, .prj and, for its encoding, "
            ".cpg). Archives within archives are not opened."
        )
    layer = layers[0]
    members = {
        path.suffix.lower(): str(path)
        for path in paths
        if (path.parent, path.stem.lower()) == (layer.parent, layer.stem.lower())
    }
    if ".dbf" not in members:
        raise unreadable("The Shapefile lacks its table (.dbf), which holds the refs.")
    if ".prj" not in members:
        raise without_crs(
            "The Shapefile lacks its .prj file, which says in which coordinate reference system it "
            "is. Pack it too."
        )
    return members


def _text_of(archive: Archive, name: str) -> str:
    with archive.member(name) as file:
        content = file.read(_SMALL_MEMBER_BYTES + 1)
    if len(content) > _SMALL_MEMBER_BYTES:
        raise unreadable("The Shapefile's .prj or .cpg file is far too long to be one.")
    return content.decode("utf-8-sig", "replace")
