"""A land of many parcels side by side, for benchmarks of cost: outlines, crops, spectra, tiles.

What grows there is plain, since cost does not depend on it: six crops in rotation, each a
mixture of canopy and soil that rises and falls once a season, with a little noise.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from math import ceil, sqrt
from pathlib import Path
from typing import Final

import numpy as np
import rasterio
import shapely
from affine import Affine
from numpy.typing import NDArray
from pyproj import Transformer

BANDS: Final = ("blue", "green", "red", "nir", "swir16", "swir22")
CROPS: Final = ("alder oats", "brome", "clover", "dwarf beet", "emmer", "field pea")
LAST_SEASON: Final = 2024
EPSG: Final = 32633
_CANOPY: Final = np.array([0.03, 0.06, 0.04, 0.45, 0.20, 0.10])
_SOIL: Final = np.array([0.08, 0.11, 0.14, 0.22, 0.30, 0.24])
_CORNER: Final = (500_000.0, 5_500_000.0)
_CELL_M: Final = 10.0
_STEP: Final = 12
"""Cells from one parcel's corner to the next; a parcel is 10 cells wide."""
_SIDE: Final = 10
_FIRST_DAY: Final = 110
_DAYS: Final = 230


@dataclass(frozen=True, slots=True, kw_only=True)
class WideLand:
    """So many parcels, and so many passes a season."""

    parcels: int
    passes: int

    @property
    def bands(self) -> tuple[str, ...]:
        """The bands of its spectra."""
        return BANDS

    @property
    def running(self) -> int:
        """The season that runs, by the year it ends in."""
        return LAST_SEASON

    @property
    def refs(self) -> list[str]:
        """The parcels' names."""
        return [f"w{number:06d}" for number in range(self.parcels)]

    def outlines(self) -> list[shapely.Polygon]:
        """Return the outlines in degrees."""
        to_degrees = Transformer.from_crs(EPSG, 4326, always_xy=True)
        squares = []
        for number in range(self.parcels):
            row, col = divmod(number, self._per_row)
            west = _CORNER[0] + _CELL_M * _STEP * col
            north = _CORNER[1] - _CELL_M * _STEP * row
            size = _CELL_M * _SIDE
            x = [west, west, west + size, west + size]
            y = [north, north - size, north - size, north]
            squares.append(shapely.Polygon(list(zip(*to_degrees.transform(x, y), strict=True))))
        return squares

    def crop_of(self, number: int, season: int) -> str:
        """Return what a parcel carries in a season."""
        return CROPS[(number + season) % len(CROPS)]

    def days_of(self, season: int) -> tuple[date, date]:
        """Return first and last day of a season, by the year it ends in."""
        return date(season - 1, 10, 1), date(season, 9, 30)

    def acquired_at(self, season: int, number: int) -> datetime:
        """Return when a pass of a season was acquired."""
        midnight = datetime(season - 1, 10, 1, 10, 30, tzinfo=UTC)
        return midnight + timedelta(days=self._day(number), seconds=number)

    def spectra(self, season: int, number: int) -> NDArray[np.float64]:
        """Return the reflectance (parcels, bands) of a pass."""
        noise, lasting = np.random.default_rng([season, number]), np.random.default_rng(5)
        late, vigour = lasting.normal(0, 4, self.parcels), lasting.normal(1, 0.05, self.parcels)
        crop = (np.arange(self.parcels) + season) % len(CROPS)
        emerges, ends = 150 + 12 * crop, 260 + 20 * crop
        day = self._day(number) - late
        rise = 1 / (1 + np.exp(-(day - emerges - 20) / 8))
        fall = 1 / (1 + np.exp((day - ends) / 7))
        cover = vigour * (0.05 + 0.85 * rise * fall)
        bands = cover[:, None] * _CANOPY + (1 - cover[:, None]) * _SOIL
        return np.asarray(bands * noise.normal(1, 0.02, bands.shape))

    def shares(self, season: int, number: int) -> NDArray[np.float64]:
        """Return the usable share of each parcel in a pass: a quarter lies under cloud."""
        clouds = np.random.default_rng([season, number, 1])
        is_cloudy = clouds.random(self.parcels) < 0.25
        return np.where(is_cloudy, clouds.uniform(0, 0.6, self.parcels), 1.0)

    def write_tile(self, folder: Path, season: int, number: int) -> Mapping[str, Path]:
        """Write a pass as a tile in digital numbers (reflectance * 10,000 + 1,000) by band."""
        side = self._per_row * _STEP
        spectra = self.spectra(season, number)
        written = {}
        for at, band in enumerate(BANDS):
            table = np.full((side, side), 2_000, dtype=np.uint16)
            for parcel, value in enumerate(spectra[:, at]):
                row, col = divmod(parcel, self._per_row)
                top, left = row * _STEP, col * _STEP
                own = table[top : top + _SIDE, left : left + _SIDE]
                own[:] = round(value * 10_000 + 1_000)
            written[band] = _write(folder / f"{band}.tif", table, _CELL_M)
        clear = np.full((side // 2, side // 2), 4, dtype=np.uint8)
        written["quality"] = _write(folder / "quality.tif", clear, 2 * _CELL_M)
        return written

    @property
    def _per_row(self) -> int:
        return ceil(sqrt(self.parcels))

    def _day(self, number: int) -> int:
        return _FIRST_DAY + number * _DAYS // self.passes


def _write(path: Path, table: NDArray[np.unsignedinteger], cell_m: float) -> Path:
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        count=1,
        height=table.shape[0],
        width=table.shape[1],
        dtype=table.dtype,
        crs=f"EPSG:{EPSG}",
        transform=Affine(cell_m, 0, _CORNER[0], 0, -cell_m, _CORNER[1]),
        compress="deflate",
    ) as file:
        file.write(table, 1)
    return path
