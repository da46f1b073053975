"""What a TIFF's header says about its layout, read without a raster library.

A header decides how much memory and time a library will spend, so it is judged first.
Only the first directory is read, and only the tags that say how the pixels lie.
Source: TIFF 6.0 (Adobe, 1992); BigTIFF layout as in the libtiff documentation;
compression 50000 (ZSTD) is libtiff's own registration.
"""

import struct
from collections.abc import Mapping
from dataclasses import dataclass
from typing import BinaryIO, Final, Literal

import numpy as np
from numpy.typing import NDArray

from service.tiles.layout import Layout, Truncated, Unsupported, read_at

_WIDTH, _LENGTH, _BITS, _COMPRESSION = 256, 257, 258, 259
_STRIP_OFFSETS, _SAMPLES, _ROWS_PER_STRIP, _STRIP_COUNTS = 273, 277, 278, 279
_PLANAR, _TILE_WIDTH, _TILE_LENGTH, _TILE_OFFSETS, _TILE_COUNTS = 284, 322, 323, 324, 325
_FORMAT = 339
_TAGS: Final = frozenset(
    {_WIDTH, _LENGTH, _BITS, _COMPRESSION, _STRIP_OFFSETS, _SAMPLES, _ROWS_PER_STRIP}
    | {_STRIP_COUNTS, _PLANAR, _TILE_WIDTH, _TILE_LENGTH, _TILE_OFFSETS, _TILE_COUNTS, _FORMAT}
)
_TYPES: Final = {1: "u1", 3: "u2", 4: "u4", 16: "u8"}
_MAX_ENTRIES: Final = 1024

COMPRESSIONS: Final[Mapping[int, str]] = {
    1: "none",
    5: "LZW",
    8: "DEFLATE",
    32773: "PackBits",
    32946: "DEFLATE",
    50000: "ZSTD",
}
_DTYPES: Final = {
    (1, 8): "uint8",
    (2, 8): "int8",
    (1, 16): "uint16",
    (2, 16): "int16",
    (1, 32): "uint32",
    (2, 32): "int32",
    (3, 32): "float32",
    (3, 64): "float64",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Entry:
    """One directory entry: `count` values of NumPy type `dtype` that begin at `position`."""

    dtype: str
    count: int
    position: int


class TiffFile:
    """A TIFF's first directory.

    Parameters
    ----------
    file
        Open for reading in binary.
    size
        Bytes of the file.
    """

    def __init__(self, file: BinaryIO, size: int) -> None:
        self._file = file
        self._size = size
        head = read_at(file, 0, 8)
        self._order: Literal["<", ">"] = "<" if head[:2] == b"II" else ">"
        self._big = struct.unpack(self._order + "H", head[2:4])[0] == 43
        self._entries = self._directory(head)

    def _directory(self, head: bytes) -> dict[int, _Entry]:
        if self._big:
            (start,) = struct.unpack(self._order + "Q", read_at(self._file, 8, 8))
        else:
            (start,) = struct.unpack(self._order + "L", head[4:8])
        count_format, entry_format, inline = ("Q", "HHQ", 8) if self._big else ("H", "HHL", 4)
        count_bytes = struct.calcsize("=" + count_format)
        (count,) = struct.unpack(
            self._order + count_format, read_at(self._file, start, count_bytes)
        )
        if count > _MAX_ENTRIES:
            raise Unsupported("its header has too many entries")
        step = struct.calcsize("=" + entry_format) + inline
        table = read_at(self._file, start + count_bytes, count * step)
        entries = {}
        for index in range(count):
            tag, kind, values = struct.unpack_from(self._order + entry_format, table, index * step)
            if tag not in _TAGS or kind not in _TYPES:
                continue
            place = index * step + step - inline
            position = start + count_bytes + place
            if values * np.dtype(_TYPES[kind]).itemsize > inline:
                (position,) = struct.unpack_from(
                    self._order + ("Q" if self._big else "L"), table, place
                )
            entries[tag] = _Entry(dtype=_TYPES[kind], count=values, position=position)
        return entries

    def _values(self, tag: int, limit: int) -> NDArray[np.int64]:
        """Return up to `limit` values of a tag; none if the tag is not there."""
        entry = self._entries.get(tag)
        if entry is None:
            return np.empty(0, dtype=np.int64)
        dtype = np.dtype(entry.dtype).newbyteorder(self._order)
        raw = read_at(self._file, entry.position, min(entry.count, limit) * dtype.itemsize)
        values = np.frombuffer(raw, dtype).astype(np.uint64)
        # Anything above a file's possible size is cut to it: too large either way.
        return np.minimum(values, np.uint64(np.iinfo(np.int64).max)).astype(np.int64)

    def _value(self, tag: int, default: int | None = None) -> int:
        values = self._values(tag, 1)
        if values.size:
            return int(values[0])
        if default is None:
            raise Unsupported("its header lacks an entry that says how the pixels lie")
        return default

    def layout(self) -> Layout:
        """Return how the pixels lie; raise `Unsupported` for what the service does not read."""
        rows, cols = self._value(_LENGTH), self._value(_WIDTH)
        bands = self._value(_SAMPLES, 1)
        if self._value(_COMPRESSION, 1) not in COMPRESSIONS:
            raise Unsupported("its compression is not one of none, LZW, DEFLATE, PackBits, ZSTD")
        dtype = self._dtype(bands)
        if _TILE_WIDTH in self._entries:
            block = (self._value(_TILE_LENGTH), self._value(_TILE_WIDTH))
        else:
            block = (min(self._value(_ROWS_PER_STRIP, rows), rows), cols)
        if min(rows, cols, bands, *block) < 1:
            raise Unsupported("its header gives a size of zero")
        interleaved = bands if self._value(_PLANAR, 1) == 1 else 1
        down, across = -(-rows // block[0]), -(-cols // block[1])
        return Layout(
            shape=(rows, cols),
            bands=bands,
            dtype=dtype,
            block_shape=block,
            block_bytes=block[0] * block[1] * np.dtype(dtype).itemsize * interleaved,
            blocks=down * across * (bands // interleaved),
        )

    def _dtype(self, bands: int) -> str:
        # A header that claims more bands than the budget allows is refused right after.
        bits = set(self._values(_BITS, min(bands, 65_536)).tolist()) or {1}
        formats = set(self._values(_FORMAT, min(bands, 65_536)).tolist()) or {1}
        kinds = [(kind, width) for kind in formats for width in bits]
        if len(kinds) != 1 or kinds[0] not in _DTYPES:
            raise Unsupported(
                "its numbers are not one real type of 8, 16, 32 or 64 bits for all bands"
            )
        return _DTYPES[kinds[0]]

    def check_complete(self, layout: Layout) -> None:
        """Raise `Truncated` if a block lies beyond the end of the file.

        Blocks of zero bytes are legal: GDAL writes them for parts without data.
        """
        tiled = _TILE_WIDTH in self._entries
        # One value more than expected, so that a list that is too long shows.
        offsets = self._values(_TILE_OFFSETS if tiled else _STRIP_OFFSETS, layout.blocks + 1)
        counts = self._values(_TILE_COUNTS if tiled else _STRIP_COUNTS, layout.blocks + 1)
        if not offsets.size == counts.size == layout.blocks:
            raise Unsupported("its list of blocks does not fit its size")
        beyond = (offsets > self._size) | (counts > self._size - np.minimum(offsets, self._size))
        if bool((beyond & (counts > 0)).any()):
            raise Truncated
