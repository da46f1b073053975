"""What a scene's figures should be, worked out apart from the service.

Bands are sampled here at the centres of the finest grid's cells, parcels are projected by
`pyproj` alone, indices are the published formulas written out, and statistics are those of
`exactextract` (Apache-2.0) with the service's stated minimum coverage of a cell.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Transformer
from shapely.geometry import mapping

Image = NDArray[np.float64]
LEAST = "min_coverage_frac=1e-6"
OPERATIONS = {
    "mean": f"mean({LEAST})",
    "sd": f"stdev({LEAST})",
    "min": f"min({LEAST})",
    "p10": f"quantile(q=0.1,{LEAST})",
    "p50": f"quantile(q=0.5,{LEAST})",
    "p90": f"quantile(q=0.9,{LEAST})",
    "max": f"max({LEAST})",
    "pixels": f"count({LEAST})",
}
# The agency's legend of scene classes; kept: 2, 4, 5, 6, 7.
REASONS = {0: "nodata", 1: "saturation", 3: "shadow", 8: "cloud", 9: "cloud", 10: "cloud"}
REASONS[11] = "snow"
LOSSES = ("cloud", "shadow", "snow", "nodata", "saturation")
SCALE, OFFSET, NODATA, SATURATED = 1e-4, -0.1, 0, 65_535
"""Of Sentinel-2 Level-2A from processing baseline 04.00 on (the agency's format change)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Layer:
    """A raster's numbers, the upper left corner of its grid and the side of its cells, metres."""

    numbers: NDArray[Any]
    origin: tuple[float, float]
    cell_m: float

    def at(self, other: "Layer") -> NDArray[Any]:
        """Return the numbers at the centres of another grid's cells; 0 where there are none."""
        rows, cols = other.numbers.shape
        x = other.origin[0] + (np.arange(cols) + 0.5) * other.cell_m
        y = other.origin[1] - (np.arange(rows) + 0.5) * other.cell_m
        col = np.floor((x - self.origin[0]) / self.cell_m).astype(int)
        row = np.floor((self.origin[1] - y) / self.cell_m).astype(int)
        has_row = (row >= 0) & (row < self.numbers.shape[0])
        has_col = (col >= 0) & (col < self.numbers.shape[1])
        taken = np.zeros(other.numbers.shape, self.numbers.dtype)
        inside = np.ix_(has_row, has_col)
        taken[inside] = self.numbers[np.ix_(row[has_row], col[has_col])]
        return taken


def ratio(one: Image, other: Image) -> Image:
    """Return a normalised difference."""
    total = one + other
    return (one - other) / np.where(np.abs(total) < 1e-9, np.nan, total)


def to_crs(outline: shapely.Geometry, crs: str) -> shapely.Geometry:
    """Project an outline in degrees, corner by corner."""
    transform = Transformer.from_crs("OGC:CRS84", crs, always_xy=True).transform
    return shapely.transform(outline, transform, interleaved=False)


def to_degrees(outline: shapely.Geometry, crs: str) -> shapely.Geometry:
    """Bring an outline in metres to WGS 84, corner by corner."""
    transform = Transformer.from_crs(crs, "OGC:CRS84", always_xy=True).transform
    return shapely.transform(outline, transform, interleaved=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Expected:
    """What one parcel should show: the shares of its look, and statistics by index."""

    shares: Mapping[str, float]
    indices: Mapping[str, Mapping[str, float | None]]


def expected(
    bands: Mapping[str, Layer], quality: Layer, outline: shapely.Geometry, crs: str
) -> Expected:
    """Return what a parcel, given in degrees, should show of a Sentinel-2 scene."""
    finest = min(bands.values(), key=lambda layer: layer.cell_m)
    numbers = {role: layer.at(finest) for role, layer in bands.items()}
    kept = {role: (n != NODATA) & (n != SATURATED) for role, n in numbers.items()}
    classes = quality.at(finest)
    seen = np.any(list(kept.values()), axis=0)
    burnt = ~seen & np.any([n == SATURATED for n in numbers.values()], axis=0)
    reasons = np.select([classes == value for value in REASONS], [*REASONS.values()], default="")
    reasons[~seen] = "nodata"
    reasons[burnt] = "saturation"
    usable = reasons == ""

    def reflectance(role: str) -> Image:
        return np.where(usable & kept[role], numbers[role] * SCALE + OFFSET, np.nan)

    images = {
        "ndvi": ratio(reflectance("nir"), reflectance("red")),
        "ndmi": ratio(reflectance("nir"), reflectance("swir16")),
        "nbr": ratio(reflectance("nir"), reflectance("swir22")),
        "nbr2": ratio(reflectance("swir16"), reflectance("swir22")),
    }
    placed = to_crs(outline, crs)
    whole = placed.area / finest.cell_m**2

    def library(image: NDArray[Any], operation: str) -> float | None:
        rows, cols = image.shape
        x0, y0 = finest.origin
        raster = NumPyRasterSource(
            image, x0, y0 - rows * finest.cell_m, x0 + cols * finest.cell_m, y0
        )
        feature = {"type": "Feature", "properties": {}, "geometry": mapping(placed)}
        (answer,) = exact_extract(raster, JSONFeatureSource([feature]), [operation])
        (figure,) = answer["properties"].values()
        return None if figure is None or np.isnan(figure) else float(figure)

    def share(which: NDArray[np.bool_]) -> float:
        return (library(which.astype(np.float64), f"sum({LEAST})") or 0.0) / whole

    shares = {"valid_share": share(usable), "water": share(seen & (classes == 6))}
    shares |= {loss: share(reasons == loss) for loss in LOSSES}
    shares["nodata"] += 1 - share(np.ones(usable.shape, bool))
    return Expected(
        shares=shares,
        indices={
            index: {
                stat: library(image.astype(np.float32), operation)
                for stat, operation in OPERATIONS.items()
            }
            for index, image in images.items()
        },
    )
