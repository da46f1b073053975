"""GeoPackage (OGC 12-128r18), read through SQLite as data from a stranger.

The library opens the file read-only and as one that never changes, so that no journal beside
it is looked for. Nothing in its schema is run: an authorizer lets statements of our own read
named tables, and refuses what comes from a view or calls a function; tables must be real ones
without generated columns, whose expressions run unseen by any authorizer (seen). Triggers run
on writes only, and nothing is written. A watch ends statements that take long, and no value
over a megabyte is loaded.
"""

import sqlite3
import struct
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

from service.errors import RejectedInput
from service.outlines.features import (
    FILE,
    MAX_GEOMETRY_BYTES,
    Drawing,
    Feature,
    unreadable,
    without_crs,
)
from service.outlines.projection import Projection, projection_from_epsg, projection_from_wkt
from service.outlines.wkb import shape_from_wkb
from service.streams import BULK_LIMIT_ROWS, too_many_in
from service.zonal.boundary import (
    MAX_VERTICES,
    Outline,
    check_vertices,
    not_polygonal,
    outline_from_shape,
)

MAGIC: Final = b"SQLite format 3\0"
_APPLICATION_IDS: Final = (b"GPKG", b"GP10", b"GP11")
_APPLICATION_ID_AT: Final = 68
_MOST_BYTES: Final = 1024 * 1024
_MOST_COLUMNS: Final = 1_000
_MOST_TEXT: Final = 400
_STEPS: Final = 1_000
_SECONDS: Final = 60.0
"""For all that SQLite does in one file; a hundred thousand rows take one."""
_CATALOGUE: Final = ("gpkg_contents", "gpkg_geometry_columns", "gpkg_spatial_ref_sys")
_FUNCTIONS: Final = ("length", "typeof")
_ENVELOPE_BYTES: Final = {0: 0, 1: 32, 2: 48, 3: 48, 4: 64}
_HEAD_BYTES: Final = 8


@dataclass(slots=True)
class _Watch:
    """Counts the seconds that SQLite is at work, and says when they are too many."""

    limit: float
    spent: float = 0.0
    since: float | None = None

    def is_over(self) -> bool:
        """Whether to interrupt; SQLite asks this every so many of its steps."""
        running = time.monotonic() - self.since if self.since is not None else 0.0
        return self.spent + running > self.limit

    @contextmanager
    def running(self) -> Iterator[None]:
        """Count the seconds of the block."""
        self.since = time.monotonic()
        try:
            yield
        finally:
            self.spent += time.monotonic() - self.since
            self.since = None


@dataclass(slots=True)
class _Guard:
    """Says what a statement may do: read tables that were found to be real ones."""

    readable: set[str] = field(default_factory=lambda: {"sqlite_master"})

    def __call__(
        self, action: int, first: str | None, second: str | None, _db: str | None, via: str | None
    ) -> int:
        """Answer SQLite for one thing that a statement would do; `via` is a view or trigger."""
        allowed = via is None and (
            action == sqlite3.SQLITE_SELECT
            or (action == sqlite3.SQLITE_READ and first in self.readable)
            or (action == sqlite3.SQLITE_FUNCTION and second in _FUNCTIONS)
            or (action == sqlite3.SQLITE_PRAGMA and first == "table_xinfo")
        )
        return sqlite3.SQLITE_OK if allowed else sqlite3.SQLITE_DENY


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layer:
    """The one table of features: its columns, and what its geometry is in."""

    table: str
    columns: frozenset[str]
    key: str | None
    geometry: str
    srs_id: int


