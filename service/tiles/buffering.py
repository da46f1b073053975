"""Cells near cloud, found before a scene is cut into the parts that hold parcels.

A quality layer misses the thin edges of clouds. A buffer is counted in the layer's own
cells, whatever the grid of the bands, and does not end where a part that is read ends.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.tiles.parts import Area


@dataclass(frozen=True, slots=True, kw_only=True)
class CloudBuffer:
    """How far around clouds a cell is near one.

    Attributes
    ----------
    cells
        How many cells of the quality layer, at least 1: all within so many rows and columns
        of a cloud are near it, diagonals included.
    is_cloud
        Tells by numbers of the quality layer which cells are cloud.
    """

    cells: int
    is_cloud: Callable[[NDArray[np.integer]], NDArray[np.bool_]]

    def __post_init__(self) -> None:
        if self.cells < 1:
            raise ValueError("a cloud buffer has at least one cell")

    def around(self, area: Area, shape: tuple[int, int]) -> Area:
        """Return the part of a layer of some shape that decides about an area of it."""
        return Area(
            row0=max(area.row0 - self.cells, 0),
            row1=min(area.row1 + self.cells, shape[0]),
            col0=max(area.col0 - self.cells, 0),
            col1=min(area.col1 + self.cells, shape[1]),
        )

    def near(self, numbers: NDArray[Any]) -> NDArray[np.bool_]:
        """Return which cells are cloud or near one; numbers and answer of shape (rows, cols)."""
        near = self.is_cloud(numbers)
        for along in (near, near.T):
            source = along.copy()
            for step in range(1, self.cells + 1):
                along[step:] |= source[:-step]
                along[:-step] |= source[step:]
        return near
