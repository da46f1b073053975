"""The tile's grid, drawing on it, and the files on disk."""

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final, TypeAlias

import numpy as np
import rasterio
import shapely
from affine import Affine
from numpy.typing import NDArray
from pyproj import Transformer
from rasterio.features import rasterize
from shapely.affinity import affine_transform
from shapely.geometry import MultiPolygon, Polygon, mapping
from shapely.geometry.polygon import orient

Image = NDArray[np.float64]
Shape: TypeAlias = Polygon | MultiPolygon

CRS: Final = "EPSG:32633"
WEST_M: Final = 530_400.0
NORTH_M: Final = 6_152_800.0
SIDE_M: Final = 1920.0
# The land is drawn on cells four times finer than the finest band, so that a cell on a
# parcel's edge holds the mean of both sides, as a sensor would see it.
FINE_M: Final = 2.5


def grid_transform(cell_m: float) -> Affine:
    """Return the affine transform of the tile at one cell size."""
    return Affine(cell_m, 0, WEST_M, 0, -cell_m, NORTH_M)


def on_map(shape: Shape) -> Shape:
    """Return a shape given in metres right of and below the corner, in map coordinates."""
    moved: Shape = affine_transform(shape, [1, 0, 0, -1, WEST_M, NORTH_M])
    return moved


def cells_inside(shape: Shape) -> NDArray[np.bool_]:
    """Return which fine cells have their centre in a shape."""
    side = round(SIDE_M / FINE_M)
    mask: NDArray[np.uint8] = rasterize(
        [(on_map(shape), 1)], (side, side), transform=grid_transform(FINE_M), dtype="uint8"
    )
    return mask.astype(np.bool_)


def texture(random: np.random.Generator, *, cell_m: float = FINE_M) -> Image:
    """Return a smooth field of mean 0 and spread about 1 over the tile's cells."""
    side = round(SIDE_M / cell_m)
    knots = random.normal(size=(25, 25))
    at = np.linspace(0, 24, side)
    rows = np.stack([np.interp(at, np.arange(25), column) for column in knots.T], axis=1)
    return np.stack([np.interp(at, np.arange(25), row) for row in rows], axis=0)


def averaged(fine: Image, cell_m: float, *, from_m: float = FINE_M) -> Image:
    """Return means over the cells of a band."""
    step = round(cell_m / from_m)
    side = fine.shape[0] // step
    return np.asarray(fine.reshape(side, step, side, step).mean(axis=(1, 3)))


def numbers_stored(reflectance: Image) -> NDArray[np.uint16]:
    """Return digital numbers as a product of baseline 05.10 stores them."""
    # Reflectance = number / 10000 - 0.1 since baseline 04.00; 0 and 65535 are reserved.
    return np.clip(np.rint((reflectance + 0.1) * 10_000), 1, 65_534).astype(np.uint16)


def write_band(path: Path, numbers: NDArray[Any], cell_m: float) -> None:
    """Write one single-band GeoTIFF whose nodata number is 0."""
    with rasterio.open(
        path, "w", driver="GTiff", height=numbers.shape[0], width=numbers.shape[1], count=1,
        dtype=numbers.dtype.name, crs=CRS, transform=grid_transform(cell_m), nodata=0,
        compress="deflate", predictor=2, tiled=True, blockxsize=64, blockysize=64,
    ) as file:  # fmt: skip
        file.write(numbers, 1)


def geometry_of(shape: Shape) -> dict[str, Any]:
    """Return a shape as a GeoJSON geometry, WGS 84, shells counter-clockwise."""
    to_lonlat = Transformer.from_crs(CRS, "EPSG:4326", always_xy=True).transform
    lonlat = shapely.transform(on_map(shape), to_lonlat, interleaved=False)
    parts = [
        [[[round(lon, 7), round(lat, 7)] for lon, lat in ring]
         for ring in mapping(orient(part))["coordinates"]]
        for part in getattr(lonlat, "geoms", [lonlat])
    ]  # fmt: skip
    if isinstance(lonlat, MultiPolygon):
        return {"type": "MultiPolygon", "coordinates": parts}
    return {"type": "Polygon", "coordinates": parts[0]}


def write_json(path: Path, document: Mapping[str, Any] | Sequence[Any]) -> None:
    """Write a JSON document, readable and the same each time."""
    path.write_text(json.dumps(document, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
