"""Reading a scene's numbers in blocks on one grid, in bounded memory.

All bands are brought to the finest of their grids. A band on another grid is taken at
the centre of each cell of that grid, nearest only, whether or not the grids nest: no
number leaves here that is not in a file. Scaling is left to the reader of the blocks.
"""

import math
from collections.abc import Iterable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
import rioxarray  # noqa: F401  registers `.rio`
import xarray as xr
from affine import Affine
from numpy.typing import DTypeLike, NDArray
from rasterio.errors import RasterioError
from rasterio.windows import Window

from service.errors import RejectedInput
from service.spectral.gathered import NEAR_CLOUD
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.buffering import CloudBuffer
from service.tiles.intake import Header, check_together, inspect, open_raster
from service.tiles.parts import Area, part_shape, places_on, wanted_areas
from service.zonal.grid import Grid

BLOCK_BYTES: Final = 64 * 2**20
"""Memory of one block, all bands together."""

# A quarter of the raster library's cache (`environment`): a row of blocks that is read
# must fit into it, because the library walks a window line by line.
_PIECE_BYTES: Final = 16 * 2**20

Numbers = NDArray[Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class BandSource:
    """Where the numbers of one band, of the quality or of the saturation layer are.

    Attributes
    ----------
    role
        What the band measures, or ``quality`` or ``saturation``.
    path
        The file, in the archive.
    scaling
        How numbers become reflectance; None for layers that are no band.
    band
        Its place in the file, from 1.
    nodata
        The number that stands for "no data".
    saturated
        The number that stands for "saturated".
    saturation_bit
        The band's bit in the scene's saturation layer.
    part
        JSON pointer of the part that the file came in; by default that of the role.
    """

    role: BandRole | Literal["quality", "saturation"]
    path: Path
    scaling: Scaling | None
    band: int = 1
    nodata: float | None = None
    saturated: float | None = None
    saturation_bit: int | None = None
    part: str | None = None

    @property
    def pointer(self) -> str:
        """JSON pointer for faults of this file."""
        return self.part or f"/{self.role}"


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneSource:
    """Where the numbers of one scene are.

    Attributes
    ----------
    bands
        At least one; each has a scaling.
    quality
        The quality layer, if the scene has one; it has a nodata class, which stands for
        what lies outside the layer.
    saturation
        The layer of saturation bits, if the scene has one; it has a number that stands for
        what lies outside it.
    cloud_buffer
        Which cells count as near cloud by the quality layer, None for no such thing.
    """

    bands: tuple[BandSource, ...]
    quality: BandSource | None = None
    saturation: BandSource | None = None
    cloud_buffer: CloudBuffer | None = None

    def __post_init__(self) -> None:
        if not self.bands or any(band.scaling is None for band in self.bands):
            raise ValueError("a scene needs bands, each with its scaling")
        if any(layer.nodata is None for layer in self._beside_bands):
            raise ValueError("a quality or saturation layer needs a nodata class")

    @property
    def layers(self) -> tuple[BandSource, ...]:
        """Bands, quality layer and saturation layer, in this order."""
        return (*self.bands, *self._beside_bands)

    @property
    def _beside_bands(self) -> tuple[BandSource, ...]:
        return tuple(layer for layer in (self.quality, self.saturation) if layer is not None)


@dataclass(frozen=True, slots=True, kw_only=True)
class _File:
    """One open file and the layers that are read from it, together."""

    dataset: Any
    header: Header
    layers: tuple[BandSource, ...]

    @property
    def pointer(self) -> str:
        return self.layers[0].pointer


@dataclass(frozen=True, slots=True, kw_only=True)
class _Scene:
    """A scene's open files and the grid that its cells are counted on."""

    files: tuple[_File, ...]
    grid: Grid
    cloud_buffer: CloudBuffer | None

    @property
    def quality(self) -> _File | None:
        """The quality layer's file, with that layer only."""
        for file in self.files:
            for layer in file.layers:
                if layer.role == "quality":
                    return replace(file, layers=(layer,))
        return None


def measuring_grid(source: SceneSource) -> Grid:
    """Return the finest of the bands' grids, the first of equally fine ones."""
    return _finest([inspect(band.path, pointer=band.pointer).grid for band in source.bands])


def read_blocks(
    source: SceneSource, cells: NDArray[np.int64], *, block_bytes: int = BLOCK_BYTES
) -> Iterator[xr.Dataset]:
    """Yield the parts of a scene that hold the wanted cells.

    Parameters
    ----------
    source
        The scene's files.
    cells
        Flat row-major indices on the measuring grid, ascending and unique, shape (n,).
    block_bytes
        About how much memory a block may take.

    Yields
    ------
    xr.Dataset
        A rectangle of the measuring grid with dimensions (y, x), cell centres as
        coordinates in metres and attributes ``row0``, ``col0`` (its first row and column
        on the grid) and ``grid_cols``. One variable for each band role, ``quality`` and
        ``saturation``: the file's numbers in its type, with attributes ``scale``,
        ``offset``, ``nodata``, ``saturated`` and, if there is one, ``saturation_bit``;
        and, where a cloud buffer is asked for, the boolean ``near_cloud``. Where a band has
        no cell stands its nodata number; a band without one comes as float with NaN.
        Rectangles do not overlap, each takes at most about `block_bytes`, and together they
        hold every wanted cell once.

    Raises
    ------
    RejectedInput
        As `inspect` and `check_together` do, and with code ``unreadable-pixels`` for
        pixels that can't be decoded.
    """
    with _opened(source) as scene:
        cell_bytes = sum(
            _dtype_of(file, layer, scene.grid).itemsize
            for file in scene.files
            for layer in file.layers
        )
        headers = [file.header for file in scene.files]
        part = part_shape(scene.grid, headers, cells=max(1, block_bytes // cell_bytes))
        for area in wanted_areas(scene.grid, part, cells):
            yield _read_area(scene, area)


def read_tile(source: SceneSource) -> xr.Dataset:
    """Return a whole scene as one block of `read_blocks`; it has to fit into memory."""
    with _opened(source) as scene:
        rows, cols = scene.grid.shape
        return _read_area(scene, Area(row0=0, row1=rows, col0=0, col1=cols))


def _finest(grids: Iterable[Grid]) -> Grid:
    return min(grids, key=lambda grid: grid.cell_area_m2)


@contextmanager
def _opened(source: SceneSource) -> Iterator[_Scene]:
    """Open every file once, checked as at intake: it may have changed on the disk since."""
    layers: dict[Path, list[BandSource]] = {}
    for layer in source.layers:
        layers.setdefault(layer.path, []).append(layer)
    headers = {path: inspect(path, pointer=of[0].pointer) for path, of in layers.items()}
    check_together({layers[path][0].pointer: header for path, header in headers.items()})
    _check_bands(source, headers)
    with ExitStack() as stack:
        files = [
            _File(
                dataset=stack.enter_context(
                    open_raster(path, header.driver, pointer=layers[path][0].pointer)
                ),
                header=header,
                layers=tuple(layers[path]),
            )
            for path, header in headers.items()
        ]
        grid = _finest(headers[band.path].grid for band in source.bands)
        yield _Scene(files=tuple(files), grid=grid, cloud_buffer=source.cloud_buffer)


def _check_bands(source: SceneSource, headers: dict[Path, Header]) -> None:
    for layer in source.layers:
        if not 1 <= layer.band <= headers[layer.path].count:
            raise RejectedInput.at(
                layer.pointer,
                "The file has fewer bands than the scene names; name one role for each band.",
                code="band-missing",
            )


def _read_area(scene: _Scene, area: Area) -> xr.Dataset:
    variables = {}
    if scene.cloud_buffer is not None and scene.quality is not None:
        near = _near_cloud(scene.cloud_buffer, scene.quality, scene.grid, area)
        variables[NEAR_CLOUD] = xr.Variable(("y", "x"), near)
    for file in scene.files:
        numbers = _numbers(file, scene.grid, area)
        for layer in file.layers:
            variables[str(layer.role)] = xr.Variable(
                ("y", "x"), numbers.pop(0), _attributes(layer), {"grid_mapping": "spatial_ref"}
            )
    return _frame(scene.grid, area).assign(variables)


def _frame(grid: Grid, area: Area) -> xr.Dataset:
    """Return a block without its numbers, georeferenced.

    Without them, because the `rio` accessor and its dataset refer to each other: numbers
    in it would stay in memory until the next garbage collection.
    """
    frame = xr.Dataset(
        coords={
            "y": grid.centre_ys(area.row0, area.row1),
            "x": grid.centre_xs(area.col0, area.col1),
        },
        attrs={"row0": area.row0, "col0": area.col0, "grid_cols": grid.shape[1]},
    )
    frame.rio.write_crs(grid.crs, inplace=True)
    frame.rio.write_transform(_transform_of(grid, area), inplace=True)
    return frame


def _transform_of(grid: Grid, area: Area) -> Affine:
    of = grid.transform
    return Affine(of.a, 0.0, of.c + area.col0 * of.a, 0.0, of.e, of.f + area.row0 * of.e)


def _attributes(layer: BandSource) -> dict[str, float | None]:
    attributes: dict[str, float | None] = {"nodata": layer.nodata, "saturated": layer.saturated}
    if layer.scaling is not None:
        attributes |= {"scale": layer.scaling.scale, "offset": layer.scaling.offset}
    if layer.saturation_bit is not None:
        attributes["saturation_bit"] = layer.saturation_bit
    return attributes


def _numbers(file: _File, grid: Grid, area: Area) -> list[Numbers]:
    """Return the numbers of each layer of a file on the area's cells, shape (rows, cols)."""
    if file.header.grid == grid:
        return list(_read(file, area))
    at = places_on(file.header.grid, grid, area)
    shape = (area.row1 - area.row0, area.col1 - area.col0)
    taken = [_empty(file, layer, grid, shape) for layer in file.layers]
    if at.window is not None:
        for into, found in zip(taken, _read(file, at.window), strict=True):
            into[at.inside] = found[at.nearest(at.window)]
    return taken


def _near_cloud(buffer: CloudBuffer, quality: _File, grid: Grid, area: Area) -> NDArray[np.bool_]:
    """Return which of the area's cells lie in a cell of the quality layer that is near cloud."""
    at = places_on(quality.header.grid, grid, area)
    near = np.zeros((area.row1 - area.row0, area.col1 - area.col0), dtype=np.bool_)
    if at.window is not None:
        around = buffer.around(at.window, quality.header.grid.shape)
        near[at.inside] = buffer.near(_read(quality, around)[0])[at.nearest(around)]
    return near


def _empty(file: _File, layer: BandSource, grid: Grid, shape: tuple[int, int]) -> Numbers:
    """Return what stands where a layer has no cell."""
    dtype = _dtype_of(file, layer, grid)
    fill = _fill(np.dtype(file.header.dtypes[layer.band - 1]), layer.nodata)
    if fill is None:
        # A type of whole numbers is kept only if a cell of the file overwrites each.
        fill = math.nan if dtype.kind == "f" else 0
    return np.full(shape, fill, dtype)


def _dtype_of(file: _File, layer: BandSource, grid: Grid) -> np.dtype[Any]:
    """Return the type of a layer's numbers on the grid, the same in all blocks."""
    dtype = np.dtype(file.header.dtypes[layer.band - 1])
    if _fill(dtype, layer.nodata) is not None or _covers(file.header.grid, grid):
        return dtype
    # NaN has to fit beside every whole number of the type.
    return np.dtype(np.float32 if dtype.itemsize <= 2 else np.float64)


def _covers(theirs: Grid, grid: Grid) -> bool:
    """Whether every cell centre of the grid lies in a cell of the other."""
    rows = theirs.rows_at(grid.centre_ys(0, grid.shape[0]))
    cols = theirs.cols_at(grid.centre_xs(0, grid.shape[1]))
    ends = ((rows, theirs.shape[0]), (cols, theirs.shape[1]))
    return all(bool(at.min() >= 0 and at.max() < size) for at, size in ends)


def _fill(dtype: np.dtype[Any], nodata: float | None) -> float | int | None:
    """Return what stands where a band has no cell; None if the type can't say it."""
    if dtype.kind == "f":
        # A number too large for the type is in no file of that type.
        in_reach = nodata is not None and abs(nodata) <= float(np.finfo(dtype).max)
        return nodata if in_reach else math.nan
    if nodata is None or not float(nodata).is_integer():
        return None
    limits = np.iinfo(dtype)
    return int(nodata) if limits.min <= nodata <= limits.max else None


def _read(file: _File, area: Area) -> Numbers:
    """Decode an area of a file's own grid, shape (layers, rows, cols)."""
    dtypes: list[DTypeLike] = [file.header.dtypes[layer.band - 1] for layer in file.layers]
    numbers = np.empty(
        (len(file.layers), area.row1 - area.row0, area.col1 - area.col0), np.result_type(*dtypes)
    )
    indexes = [layer.band for layer in file.layers]
    try:
        for piece in _pieces(file.header, area):
            numbers[
                :,
                piece.row0 - area.row0 : piece.row1 - area.row0,
                piece.col0 - area.col0 : piece.col1 - area.col0,
            ] = file.dataset.read(indexes, window=_window(piece))
    except RasterioError as error:
        raise RejectedInput.at(
            file.pointer,
            "The pixels of this file can't be decoded, so it is damaged; send it again.",
            code="unreadable-pixels",
        ) from error
    return numbers


def _window(area: Area) -> Window:
    return Window(area.col0, area.row0, area.col1 - area.col0, area.row1 - area.row0)


def _pieces(header: Header, area: Area) -> Iterator[Area]:
    """Yield an area in runs of whole blocks that fit into the cache."""
    height, width = header.block_shape
    block_bytes = height * width * np.dtype(header.dtypes[0]).itemsize * header.count
    across = min(max(1, _PIECE_BYTES // block_bytes), -(-header.grid.shape[1] // width))
    down = max(1, _PIECE_BYTES // (block_bytes * across))
    for row0, row1 in _runs(area.row0, area.row1, height * down):
        for col0, col1 in _runs(area.col0, area.col1, width * across):
            yield Area(row0=row0, row1=row1, col0=col0, col1=col1)


def _runs(start: int, stop: int, step: int) -> Iterator[tuple[int, int]]:
    """Yield the parts of start to stop between multiples of step."""
    edges = [start, *range((start // step + 1) * step, stop, step), stop]
    yield from pairwise(edges)
