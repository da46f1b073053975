"""Judging a raster file by its header, before any pixel is read.

Order matters: first the magic bytes, then the layout by our own reading of the header,
held against a budget, and only then the one driver that belongs to the magic bytes.
"""

import math
import warnings
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Final

import rasterio
from affine import Affine
from rasterio.crs import CRS
from rasterio.errors import CRSError, NotGeoreferencedWarning, RasterioError
from rasterio.warp import transform_bounds

from service.errors import Fault, RejectedInput
from service.tiles.jpeg2000 import BOX_MAGIC, CODESTREAM_MAGIC, Jpeg2000File
from service.tiles.layout import HeaderReader, Layout, Truncated, Unsupported
from service.tiles.tiff import TiffFile
from service.zonal.grid import Bounds, Grid

_DRIVERS: Final = {
    b"II*\x00": "GTiff",
    b"MM\x00*": "GTiff",
    b"II+\x00": "GTiff",
    b"MM\x00+": "GTiff",
    CODESTREAM_MAGIC: "JP2OpenJPEG",
    BOX_MAGIC: "JP2OpenJPEG",
}
SUFFIXES: Final = {"GTiff": ".tif", "JP2OpenJPEG": ".jp2"}
_READERS: Final[Mapping[str, Callable[[BinaryIO, int], HeaderReader]]] = {
    "GTiff": TiffFile,
    "JP2OpenJPEG": Jpeg2000File,
}
_DTYPES: Final = frozenset(
    {"uint8", "int8", "uint16", "int16", "uint32", "int32", "float32", "float64"}
)
# Relative to the cell size: below it a shear is rounding, far under a cell over 65,536 cells.
_SHEAR_TOLERANCE: Final = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """How much a header may claim.

    Attributes
    ----------
    side
        Rows or columns.
    cells
        Rows times columns.
    bands
        Number of bands.
    block_bytes
        Memory of one strip or tile, decoded.
    blocks
        Number of strips or tiles; a list of them is held in memory.
    """

    side: int = 65_536
    cells: int = 400_000_000
    bands: int = 64
    block_bytes: int = 64 * 2**20
    blocks: int = 1_000_000


# A JPEG 2000 decoder sets up a table for every tile before it decodes one.
_JPEG2000_TILES: Final = 10_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Header:
    """What a raster file is, as its header says.

    Attributes
    ----------
    grid
        CRS (projected, in metres), transform (no rotation) and shape.
    count
        Number of bands.
    dtypes
        NumPy name of the type of each band's numbers.
    nodata
        The file's own number for "no data" of each band, None without.
    driver
        ``GTiff`` or ``JP2OpenJPEG``.
    block_shape
        (rows, cols) of the smallest part that can be decoded.
    """

    grid: Grid
    count: int
    dtypes: tuple[str, ...]
    nodata: tuple[float | None, ...]
    driver: str
    block_shape: tuple[int, int]


_DEFAULT_BUDGET: Final = Budget()


def find_driver(path: Path) -> str | None:
    """Return the one driver that belongs to the file's magic bytes, or None."""
    with path.open("rb") as file:
        return _driver_of(file.read(len(BOX_MAGIC)))


def _driver_of(head: bytes) -> str | None:
    return next((name for magic, name in _DRIVERS.items() if head.startswith(magic)), None)


def inspect(path: Path, *, pointer: str, budget: Budget = _DEFAULT_BUDGET) -> Header:
    """Return what a file's header says, if the service can read such a file.

    Raises
    ------
    RejectedInput
        At `pointer`, with code ``not-a-raster``, ``unsupported-raster``,
        ``raster-too-large``, ``truncated-raster``, ``no-crs``, ``unsupported-crs`` or
        ``unsupported-grid``.
    """
    with path.open("rb") as file:
        driver = _driver_of(file.read(len(BOX_MAGIC)))
        if driver is None:
            raise RejectedInput.at(
                pointer,
                "This file is neither a GeoTIFF nor a JPEG 2000 image; send one of the two. "
                "A file that only points to other files is not accepted.",
                code="not-a-raster",
            )
        layout = _layout(file, driver, path.stat().st_size, budget, pointer)
    with open_raster(path, driver, pointer=pointer) as dataset:
        return _header(dataset, layout, pointer)


def _layout(file: BinaryIO, driver: str, size: int, budget: Budget, pointer: str) -> Layout:
    try:
        reader = _READERS[driver](file, size)
        layout = reader.layout()
        _check_budget(layout, driver, budget, pointer)
        reader.check_complete(layout)
    except Truncated:
        raise RejectedInput.at(
            pointer,
            "The file ends before its header says it should; send it again in full.",
            code="truncated-raster",
        ) from None
    except Unsupported as reason:
        raise _unsupported(pointer, str(reason)) from None
    return layout


def _unsupported(pointer: str, reason: str) -> RejectedInput:
    return RejectedInput.at(
        pointer,
        f"The file can't be used because {reason}. Save it as a GeoTIFF of integers or real "
        "numbers, in tiles, with DEFLATE compression.",
        code="unsupported-raster",
    )


def _check_budget(layout: Layout, driver: str, budget: Budget, pointer: str) -> None:
    rows, cols = layout.shape
    blocks = _JPEG2000_TILES if driver == "JP2OpenJPEG" else budget.blocks
    mebibytes = budget.block_bytes // 2**20
    limits = (
        (max(rows, cols) > budget.side, f"at most {budget.side} rows and columns are read"),
        (rows * cols > budget.cells, f"at most {budget.cells} cells are read"),
        (layout.bands > budget.bands, f"at most {budget.bands} bands are read"),
        (
            layout.block_bytes > budget.block_bytes,
            f"one strip or tile may take {mebibytes} MiB; save it in tiles of 512 by 512 cells",
        ),
        (layout.blocks > blocks, f"at most {blocks} strips or tiles are read; use larger ones"),
    )
    for exceeded, limit in limits:
        if exceeded:
            raise RejectedInput.at(
                pointer, f"The raster is too large: {limit}.", code="raster-too-large"
            )


