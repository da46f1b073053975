"""Real rasters of numbers that differ in every cell's neighbourhood."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import rasterio
from affine import Affine
from numpy.typing import NDArray

WriteRaster = Callable[..., Path]


def grid_transform(cell: float, *, x: float = 500_000.0, y: float = 5_400_000.0) -> Affine:
    return Affine(cell, 0.0, x, 0.0, -cell, y)


@pytest.fixture
def write_raster(tmp_path: Path) -> WriteRaster:
    """Give a function that writes (bands, rows, cols) or (rows, cols) numbers to a file."""

    def write(name: str, numbers: NDArray[Any], *, crs: str = "EPSG:32633", **options: Any) -> Path:
        stack = numbers if numbers.ndim == 3 else numbers[np.newaxis]
        path = tmp_path / name
        if path.suffix == ".jp2":
            options |= {"driver": "JP2OpenJPEG", "QUALITY": "100", "REVERSIBLE": "YES"}
        options.setdefault("transform", grid_transform(10.0))
        with rasterio.open(
            path, "w", **{"driver": "GTiff"} | options, count=stack.shape[0], height=stack.shape[1],
            width=stack.shape[2], dtype=stack.dtype, crs=crs,
        ) as file:  # fmt: skip
            file.write(stack)
        return path

    return write
