"""From a scene's cells to each zone's figures.

`observe` takes the blocks of a scene as `tiles` reads them, the zones of the parcels on the
same grid, and the indices to measure. It answers with one row of figures per zone: how well
the zone was seen (its look), the statistics of each index, mean and spread of each band.

A cell counts where it is usable: the quality layer's rule says so, if there is a layer, and
at least one band has a number there. Where a single band has none, only what is made from
that band is unknown. An index may name a rule of its own; the scene then has a look by that
rule beside the one by its own.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from service.spectral.gathered import NUMBER, SATURATED, Gathered
from service.spectral.indices import Index
from service.spectral.quality import Loss, QualityLayer
from service.spectral.roles import BandRole
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
    rules
        Index id → quality rule, for the measured indices that were read by one of their own.
    """

    columns: tuple[str, ...]
    figures: NDArray[np.float32]
    measured: tuple[str, ...]
    skipped: Mapping[str, str]
    rules: Mapping[str, str]


def columns_for(
    roles: Sequence[BandRole],
    indices: Sequence[Index],
    rule: str,
    own_rules: Mapping[str, str] | None = None,
) -> tuple[str, ...]:
    """Name the columns that `observe` fills for these bands, indices and quality rules.

    `own_rules` are those of indices that are not read by `rule`, as `Observed.rules`.
    """
    rules = _all_rules(rule, own_rules or {})
    look = (f"{each}.{figure}" for each in rules for figure in LOOK_FIGURES)
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
        ``quality`` with attribute ``nodata``. Optional variables: ``saturation``, whose bit
        ``saturation_bit`` (an attribute of a band) says that the band is saturated there, and
        ``near_cloud``, true where cells of clear surfaces are to count as cloud. A cell that
        no block holds has no data.
    zones
        The parcels on the measuring grid.
    roles
        The bands of the scene.
    indices
        What to measure; an index is skipped where a band that it needs is missing.
    quality
        How to read the quality layer, or None for a scene without one.
    rule
        Id of the layer's quality rule, ``none`` without a layer. Bands are read by it, and
        every index that names no rule of its own which the layer has.

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
    own_rules = _own_rules(fed, quality, rule)
    columns = columns_for(roles, indices, rule, own_rules)
    rules = _all_rules(rule, own_rules)
    scene = Gathered(zones.distinct_cells(), roles, with_classes=quality is not None)
    for block in blocks:
        scene.take(block)
    figures = np.full((len(zones), len(columns)), np.nan, dtype=np.float32)
    for batch in _batches(zones, scene):
        judged = {each: _judge(batch, scene, quality, each) for each in rules}
        usable = _narrowed(batch, judged, scene)
        parts = [figure for each in rules for figure in _look_figures(batch, judged[each])]
        for index in fed:
            parts += _index_figures(index, usable[own_rules.get(index.id, rule)])
        parts += _band_figures(roles, usable[rule])
        figures[batch.first : batch.last] = np.stack(parts, axis=1)
    return Observed(
        columns=columns,
        figures=figures,
        measured=tuple(index.id for index in fed),
        skipped=_skipped(indices, roles),
        rules=own_rules,
    )


def _fed(indices: Sequence[Index], roles: Sequence[BandRole]) -> tuple[Index, ...]:
    return tuple(index for index in indices if set(index.roles) <= set(roles))


def _own_rules(indices: Sequence[Index], quality: QualityLayer | None, rule: str) -> dict[str, str]:
    """Return by id the rules of the indices that the layer reads otherwise than by `rule`."""
    return {
        index.id: index.quality_rule
        for index in indices
        if quality is not None
        and index.quality_rule in quality.rules
        and index.quality_rule not in (None, rule)
    }


def _all_rules(rule: str, own_rules: Mapping[str, str]) -> tuple[str, ...]:
    return (rule, *sorted(set(own_rules.values()) - {rule}))


def _skipped(indices: Sequence[Index], roles: Sequence[BandRole]) -> dict[str, str]:
    reasons = {}
    for index in indices:
        missing = [role.value for role in index.roles if role not in roles]
        if missing:
            bands = "bands" if len(missing) > 1 else "band"
            reasons[index.id] = f"It needs the {bands} {' and '.join(missing)}."
    return reasons


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


def _batches(zones: Zones, scene: Gathered) -> Iterator[_Batch]:
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


def _judge(batch: _Batch, scene: Gathered, quality: QualityLayer | None, rule: str) -> _Cells:
    states = scene.states[:, batch.at]
    seen = (states == NUMBER).any(axis=0)
    saturated = ~seen & (states == SATURATED).any(axis=0)
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
    judged = quality.judge(classes, rule)
    lost_any = np.any(list(judged.lost.values()), axis=0)
    beside = judged_seen & scene.near_cloud[batch.at] & ~lost_any
    reasons = {loss: judged_seen & judged.lost[loss] for loss in Loss}
    reasons[Loss.CLOUD] |= beside
    reasons[Loss.SATURATION] |= saturated
    reasons[Loss.NODATA] |= ~judged_seen & ~saturated
    return _Cells(
        usable=judged_seen & judged.usable & ~beside,
        lost=dict(reasons),
        water=judged_seen & judged.water,
    )


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


class _Usable:
    """The cells of a batch that one rule keeps, with their reflectance as it is asked for."""

    def __init__(self, batch: _Batch, usable: NDArray[np.bool_], scene: Gathered) -> None:
        self.which = usable
        self.batch = batch.narrowed_to(usable)
        self._scene = scene
        self._bands: dict[BandRole, NDArray[np.float64]] = {}

    def reflectance(self, role: BandRole) -> NDArray[np.float64]:
        """Return a band's reflectance in these cells; NaN where it has no number."""
        if role not in self._bands:
            self._bands[role] = self._scene.reflectance(role, self.batch.at)
        return self._bands[role]


def _narrowed(batch: _Batch, judged: Mapping[str, _Cells], scene: Gathered) -> dict[str, _Usable]:
    """Return the usable cells by rule; rules that keep the same cells share them."""
    found: dict[str, _Usable] = {}
    for rule, cells in judged.items():
        same = (own for own in found.values() if np.array_equal(own.which, cells.usable))
        found[rule] = next(same, None) or _Usable(batch, cells.usable, scene)
    return found


def _index_figures(index: Index, cells: _Usable) -> list[NDArray[np.float64]]:
    """Return the figures of `INDEX_STATS`, each of shape (zones of the batch,)."""
    values = index.compute(**{role.value: cells.reflectance(role) for role in index.roles})
    summary = summarise(values.astype(np.float32), cells.batch.weights, cells.batch.indptr)
    quantiles = (summary.p10, summary.p50, summary.p90)
    return [summary.mean, summary.sd, summary.min, *quantiles, summary.max, summary.weight]


def _band_figures(roles: Sequence[BandRole], cells: _Usable) -> Iterator[NDArray[np.float64]]:
    """Yield the figures of `BAND_STATS` band by band."""
    for role in roles:
        batch = cells.batch
        yield from mean_and_sd(cells.reflectance(role), batch.weights, batch.indptr)