class GeoPackage:
    """An open GeoPackage with one layer of features."""

    def __init__(self, database: "_Database", layer: _Layer, projection: Projection) -> None:
        self._database = database
        self._layer = layer
        self._projection = projection

    @property
    def warning(self) -> str | None:
        """What is worth knowing of the file's coordinate reference system."""
        return self._projection.warning

    def has_field(self, name: str) -> bool:
        """Whether the layer has a column of this name."""
        return name in self._layer.columns

    def count(self) -> int:
        """Return how many features there are, counted one by one: the pages may go in circles."""
        rows = self._database.rows(f"SELECT 1 FROM {_quoted(self._layer.table)} NOT INDEXED")  # noqa: S608
        return sum(1 for _ in _limited(rows))

    def features(self, fields: Sequence[str]) -> Iterator[Feature]:
        """Yield the rows in the table's order."""
        layer = self._layer
        geometry = _quoted(layer.geometry)
        chosen = [
            f"typeof({geometry})",
            f"length({geometry})",
            f"CASE WHEN typeof({geometry}) = 'blob' AND length({geometry}) <= "
            f"{MAX_GEOMETRY_BYTES} THEN {geometry} END",
            _quoted(layer.key) if layer.key is not None else "NULL",
        ]
        for name in fields:
            column = _quoted(name)
            # A longer text is told from a short one; none of its bytes are needed for that.
            chosen.append(
                f"CASE typeof({column}) WHEN 'blob' THEN x'' WHEN 'text' THEN "
                f"CASE WHEN length({column}) <= {_MOST_TEXT} THEN {column} "
                f"ELSE '{'x' * _MOST_TEXT}' END ELSE {column} END"
            )
        statement = f"SELECT {', '.join(chosen)} FROM {_quoted(layer.table)} NOT INDEXED"  # noqa: S608 - names found in the schema, quoted
        for kind, size, blob, key, *values in _limited(self._database.rows(statement)):
            yield Feature(
                name=f"Row {key}" if isinstance(key, int) else "",
                attributes=dict(zip(fields, values, strict=True)),
                geometry=(kind, size, blob),
            )

    def outline(self, feature: Feature, drawing: Drawing, *, pointer: str) -> Outline:
        """Return a row's outline in WGS 84."""
        kind, size, blob = feature.geometry
        if kind != "blob":
            raise not_polygonal(pointer)
        if size > MAX_GEOMETRY_BYTES:
            check_vertices(MAX_VERTICES + 1, pointer)
        shape = shape_from_wkb(self._wkb(blob, pointer), pointer=pointer)
        return outline_from_shape(
            self._projection.to_wgs84(shape, pointer=pointer),
            pointer=pointer,
            repair=drawing.repair,
            area_limit_ha=drawing.area_limit_ha,
        )

    def _wkb(self, blob: bytes, pointer: str) -> bytes:
        """Return the well-known binary behind a geometry's header (OGC 12-128r18, 2.1.3)."""
        damaged = RejectedInput.at(
            pointer, "The geometry is no GeoPackage geometry.", code="invalid-geometry"
        )
        if len(blob) < _HEAD_BYTES or blob[:2] != b"GP" or blob[2] != 0:
            raise damaged
        flags = blob[3]
        (srs_id,) = struct.unpack_from("<i" if flags & 1 else ">i", blob, 4)
        envelope = _ENVELOPE_BYTES.get(flags >> 1 & 7)
        if envelope is None or flags & 0x20:
            raise damaged
        # 0 and -1 are "undefined": then the table's word counts.
        if srs_id not in (self._layer.srs_id, 0, -1):
            raise RejectedInput.at(
                pointer,
                "The geometry names another coordinate reference system than its table.",
                code="invalid-geometry",
            )
        return blob[_HEAD_BYTES + envelope :]


class _Database:
    """A guarded connection to a stranger's database."""

    def __init__(self, connection: sqlite3.Connection, *, seconds: float = _SECONDS) -> None:
        self._connection = connection
        self._watch = _Watch(limit=seconds)
        self._guard = _Guard()
        connection.text_factory = lambda text: text.decode("utf-8", "surrogateescape")
        connection.setlimit(sqlite3.SQLITE_LIMIT_LENGTH, _MOST_BYTES)
        connection.setlimit(sqlite3.SQLITE_LIMIT_COLUMN, _MOST_COLUMNS)
        connection.setlimit(sqlite3.SQLITE_LIMIT_ATTACHED, 0)
        connection.set_progress_handler(self._watch.is_over, _STEPS)
        for pragma in ("trusted_schema=OFF", "query_only=ON", "cell_size_check=ON", "mmap_size=0"):
            self.one(f"PRAGMA {pragma}")
        connection.set_authorizer(self._guard)

    def one(self, statement: str, *values: object) -> tuple[Any, ...] | None:
        """Return the first row of a statement, if there is one."""
        return next(self.rows(statement, *values), None)

    def rows(self, statement: str, *values: object) -> Iterator[tuple[Any, ...]]:
        """Yield a statement's rows.

        Raises
        ------
        RejectedInput
            The file is damaged, the statement would do what it may not, or takes too long.
        """
        try:
            with self._watch.running():
                cursor = self._connection.execute(statement, values)
            while True:
                with self._watch.running():
                    row = cursor.fetchone()
                if row is None:
                    return
                yield row
        except (sqlite3.Error, ValueError) as error:
            raise unreadable(
                "The GeoPackage is damaged, holds a value over a megabyte in a field that is "
                "read, or takes too long to read. Write it again by another program."
            ) from error

    def columns_of(self, table: str) -> list[tuple[str, str, bool]]:
        """Return name, type and whether it is the key for each column of a real table.

        Raises
        ------
        RejectedInput
            It is a view, a virtual table, not there, or has generated columns.
        """
        found = list(
            self.rows(
                "SELECT type, rootpage, sql FROM sqlite_master WHERE name = ? COLLATE NOCASE", table
            )
        )
        # SQLite goes by the text, not by the kind and the page beside it.
        is_real = len(found) == 1 and (
            found[0][0] == "table"
            and isinstance(found[0][1], int)
            and found[0][1] > 0
            and str(found[0][2]).upper().startswith("CREATE TABLE ")
        )
        if not is_real:
            raise _no_table()
        columns = list(self.rows(f"PRAGMA table_xinfo({_quoted(table)})"))
        if not columns or any(hidden for *_, hidden in columns):
            raise _no_table()
        self._guard.readable.add(table)
        return [(name, str(kind).upper(), key > 0) for _, name, kind, _, _, key, _ in columns]


