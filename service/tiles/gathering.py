"""Gathering the numbers of wanted cells out of one file, row of blocks by row of blocks.

A file is decoded forwards and at most once. Only blocks that hold a wanted cell are, into a
buffer that is used again; what no cell wants is dropped at once, so that a band is never held.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import DTypeLike, NDArray
from rasterio.errors import RasterioError
from rasterio.windows import Window

from service.errors import RejectedInput
from service.spectral.gathered import Layer
from service.tiles.buffering import CloudBuffer
from service.tiles.intake import Header
from service.tiles.parts import Area, blocks_with, take_cells, wanted_areas
from service.tiles.scene_source import BandSource
from service.zonal.plan import row_starts

Numbers = NDArray[Any]

BUFFER_BYTES: Final = 8 * 2**20
"""Memory for what is read at once, unless a single block takes more."""


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenFile:
    """One open file and the layers that are read from it, together.

    Attributes
    ----------
    dataset
        The open raster.
    header
        What its header says.
    layers
        What is read from it.
    cloud_buffer
        Which cells count as near cloud by its quality layer, None without.
    """

    dataset: Any
    header: Header
    layers: tuple[BandSource, ...]
    cloud_buffer: CloudBuffer | None = None

    @property
    def pointer(self) -> str:
        """JSON pointer for faults of this file."""
        return self.layers[0].pointer

    @property
    def dtype(self) -> np.dtype[Any]:
        """A type for the numbers of all its layers."""
        dtypes: list[DTypeLike] = [self.header.dtypes[layer.band - 1] for layer in self.layers]
        return np.result_type(*dtypes)

    def read(self, area: Area, into: Numbers) -> None:
        """Decode an area, shape (layers, rows, cols).

        Raises
        ------
        RejectedInput
            With code ``unreadable-pixels``.
        """
        window = Window(area.col0, area.row0, area.col1 - area.col0, area.row1 - area.row0)
        try:
            self.dataset.read([layer.band for layer in self.layers], window=window, out=into)
        except RasterioError as error:
            raise RejectedInput.at(
                self.pointer,
                "The pixels of this file can't be decoded, so it is damaged; send it again.",
                code="unreadable-pixels",
            ) from error


class Cursor:
    """Goes through a file once and holds the numbers of the cells that are still wanted.

    Parameters
    ----------
    file
        The file.
    cells
        The cells that are wanted of it, ascending and unique, on its own grid.
    buffer
        Room for what is read at once, uint8; shared by all files of a scene.
    """

    def __init__(self, file: OpenFile, cells: NDArray[np.int32], buffer: NDArray[np.uint8]) -> None:
        self.file = file
        self._cells = cells
        self._starts = row_starts(cells, file.header.grid.shape)
        self._row = 0
        self._first = 0
        self._numbers = np.empty((len(file.layers), 0), dtype=file.dtype)
        self._known = np.empty(0, dtype=np.bool_)
        self._near = np.empty(0, dtype=np.bool_)
        self._buffer = buffer

    def go(self, keep: int, first: int, last: int, wanted: NDArray[np.bool_]) -> None:
        """Let go of cells before the one at `keep`, and read on until that before `last`.

        `wanted` says which cells from `first` on have to be read; those beyond its end have,
        and so have those from `keep` to `first`, which are for later.
        """
        self._drop(keep)
        wanted = np.concatenate([np.ones(first - keep, dtype=np.bool_), wanted])
        held = self._first + self._numbers.shape[1]
        if last <= held:
            return
        rows, cols = self.file.header.grid.shape
        height, width = self.file.header.block_shape
        stop = int(self._cells[last - 1]) // cols + 1
        end = min(-(-stop // height) * height, rows)
        self._grow(int(self._starts[end]))
        found = blocks_with(
            self._cells, self._starts, self._row, end, cols, height, width, keep, wanted
        )
        within = Area(row0=self._row, row1=end, col0=0, col1=cols)
        cell_bytes = len(self.file.layers) * self.file.dtype.itemsize
        most = max(1, BUFFER_BYTES // cell_bytes)
        self._known[held - self._first :] = wanted.all()
        for area in wanted_areas(within, (height, width), found, most_cells=most):
            self._take(area, is_all=bool(wanted.all()))
        self._row = end

    def layers(self, first: int, last: int, at: NDArray[np.int32] | None) -> list[Layer]:
        """Return the layers of some of the cells that are held, from `first` to `last`.

        `at` says which of the file's cells each wanted cell takes, -1 for none; None stands for
        one to one.
        """
        part = slice(first - self._first, last - self._first)
        known = self._known[part]
        return [
            Layer(numbers=numbers[part], at=at, first=first, known=None if known.all() else known)
            for numbers in self._numbers
        ]

    def near_cloud(self, first: int, last: int, at: NDArray[np.int32] | None) -> NDArray[np.bool_]:
        """Return which wanted cells are near cloud, as `layers`."""
        part = slice(first - self._first, last - self._first)
        return Layer(numbers=self._near[part], at=at, first=first).spread(self._near[part])

    def _drop(self, first: int) -> None:
        gone = min(first - self._first, self._numbers.shape[1])
        if gone > 0:
            self._numbers = self._numbers[:, gone:].copy()
            self._known = self._known[gone:].copy()
            self._near = self._near[gone:].copy()
            self._first += gone

    def _grow(self, last: int) -> None:
        more = last - self._first - self._numbers.shape[1]
        layers = np.zeros((len(self.file.layers), more), dtype=self.file.dtype)
        self._numbers = np.concatenate([self._numbers, layers], axis=1)
        self._known = np.concatenate([self._known, np.zeros(more, dtype=np.bool_)])
        self._near = np.concatenate([self._near, np.zeros(more, dtype=np.bool_)])

    def _take(self, area: Area, *, is_all: bool) -> None:
        cloud = self.file.cloud_buffer
        around = area if cloud is None else cloud.around(area, self.file.header.grid.shape)
        read = self._room(around)
        self.file.read(around, read)
        for layer, numbers in enumerate(self._numbers):
            self._put(read[layer], around, area, numbers)
        if not is_all:
            self._put(np.ones(read.shape[1:], dtype=np.bool_), around, area, self._known)
        if cloud is not None:
            place = [layer.role for layer in self.file.layers].index("quality")
            self._put(cloud.near(read[place]), around, area, self._near)

    def _room(self, area: Area) -> Numbers:
        shape = (len(self.file.layers), area.row1 - area.row0, area.col1 - area.col0)
        size = int(np.prod(shape)) * self.file.dtype.itemsize
        if size > len(self._buffer):
            self._buffer = np.empty(size, dtype=np.uint8)
        room: Numbers = self._buffer[:size].view(self.file.dtype).reshape(shape)
        return room

    def _put(self, read: Numbers, around: Area, area: Area, into: Numbers) -> None:
        # Bits only are moved, so one compiled function serves all types of one size.
        bits = np.dtype(f"u{read.dtype.itemsize}")
        take_cells(
            np.ascontiguousarray(read).view(bits),
            around.row0,
            around.col0,
            (area.row0, area.row1, area.col0, area.col1),
            self._cells,
            self._starts,
            self.file.header.grid.shape[1],
            self._first,
            into.view(bits),
        )
