"""The stored numbers of a scene in the cells that are wanted, and what they are worth."""

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

QUALITY: Final = "quality"
SATURATION: Final = "saturation"
NEAR_CLOUD: Final = "near_cloud"
"""Variables of a block beside its bands."""

# What a band has in a cell.
NOTHING: Final = 0
NUMBER: Final = 1
SATURATED: Final = 2


class Gathered:
    """A scene's numbers in chosen cells, each cell once, as they are stored.

    Stored integers take 2 bytes a cell and band; they become reflectance batch by batch.

    Attributes
    ----------
    cells
        Flat row-major indices on the measuring grid, ascending and unique, shape (cells,).
    states
        What each band has in each cell, `NOTHING`, `NUMBER` or `SATURATED`; uint8, shape
        (roles, cells).
    classes, classed
        The quality layer's numbers, None if no block had any, and where it has one.
    near_cloud
        True where a clear surface is to count as cloud.
    """

    def __init__(
        self, cells: NDArray[np.int64], roles: Sequence[BandRole], *, with_classes: bool
    ) -> None:
        self.cells = cells
        self.roles = tuple(roles)
        self.numbers: dict[BandRole, NDArray[Any]] = {}
        self.scalings: dict[BandRole, Scaling] = {}
        self.states = np.full((len(self.roles), len(cells)), NOTHING, dtype=np.uint8)
        self.classes: NDArray[Any] | None = None
        self.classed = np.zeros(len(cells), dtype=bool)
        self.near_cloud = np.zeros(len(cells), dtype=bool)
        self._with_classes = with_classes

    def take(self, block: xr.Dataset) -> None:
        """Take over what a block has for the cells."""
        here, inside = self._inside(block)
        if not len(here):
            return
        for place, role in enumerate(self.roles):
            if role.value not in block:
                continue
            band = block[role.value]
            numbers = _flat(band)[inside]
            self.numbers[role] = _put(self.numbers.get(role), len(self.cells), here, numbers)
            self.scalings[role] = Scaling(
                scale=float(band.attrs["scale"]), offset=float(band.attrs["offset"])
            )
            self.states[place, here] = _states(
                numbers, nodata=band.attrs["nodata"], saturated=band.attrs["saturated"]
            )
        if SATURATION in block:
            self._take_saturation(block, here, inside)
        if NEAR_CLOUD in block:
            self.near_cloud[here] = _flat(block[NEAR_CLOUD])[inside]
        if self._with_classes and QUALITY in block:
            layer = block[QUALITY]
            classes = _flat(layer)[inside]
            self.classes = _put(self.classes, len(self.cells), here, classes)
            self.classed[here] = ~_equal(classes, layer.attrs["nodata"])

    def _take_saturation(
        self, block: xr.Dataset, here: NDArray[np.int64], inside: NDArray[np.int64]
    ) -> None:
        """Mark the numbers of bands whose bit says that they are saturated."""
        bits = _flat(block[SATURATION])[inside]
        for place, role in enumerate(self.roles):
            bit = block[role.value].attrs.get("saturation_bit") if role.value in block else None
            if bit is not None:
                states = self.states[place, here]
                states[(states == NUMBER) & ((bits >> bit) & 1 > 0)] = SATURATED
                self.states[place, here] = states

    def _inside(self, block: xr.Dataset) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Return which of the cells a block holds, and where in the block they are."""
        row0, col0 = int(block.attrs["row0"]), int(block.attrs["col0"])
        grid_cols = int(block.attrs["grid_cols"])
        rows, cols = block.sizes["y"], block.sizes["x"]
        ends = np.array([row0 * grid_cols, (row0 + rows) * grid_cols], dtype=np.int64)
        start, stop = np.searchsorted(self.cells, ends)
        row, col = np.divmod(self.cells[start:stop], grid_cols)
        held = np.flatnonzero((col >= col0) & (col < col0 + cols))
        inside = (row[held] - row0) * cols + (col[held] - col0)
        return held + start, inside

    def reflectance(self, role: BandRole, at: NDArray[np.intp]) -> NDArray[np.float64]:
        """Return reflectance in some of the cells; NaN where the band has no number."""
        if role not in self.numbers:
            return np.full(len(at), np.nan)
        reflectance = self.scalings[role].reflectance(self.numbers[role][at])
        reflectance[self.states[self.roles.index(role), at] != NUMBER] = np.nan
        return reflectance


def _flat(variable: xr.DataArray) -> NDArray[Any]:
    flat: NDArray[Any] = variable.transpose("y", "x").to_numpy().reshape(-1)
    return flat


def _put(
    held: NDArray[Any] | None, size: int, here: NDArray[np.int64], numbers: NDArray[Any]
) -> NDArray[Any]:
    """Put numbers among those held, in a type that can hold both."""
    if held is None:
        held = np.zeros(size, dtype=numbers.dtype)
    elif held.dtype != numbers.dtype:
        held = held.astype(np.result_type(held, numbers))
    held[here] = numbers
    return held


def _equal(numbers: NDArray[Any], mark: float | None) -> NDArray[np.bool_]:
    """Tell where the stored numbers are a mark such as nodata."""
    if mark is None:
        return np.zeros(len(numbers), dtype=bool)
    if not np.issubdtype(numbers.dtype, np.floating):
        return np.asarray(numbers == float(mark))
    # A mark written as a longer number is stored rounded, or as infinity.
    with np.errstate(over="ignore"):
        return np.asarray(numbers == np.float64(mark).astype(numbers.dtype))


def _states(
    numbers: NDArray[Any], *, nodata: float | None, saturated: float | None
) -> NDArray[np.uint8]:
    states = np.where(np.isfinite(numbers), NUMBER, NOTHING).astype(np.uint8)
    states[_equal(numbers, saturated)] = SATURATED
    states[_equal(numbers, nodata)] = NOTHING
    return states