def _no_table() -> RejectedInput:
    return unreadable(
        "The GeoPackage lacks a table that it needs, or has a view, a virtual table or generated "
        "columns in its place; only real tables are read. Write the layer to a new file."
    )


@contextmanager
def open_geopackage(path: Path) -> Iterator[GeoPackage]:
    """Open a GeoPackage with one layer of features.

    Raises
    ------
    RejectedInput
        It is no GeoPackage, has no layer or several, or no coordinate reference system.
    """
    with path.open("rb") as file:
        head = file.read(_APPLICATION_ID_AT + 4)
    if head[_APPLICATION_ID_AT:] not in _APPLICATION_IDS:
        raise unreadable("The file is an SQLite database, but no GeoPackage.")
    # As one that never changes: no lock is taken and no journal beside it is believed.
    address = f"{path.absolute().as_uri()}?mode=ro&immutable=1"
    try:
        connection = sqlite3.connect(address, uri=True, isolation_level=None)
    except sqlite3.Error as error:
        raise unreadable("The GeoPackage can't be opened.") from error
    try:
        database = _Database(connection)
        layer = _layer_of(database)
        yield GeoPackage(database, layer, _projection_of(database, layer.srs_id))
    finally:
        connection.close()


def _layer_of(database: _Database) -> _Layer:
    for table in _CATALOGUE:
        database.columns_of(table)
    layers = list(
        database.rows(
            "SELECT g.table_name, g.column_name, g.srs_id FROM gpkg_geometry_columns g "
            "JOIN gpkg_contents c ON c.table_name = g.table_name "
            "WHERE c.data_type = 'features' LIMIT 2"
        )
    )
    if len(layers) != 1 or not all(isinstance(name, str) for name in layers[0][:2]):
        raise unreadable(
            "The GeoPackage must have one layer of features. Write the layer of parcels to a "
            "file of its own."
        )
    table, geometry, srs_id = layers[0]
    columns = database.columns_of(table)
    names = frozenset(name for name, _, _ in columns)
    if geometry not in names or not isinstance(srs_id, int):
        raise _no_table()
    keys = [name for name, kind, is_key in columns if is_key and kind == "INTEGER"]
    return _Layer(
        table=table,
        columns=names - {geometry},
        key=keys[0] if len(keys) == 1 else None,
        geometry=geometry,
        srs_id=srs_id,
    )


def _projection_of(database: _Database, srs_id: int) -> Projection:
    """Return the projection of a reference system, by its code, else by its definition."""
    row = database.one(
        "SELECT organization, organization_coordsys_id, definition FROM gpkg_spatial_ref_sys "
        "WHERE srs_id = ?",
        srs_id,
    )
    # 0 and -1 are reserved for systems that nobody knows.
    if row is None or srs_id in (0, -1):
        raise without_crs(
            "The GeoPackage does not say which coordinate reference system its layer is in. "
            "Write it again with one, or as WGS 84."
        )
    organization, code, definition = row
    if str(organization).upper() == "EPSG" and isinstance(code, int):
        try:
            return projection_from_epsg(code)
        except RejectedInput:
            # A code younger than the tables here may have a definition.
            pass
    is_defined = isinstance(definition, str) and definition.lower() != "undefined"
    return projection_from_wkt(definition if is_defined else "")


def _limited(rows: Iterator[tuple[Any, ...]]) -> Iterator[tuple[Any, ...]]:
    for number, row in enumerate(rows):
        if number >= BULK_LIMIT_ROWS:
            raise too_many_in(FILE)
        yield row


def _quoted(name: str) -> str:
    """Return an identifier as SQL takes it, whatever is in it."""
    escaped = name.replace('"', '""')
    return f'"{escaped}"'
