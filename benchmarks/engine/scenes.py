"""Invented scenes and parcels of any size, the same on every machine.

A scene is a patchwork of fields, each of one crop, with noise in every cell, so that it
compresses about as real reflectance does. It is made once into a folder and taken from there
later.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import rasterio
import shapely
from affine import Affine
from numpy.typing import NDArray

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.scene_source import BandSource, SceneSource

CRS: Final = "EPSG:32633"
LEFT: Final = 499_980.0
TOP: Final = 5_500_020.0
FULL_SIDE: Final = 10_980
"""Rows and columns of a full tile of 10 m cells."""

FINE: Final = (BandRole.BLUE, BandRole.GREEN, BandRole.RED, BandRole.NIR)
COARSE: Final = (
    BandRole.REDEDGE071,
    BandRole.REDEDGE075,
    BandRole.SWIR16,
    BandRole.SWIR22,
)
# Stored numbers of four kinds of surface in the bands above, before noise: invented.
_SURFACES: Final = np.array(
    [
        [1300, 1500, 1350, 4600, 1800, 4100, 3000, 2000],
        [1500, 1800, 1700, 3600, 2300, 3300, 3300, 2500],
        [1900, 2200, 2500, 3200, 2800, 3100, 4100, 3600],
        [1250, 1350, 1200, 1150, 1200, 1150, 1100, 1080],
    ]
)
_NOISE: Final = 60.0
_FIELD_CELLS: Final = 24
_VERSION: Final = 1
_SCALING: Final = Scaling(scale=1e-4, offset=-0.1)
_CLOUD: Final = 9


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneOptions:
    """What a scene is like.

    Attributes
    ----------
    side
        Rows and columns of 10 m cells, an even number.
    compress
        ``deflate``, ``zstd``, ``lzw`` or ``none``.
    block
        Rows and columns of a block; 0 for strips.
    cloud
        Share of the scene under cloud: whole columns from the left.
    """

    side: int = FULL_SIDE
    compress: str = "deflate"
    block: int = 512
    cloud: float = 0.0

    @property
    def name(self) -> str:
        """A name for the folder of its files."""
        return f"v{_VERSION}-{self.side}-{self.compress}-{self.block}-{self.cloud:g}"


def scene_in(folder: Path, options: SceneOptions) -> SceneSource:
    """Return a scene of eight bands and a quality layer, made unless it is there."""
    place = folder / options.name
    place.mkdir(parents=True, exist_ok=True)
    bands = []
    for column, role in enumerate((*FINE, *COARSE)):
        path = place / f"{role.value}.tif"
        _write(path, options, column, is_coarse=role in COARSE)
        bands.append(BandSource(role=role, path=path, scaling=_SCALING, nodata=0.0))
    quality = place / "quality.tif"
    _write(quality, options, None, is_coarse=True)
    return SceneSource(
        bands=tuple(bands),
        quality=BandSource(role="quality", path=quality, scaling=None, nodata=0.0),
    )


def _write(path: Path, options: SceneOptions, column: int | None, *, is_coarse: bool) -> None:
    if path.exists():
        return
    step = 2 if is_coarse else 1
    side = options.side // step
    profile: dict[str, Any] = {
        "driver": "GTiff", "width": side, "height": side, "count": 1, "crs": CRS,
        "transform": Affine(10.0 * step, 0.0, LEFT, 0.0, -10.0 * step, TOP),
        "dtype": "uint8" if column is None else "uint16", "compress": options.compress,
    }  # fmt: skip
    if options.compress != "none":
        profile["predictor"] = 2
    if options.block:
        profile |= {"tiled": True, "blockxsize": options.block, "blockysize": options.block}
    else:
        profile |= {"blockysize": 16}
    aside = path.with_suffix(".part")
    rows = options.block or 512
    with rasterio.open(aside, "w", **profile) as file:
        for first in range(0, side, rows):
            last = min(first + rows, side)
            numbers = (
                _classes(options, first, last, side)
                if column is None
                else _band(column, first, last, side, step)
            )
            file.write(numbers, 1, window=((first, last), (0, side)))
    aside.rename(path)


def _band(column: int, first: int, last: int, side: int, step: int) -> NDArray[np.uint16]:
    field = _FIELD_CELLS // step
    rows, cols = np.arange(first, last) // field, np.arange(side) // field
    # Which surface a field has is a mix of its row and column: no two neighbours alike.
    kind = (rows[:, np.newaxis] * 7919 + cols * 104_729) % 101 % len(_SURFACES)
    random = np.random.default_rng([_VERSION, column, first])
    noise = random.normal(0.0, _NOISE, kind.shape)
    numbers: NDArray[np.uint16] = (_SURFACES[:, column][kind] + noise).clip(1, 65_000).astype("u2")
    return numbers


def _classes(options: SceneOptions, first: int, last: int, side: int) -> NDArray[np.uint8]:
    classes = np.full((last - first, side), 4, dtype=np.uint8)
    classes[:, : round(side * options.cloud)] = _CLOUD
    return classes


def parcels_on(
    side: int, count: int, *, hectares: float = 2.4, share: float = 1.0
) -> NDArray[np.object_]:
    """Return irregular parcels in the scene's system, in the order of no place.

    Parameters
    ----------
    side
        Rows and columns of the scene.
    count
        How many.
    hectares
        Their mean area.
    share
        Share of the scene, from its upper left corner, that they lie in.
    """
    random = np.random.default_rng([_VERSION, count])
    room = 10.0 * side * np.sqrt(share)
    reach = np.sqrt(hectares * 10_000.0 / 2.1)
    outlines = []
    for x, y in random.uniform(reach, room - reach, (count, 2)):
        corners = int(random.integers(6, 24))
        angles = np.sort(random.uniform(0, 2 * np.pi, corners))
        outlines.append(
            _outline(LEFT + x, TOP - y, angles, reach * random.uniform(0.6, 1, corners))
        )
    return np.array(outlines, dtype=np.object_)


def _outline(
    x: float, y: float, angles: NDArray[np.float64], reach: NDArray[np.float64]
) -> shapely.Polygon:
    points = np.column_stack([x + reach * np.cos(angles), y + reach * np.sin(angles)])
    return shapely.convex_hull(shapely.MultiPoint(points))


def decode_all(source: SceneSource) -> int:
    """Decode every band once with the raster library, do nothing else; return the bytes."""
    total = 0
    for layer in source.bands:
        with rasterio.open(layer.path) as file:
            height = file.block_shapes[0][0]
            rows = max(height, 512)
            room = np.empty((rows, file.width), dtype=file.dtypes[0])
            for first in range(0, file.height, rows):
                last = min(first + rows, file.height)
                file.read(1, window=((first, last), (0, file.width)), out=room[: last - first])
                total += room[: last - first].nbytes
    return total


def rings_of(outlines: Sequence[shapely.Polygon]) -> int:
    """Return how many vertices outlines have."""
    return int(shapely.get_num_coordinates(np.asarray(outlines)).sum())
