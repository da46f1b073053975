"""How a raster file's pixels lie, and what makes a header unreadable."""

from dataclasses import dataclass
from typing import BinaryIO, Protocol


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """What a header claims, before any pixel is read.

    Attributes
    ----------
    shape
        (rows, cols).
    bands
        Number of bands.
    dtype
        NumPy name of the numbers' type.
    block_shape
        (rows, cols) of the smallest part that can be decoded.
    block_bytes
        Memory that decoding one such part takes.
    blocks
        Number of such parts in the file.
    """

    shape: tuple[int, int]
    bands: int
    dtype: str
    block_shape: tuple[int, int]
    block_bytes: int
    blocks: int


class HeaderReader(Protocol):
    """What reads one format's header."""

    def layout(self) -> Layout:
        """Return how the pixels lie; raise `Unsupported` for what the service does not read."""

    def check_complete(self, layout: Layout) -> None:
        """Raise `Truncated` if the file ends before its last pixel."""


class Unsupported(Exception):
    """The file is of a kind that the service does not read; the text completes "because …"."""


class Truncated(Exception):
    """The file ends before what its header announces."""


def read_at(file: BinaryIO, position: int, count: int) -> bytes:
    """Return `count` bytes from `position`; raise `Truncated` if the file ends before."""
    end = file.seek(0, 2)
    if position + count > end:
        raise Truncated
    file.seek(position)
    return file.read(count)
