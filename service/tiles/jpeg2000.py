"""What a JPEG 2000 file's header says about its layout, read without a raster library.

Source: ISO/IEC 15444-1 (boxes in annex I, SIZ marker in annex A.5.1).
"""

import struct
from collections.abc import Iterator
from typing import BinaryIO, Final

from service.tiles.layout import Layout, Truncated, Unsupported, read_at

BOX_MAGIC: Final = b"\x00\x00\x00\x0cjP  \r\n\x87\n"
CODESTREAM_MAGIC: Final = b"\xff\x4f\xff\x51"
_END_OF_CODESTREAM: Final = b"\xff\xd9"
_MAX_BOXES: Final = 1000
_MAX_COMPONENTS: Final = 16_384


class Jpeg2000File:
    """A JPEG 2000 codestream, in boxes or bare.

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
        self._start, self._end = self._codestream()

    def _codestream(self) -> tuple[int, int]:
        """Return the first and the last byte position (exclusive) of the codestream."""
        if read_at(self._file, 0, 4) == CODESTREAM_MAGIC:
            return 0, self._size
        for kind, start, end in self._boxes():
            if kind == b"jp2c":
                return start, end
        raise Truncated

    def _boxes(self) -> Iterator[tuple[bytes, int, int]]:
        position = 0
        for _ in range(_MAX_BOXES):
            if position >= self._size:
                return
            length, kind = struct.unpack(">L4s", read_at(self._file, position, 8))
            header = 8
            if length == 1:
                (length,) = struct.unpack(">Q", read_at(self._file, position + 8, 8))
                header = 16
            end = position + length if length else self._size
            if end < position + header:
                raise Unsupported("one of its boxes has an impossible length")
            yield kind, position + header, end
            position = end
        raise Unsupported("it has too many boxes")

    def layout(self) -> Layout:
        """Return how the pixels lie; raise `Unsupported` for what the service does not read."""
        marker, _, _, *sizes, components = struct.unpack(
            ">4sHH8LH", read_at(self._file, self._start, 42)
        )
        if marker != CODESTREAM_MAGIC or not 1 <= components <= _MAX_COMPONENTS:
            raise Unsupported("its header can't be read")
        x1, y1, x0, y0, tile_cols, tile_rows, tile_x0, tile_y0 = sizes
        rows, cols = y1 - y0, x1 - x0
        if min(rows, cols, tile_cols, tile_rows) < 1 or tile_x0 > x0 or tile_y0 > y0:
            raise Unsupported("its header gives an impossible size")
        block = (min(tile_rows, rows), min(tile_cols, cols))
        return Layout(
            shape=(rows, cols),
            bands=components,
            dtype=self._dtype(components),
            block_shape=block,
            # The decoder holds a tile of all components as 32-bit integers.
            block_bytes=block[0] * block[1] * 4 * components,
            blocks=-(-(y1 - tile_y0) // tile_rows) * -(-(x1 - tile_x0) // tile_cols),
        )

    def _dtype(self, components: int) -> str:
        table = read_at(self._file, self._start + 42, 3 * components)
        if len({table[3 * index : 3 * index + 3] for index in range(components)}) != 1:
            raise Unsupported("its bands differ in type or cell size")
        depth, *steps = table[:3]
        bits = (depth & 0x7F) + 1
        if steps != [1, 1] or bits > 32:
            raise Unsupported("its bands are subsampled or of an unusual type")
        # As the driver chooses it: the next larger type.
        width = 8 if bits <= 8 else 16 if bits <= 16 else 32
        return f"{'int' if depth & 0x80 else 'uint'}{width}"

    def check_complete(self, layout: Layout) -> None:  # noqa: ARG002  same call as for a TIFF
        """Raise `Truncated` if the codestream does not reach its end marker."""
        if self._end > self._size:
            raise Truncated
        if read_at(self._file, max(self._end - 2, 0), 2) != _END_OF_CODESTREAM:
            raise Truncated