@contextmanager
def open_raster(path: Path, driver: str, *, pointer: str) -> Iterator[Any]:
    """Open a file with one driver only; what goes wrong at opening is the file's fault."""
    try:
        with warnings.catch_warnings():
            # A missing transform is refused by `_grid` with a sentence of its own.
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            dataset = rasterio.open(path.resolve(), driver=driver)
    except RasterioError as error:
        raise _unsupported(pointer, "its header can't be read") from error
    with dataset:
        yield dataset


def _header(dataset: Any, layout: Layout, pointer: str) -> Header:
    dtypes = tuple(str(dtype) for dtype in dataset.dtypes)
    seen = (tuple(dataset.shape), dataset.count, set(dtypes))
    if seen != (layout.shape, layout.bands, {layout.dtype}) or not set(dtypes) <= _DTYPES:
        raise _unsupported(pointer, "its header contradicts itself")
    return Header(
        grid=_grid(dataset, pointer),
        count=int(dataset.count),
        dtypes=dtypes,
        nodata=tuple(None if value is None else float(value) for value in dataset.nodatavals),
        driver=str(dataset.driver),
        block_shape=layout.block_shape,
    )


def _grid(dataset: Any, pointer: str) -> Grid:
    crs = _crs(dataset, pointer)
    found = dataset.transform
    sizes = (abs(found.a), abs(found.e))
    numbers = [float(number) for number in found[:6]]
    if found == Affine.identity() or not all(map(math.isfinite, numbers)) or min(sizes) == 0.0:
        raise RejectedInput.at(
            pointer,
            "The file does not say where its cells lie; save it with a geotransform.",
            code="unsupported-grid",
        )
    shear = max(abs(found.b), abs(found.d))
    if shear > _SHEAR_TOLERANCE * min(sizes) or found.a < 0:
        raise RejectedInput.at(
            pointer,
            "The raster is rotated, sheared or mirrored; resample it to a grid whose columns "
            "run east.",
            code="unsupported-grid",
        )
    grid = Grid(
        crs=crs,
        transform=Affine(found.a, 0.0, found.c, 0.0, found.e, found.f),
        shape=(int(dataset.height), int(dataset.width)),
    )
    if not all(math.isfinite(bound) for bound in footprint(grid)):
        raise RejectedInput.at(
            pointer,
            "The raster lies where its reference system has no place on Earth; check its "
            "geotransform.",
            code="unsupported-grid",
        )
    return grid


def _crs(dataset: Any, pointer: str) -> str:
    crs = dataset.crs
    if not crs:
        raise RejectedInput.at(
            pointer,
            "The file has no coordinate reference system; save it with one.",
            code="no-crs",
        )
    try:
        if crs.is_projected and math.isclose(crs.linear_units_factor[1], 1.0):
            authority = crs.to_authority()
            return ":".join(authority) if authority else str(crs.to_wkt())
    except CRSError:
        pass
    raise RejectedInput.at(
        pointer,
        "The coordinate reference system is not a projected one in metres, so cells have no "
        "area; reproject the raster, for instance to the UTM zone of its place.",
        code="unsupported-crs",
    )


def footprint(source: Header | Grid) -> Bounds:
    """Return (west, south, east, north) in degrees, WGS 84.

    West is greater than east for a raster across the antimeridian; infinite where the
    reference system has no place on Earth.
    """
    grid = source.grid if isinstance(source, Header) else source
    try:
        west, south, east, north = transform_bounds(
            CRS.from_user_input(grid.crs), CRS.from_epsg(4326), *grid.bounds
        )
    except RasterioError:
        return (math.inf,) * 4
    return (west, south, east, north)


def check_together(headers: Mapping[str, Header]) -> None:
    """Check that the files of one scene share a reference system and an area.

    Parameters
    ----------
    headers
        By JSON pointer of the part.

    Raises
    ------
    RejectedInput
        With code ``crs-differs`` or ``no-overlap``, one fault for each part that does not
        fit those before it.
    """
    _check_crs(headers)
    shared: Bounds = (-math.inf, -math.inf, math.inf, math.inf)
    detail = "This part does not overlap the parts before it; a scene covers one area."
    faults = []
    for pointer, header in headers.items():
        common = _intersection(shared, header.grid.bounds)
        if common is None:
            faults.append(Fault(pointer=pointer, detail=detail))
        else:
            shared = common
    if faults:
        raise RejectedInput("no-overlap", detail, faults)


def _check_crs(headers: Mapping[str, Header]) -> None:
    detail = "This part has another coordinate reference system than the first; use one for all."
    systems = {pointer: CRS.from_user_input(h.grid.crs) for pointer, h in headers.items()}
    first = next(iter(systems.values()), None)
    faults = [Fault(pointer=p, detail=detail) for p, system in systems.items() if system != first]
    if faults:
        raise RejectedInput("crs-differs", detail, faults)


def _intersection(one: Bounds, other: Bounds) -> Bounds | None:
    west, south = max(one[0], other[0]), max(one[1], other[1])
    east, north = min(one[2], other[2]), min(one[3], other[3])
    return (west, south, east, north) if west < east and south < north else None
