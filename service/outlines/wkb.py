"""Well-known binary, walked before it is believed.

A hundred kilobytes of multipolygons nested in one another ended the process inside the
geometry library (a stack overflow, seen with GEOS 3.14). So the structure is checked here first:
polygons or multipolygons of polygons, as many rings and positions as there are bytes for.

Layout: OGC 06-103r4 (Simple feature access, part 1), clause 8.
"""

import struct
from typing import Final

import shapely
from shapely.errors import GEOSException
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.zonal.boundary import broken_ring, check_vertices, not_polygonal

_POLYGON: Final = 3
_MULTIPOLYGON: Final = 6
_HEAD_BYTES: Final = 5
_COUNT_BYTES: Final = 4
_NUMBER_BYTES: Final = 8
_OLD_Z: Final = 0x80000000
"""How heights were marked before the standard had them."""
_DIMENSIONS: Final = {0: 2, 1: 3, 2: 3, 3: 4}


class _Walk:
    """A place in a blob that never leaves it."""

    def __init__(self, blob: bytes, pointer: str) -> None:
        self._blob = blob
        self._at = 0
        self._pointer = pointer
        self._order = "<"
        self.vertices = 0

    def head(self) -> tuple[int, int]:
        """Return kind and dimensions of the geometry that begins here."""
        start = self._skip(_HEAD_BYTES)
        if self._blob[start] > 1:
            raise self._damaged()
        self._order = "<" if self._blob[start] else ">"
        (code,) = struct.unpack_from(f"{self._order}I", self._blob, start + 1)
        is_old = bool(code & _OLD_Z)
        extra, kind = divmod(code & ~_OLD_Z, 1000)
        if kind not in (_POLYGON, _MULTIPOLYGON) or extra not in _DIMENSIONS:
            raise not_polygonal(self._pointer)
        return kind, 3 if is_old else _DIMENSIONS[extra]

    def polygon(self, dimensions: int) -> None:
        """Walk over a polygon's rings."""
        for _ in range(self.count()):
            positions = self.count()
            self.vertices += positions
            check_vertices(self.vertices, self._pointer)
            self._skip(positions * dimensions * _NUMBER_BYTES)

    def count(self) -> int:
        """Return a count; as many things need at least as many counts of their own."""
        start = self._skip(_COUNT_BYTES)
        (count,) = struct.unpack_from(f"{self._order}I", self._blob, start)
        if count * _COUNT_BYTES > len(self._blob) - self._at:
            raise self._damaged()
        return int(count)

    def _skip(self, length: int) -> int:
        start, self._at = self._at, self._at + length
        if self._at > len(self._blob):
            raise self._damaged()
        return start

    def _damaged(self) -> RejectedInput:
        return RejectedInput.at(
            self._pointer, "The geometry is damaged or cut short.", code="invalid-geometry"
        )


def shape_from_wkb(blob: bytes, *, pointer: str) -> BaseGeometry:
    """Return the polygon or multipolygon that well-known binary holds, heights and all.

    Raises
    ------
    RejectedInput
        It is another kind of geometry, has too many vertices, or is damaged.
    """
    walk = _Walk(blob, pointer)
    kind, dimensions = walk.head()
    if kind == _POLYGON:
        walk.polygon(dimensions)
    else:
        for _ in range(walk.count()):
            kind, dimensions = walk.head()
            if kind != _POLYGON:
                raise not_polygonal(pointer)
            walk.polygon(dimensions)
    try:
        return shapely.from_wkb(blob)
    except GEOSException as error:
        raise broken_ring(pointer) from error
