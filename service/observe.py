"""From a scene's cells to each zone's figures.

`observe` takes the blocks of a scene as `tiles` reads them, the zones of the parcels on the
same grid, and the indices to measure. It answers with one row of figures per zone: how well
the zone was seen (its look), the statistics of each index, mean and spread of each band.

A cell counts where it is usable: the quality layer's rule says so, if there is a layer, and
at least one band has a number there. Where a single band has none, only what is made from
that band is unknown.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from service.spectral.indices import Index
from service.spectral.quality import Loss, QualityLayer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.zonal.coverage import Zones
from service.zonal.statistics import mean_and_sd, narrowed, summarise, sums

LOOK_FIGURES: Final = (
    "valid_share",
    "pixels",
    "cloud",
    "shadow",
    "snow",
    "nodata",
    "saturation",
    "water",
)
INDEX_STATS: Final = ("mean", "sd", "min", "p10", "p50", "p90", "max", "pixels")
BAND_STATS: Final = ("mean", "sd")

# About what the arrays of one batch need to stay in a processor's cache and below 50 MB.
_CELLS_AT_ONCE: Final = 200_000

# What a band has in a cell.
_NOTHING: Final = 0
_NUMBER: Final = 1
_SATURATED: Final = 2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Observed:
    """The figures of every zone in one scene.

    Attributes
    ----------
    columns
        What each column holds, such as ``clear.valid_share``, ``ndvi.p50``, ``red.mean``.
    figures
        float32, shape (zones, columns). NaN = unknown: no usable cell, or, for the shares
        lost to cloud, shadow and snow and the share of water, no quality layer.
    measured
        Ids of the indices that were measured.
    skipped
        Index id → why it was not measured, in words.
    """

    columns: tuple[str, ...]
    figures: NDArray[np.float32]
    measured: tuple[str, ...]
    skipped: Mapping[str, str]


def columns_for(roles: Sequence[BandRole], indices: Sequence[Index], rule: str) -> tuple[str, ...]:
    """Name the columns that `observe` fills for these bands, indices and quality rule."""
    look = (f"{rule}.{figure}" for figure in LOOK_FIGURES)
    by_index = (f"{index.id}.{stat}" for index in _fed(indices, roles) for stat in INDEX_STATS)
    by_band = (f"{role.value}.{stat}" for role in roles for stat in BAND_STATS)
    return (*look, *by_index, *by_band)


def observe(
    blocks: Iterable[xr.Dataset],
    zones: Zones,
    *,
    roles: Sequence[BandRole],
    indices: Sequence[Index],
    quality: QualityLayer | None,
    rule: str,
) -> Observed:
    """Measure every zone in one scene.

    Parameters
    ----------
    blocks
        Parts of the measuring grid with dimensions (y, x), in any order and of any size, with
        attributes ``row0``, ``col0`` and ``grid_cols``. Variables are band roles with the
        stored numbers and attributes ``scale``, ``offset``, ``nodata``, ``saturated``, and
        ``quality`` with attribute ``nodata``. A cell that no block holds has no data.
    zones
        The parcels on the measuring grid.
    roles
        The bands of the scene.
    indices
        What to measure; an index is skipped where a band that it needs is missing.
    quality
        How to read the quality layer, or None for a scene without one.
    rule
        Id of the layer's quality rule, ``none`` without a layer.

    Returns
    -------
    Observed
        One row per zone, in the order of `zones`. The denominator of every share of a look is
        the whole zone: what lies off the grid, and a zone without area, is lost to ``nodata``.
        Shares of valid, cloud, shadow, snow, nodata and saturation add up to 1, unless the
        rule drops clear surfaces too, which are lost to none of these.

    Notes
    -----
    Numbers become reflectance, and reflectance an index, in float64. An index is rounded to
    float32 before its statistics, so that equal ratios of different numbers are equal values.
    The figures do not depend on how the scene is cut into blocks, nor on the company of
    other zones.
    """
    fed = _fed(indices, roles)
    columns = columns_for(roles, indices, rule)
    scene = _Gathered(zones.distinct_cells(), roles, with_classes=quality is not None)
    for block in blocks:
        scene.take(block)
    figures = np.full((len(zones), len(columns)), np.nan, dtype=np.float32)
    for batch in _batches(zones, scene):
        judged = _judge(batch, scene, quality, rule)
        parts = [
            *_look_figures(batch, judged),
            *_measure_figures(batch.narrowed_to(judged.usable), scene, roles=roles, indices=fed),
        ]
        figures[batch.first : batch.last] = np.stack(parts, axis=1)
    return Observed(
        columns=columns,
        figures=figures,
        measured=tuple(index.id for index in fed),
        skipped=_skipped(indices, roles),
    )


def _fed(indices: Sequence[Index], roles: Sequence[BandRole]) -> tuple[Index, ...]:
    return tuple(index for index in indices if set(index.roles) <= set(roles))


def _skipped(indices: Sequence[Index], roles: Sequence[BandRole]) -> dict[str, str]:
    reasons = {}
    for index in indices:
        missing = [role.value for role in index.roles if role not in roles]
        if missing:
            bands = "bands" if len(missing) > 1 else "band"
            reasons[index.id] = f"It needs the {bands} {' and '.join(missing)}."
    return reasons


class _Gathered:
    """The scene's numbers in the cells of the zones, each cell once, as they are stored.

    Stored integers take 2 bytes a cell and band; they become reflectance batch by batch.
    """

    def __init__(
        self, cells: NDArray[np.int64], roles: Sequence[BandRole], *, with_classes: bool
    ) -> None:
        self.cells = cells
        self.roles = tuple(roles)
        self.numbers: dict[BandRole, NDArray[Any]] = {}
        self.scalings: dict[BandRole, Scaling] = {}
        self.states = np.full((len(self.roles), len(cells)), _NOTHING, dtype=np.uint8)
        self.classes: NDArray[Any] | None = None
        self.classed = np.zeros(len(cells), dtype=bool)
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
        if self._with_classes and "quality" in block:
            layer = block["quality"]
            classes = _flat(layer)[inside]
            self.classes = _put(self.classes, len(self.cells), here, classes)
            self.classed[here] = ~_equal(classes, layer.attrs["nodata"])

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
        reflectance[self.states[self.roles.index(role), at] != _NUMBER] = np.nan
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
    states = np.where(np.isfinite(numbers), _NUMBER, _NOTHING).astype(np.uint8)
    states[_equal(numbers, saturated)] = _SATURATED
    states[_equal(numbers, nodata)] = _NOTHING
    return states


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Batch:
    """Some neighbouring zones: where their cells are among the gathered ones."""

    first: int
    last: int
    at: NDArray[np.intp]
    weights: NDArray[np.float32]
    indptr: NDArray[np.int64]
    totals: NDArray[np.float64]

    def narrowed_to(self, counts: NDArray[np.bool_]) -> "_Batch":
        """Return the batch with only the cells where `counts` is true."""
        return _Batch(
            first=self.first,
            last=self.last,
            at=self.at[counts],
            weights=self.weights[counts],
            indptr=narrowed(self.indptr, counts),
            totals=self.totals,
        )


def _batches(zones: Zones, scene: _Gathered) -> Iterator[_Batch]:
    """Cut the zones into batches of some cells; a zone is never cut."""
    first = 0
    while first < len(zones):
        limit = zones.indptr[first] + _CELLS_AT_ONCE
        last = max(first + 1, int(np.searchsorted(zones.indptr, limit, side="right")) - 1)
        start, stop = zones.indptr[first], zones.indptr[last]
        yield _Batch(
            first=first,
            last=last,
            at=np.searchsorted(scene.cells, zones.cells[start:stop]),
            weights=zones.weights[start:stop],
            indptr=zones.indptr[first : last + 1] - start,
            totals=zones.totals[first:last],
        )
        first = last


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Cells:
    """Which cells of a batch are usable, why the others are not, and which are water."""

    usable: NDArray[np.bool_]
    lost: Mapping[Loss, NDArray[np.bool_] | None]
    water: NDArray[np.bool_] | None


def _judge(batch: _Batch, scene: _Gathered, quality: QualityLayer | None, rule: str) -> _Cells:
    states = scene.states[:, batch.at]
    seen = (states == _NUMBER).any(axis=0)
    saturated = ~seen & (states == _SATURATED).any(axis=0)
    if quality is None:
        lost: dict[Loss, NDArray[np.bool_] | None] = dict.fromkeys(Loss)
        return _Cells(
            usable=seen,
            lost=lost | {Loss.NODATA: ~seen & ~saturated, Loss.SATURATION: saturated},
            water=None,
        )
    if scene.classes is None:
        judged_seen = np.zeros(len(batch.at), dtype=bool)
        classes = np.zeros(len(batch.at), dtype=np.uint8)
    else:
        judged_seen = seen & scene.classed[batch.at]
        classes = scene.classes[batch.at]
    judged = quality.judge(classes, quality.rules[rule])
    usable = judged_seen & judged.usable
    reasons = {loss: judged_seen & judged.lost[loss] for loss in Loss}
    reasons[Loss.SATURATION] |= saturated
    reasons[Loss.NODATA] |= ~judged_seen & ~saturated
    return _Cells(usable=usable, lost=dict(reasons), water=judged_seen & judged.water)


def _look_figures(batch: _Batch, cells: _Cells) -> list[NDArray[np.float64]]:
    """Return the figures of `LOOK_FIGURES`, each of shape (zones of the batch,)."""
    area = np.where(batch.totals > 0, batch.totals, 1.0)

    def weight_of(which: NDArray[np.bool_]) -> NDArray[np.float64]:
        return sums(np.where(which, batch.weights, np.float32(0)), batch.indptr)

    def share_of(which: NDArray[np.bool_] | None) -> NDArray[np.float64]:
        if which is None:
            return np.full(len(area), np.nan)
        # The whole zone's area and its cells' sum are rounded apart from each other.
        return np.minimum(weight_of(which) / area, 1.0)

    off_grid = np.maximum(area - sums(batch.weights, batch.indptr), 0.0) / area
    shares = {loss: share_of(which) for loss, which in cells.lost.items()}
    return [
        share_of(cells.usable),
        weight_of(cells.usable),
        shares[Loss.CLOUD],
        shares[Loss.SHADOW],
        shares[Loss.SNOW],
        np.minimum(shares[Loss.NODATA] + off_grid, 1.0),
        shares[Loss.SATURATION],
        share_of(cells.water),
    ]


def _measure_figures(
    batch: _Batch, scene: _Gathered, *, roles: Sequence[BandRole], indices: Sequence[Index]
) -> Iterator[NDArray[np.float64]]:
    """Yield the figures of `INDEX_STATS` by index, then of `BAND_STATS` by band."""
    bands = {role: scene.reflectance(role, batch.at) for role in roles}
    for index in indices:
        values = index.compute(**{role.value: bands[role] for role in index.roles})
        summary = summarise(values.astype(np.float32), batch.weights, batch.indptr)
        yield from (summary.mean, summary.sd, summary.min, summary.p10, summary.p50, summary.p90)
        yield from (summary.max, summary.weight)
    for role in roles:
        yield from mean_and_sd(bands[role], batch.weights, batch.indptr)
