"""From a scene's cells to each zone's figures.

`observe` takes the numbers of a scene as `tiles` gathers them, the plan of the parcels' zones
on its grids, and the indices to measure. It answers with one row of figures per zone: how well
the zone was seen (its look), the statistics of each index, mean and spread of each band.

A cell counts where it is usable: the quality layer's rule says so, if there is a layer, and
at least one band has a number there. Where a single band has none, only what is made from
that band is unknown. An index may name a rule of its own; the scene then has a look by that
rule beside the one by its own.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import reduce
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.spectral.gathered import Gathered
from service.spectral.indices import Index
from service.spectral.marks import BITS, USABLE, cell_marks, usable_by_any
from service.spectral.quality import Loss, QualityLayer
from service.spectral.roles import BandRole
from service.zonal.plan import Plan
from service.zonal.statistics import mean_and_sd, summarise, sums_by_bit

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

# What the arrays of one batch need to stay in a processor's cache.
_CELLS_AT_ONCE: Final = 50_000


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


def may_count(
    quality: QualityLayer, indices: Sequence[Index], rule: str
) -> Callable[[NDArray[Any]], NDArray[np.bool_]]:
    """Return what tells, by numbers of the quality layer, which cells any index could use.

    Of the others nothing is asked but whether some band has a number there.
    """
    rules = _all_rules(rule, _own_rules(indices, quality, rule))

    return lambda numbers: usable_by_any(numbers, quality, rules)


def observe(
    strips: Iterable[Gathered],
    plan: Plan,
    *,
    roles: Sequence[BandRole],
    indices: Sequence[Index],
    quality: QualityLayer | None,
    rule: str,
) -> Observed:
    """Measure every zone in one scene.

    Parameters
    ----------
    strips
        The scene's numbers in the cells of the plan, in ascending order, each cell once. A zone
        is measured when its last cell has come, and what no zone waits for is let go, so that
        memory goes with a strip. A zone whose last cell does not come has no data.
    plan
        The parcels on the grids of the scene.
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
        One row per zone, in the order in which the plan's boundaries were given. The
        denominator of every share of a look is the whole zone: what lies off the grid, and a
        zone without area, is lost to ``nodata``.
        Shares of valid, cloud, shadow, snow, nodata and saturation add up to 1, unless the
        rule drops clear surfaces too, which are lost to none of these.

    Notes
    -----
    Numbers become reflectance, and reflectance an index, in float64. An index is rounded to
    float32 before its statistics, so that equal ratios of different numbers are equal values.
    The figures do not depend on how the scene is cut into strips, nor on the company of
    other zones.
    """
    fed = _fed(indices, roles)
    task = _Task(
        roles=tuple(roles),
        indices=fed,
        quality=quality,
        rule=rule,
        own_rules=_own_rules(fed, quality, rule),
    )
    columns = columns_for(roles, indices, rule, task.own_rules)
    figures = np.full((len(plan), len(columns)), np.nan, dtype=np.float32)
    for held, first, last in _ready(strips, plan):
        marks = {each: cell_marks(held, quality, each) for each in task.rules}
        for batch in _batches(plan, first, last, held):
            figures[batch.rows] = np.stack(_figures(task, batch, held, marks), axis=1)
    return Observed(
        columns=columns,
        figures=figures,
        measured=tuple(index.id for index in fed),
        skipped=_skipped(indices, roles),
        rules=task.own_rules,
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
class _Task:
    """What there is to measure of every zone."""

    roles: tuple[BandRole, ...]
    indices: tuple[Index, ...]
    quality: QualityLayer | None
    rule: str
    own_rules: Mapping[str, str]

    @property
    def rules(self) -> tuple[str, ...]:
        return _all_rules(self.rule, self.own_rules)


def _ready(strips: Iterable[Gathered], plan: Plan) -> Iterator[tuple[Gathered, int, int]]:
    """Yield what is held strip by strip, and the zones whose last cell has come with it."""
    last = plan.last_cells
    done = 0
    left = Gathered(0, 0)
    for strip in strips:
        held = strip.after(left)
        stop = int(np.searchsorted(last, held.last))
        yield held, done, stop
        done = stop
        left = held.narrowed(_wanted(plan, done, held)) if done < len(plan) else left
    if done < len(plan):
        yield Gathered(0, len(plan.cells)), done, len(plan)


def _wanted(plan: Plan, done: int, held: Gathered) -> NDArray[np.bool_]:
    """Return which of the cells held belong to a zone that waits for more."""
    wanted = np.zeros(len(held), dtype=np.bool_)
    # A zone that waits has cells, so its first is at the start of its entries.
    begun = np.flatnonzero(plan.at[plan.indptr[done:-1]] < held.last) + done
    for zone in begun.tolist():
        at = plan.at[plan.indptr[zone] : plan.indptr[zone + 1]]
        wanted[held.places(at[: np.searchsorted(at, np.int32(held.last))])] = True
    return wanted


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Batch:
    """Some zones: which rows of the figures they have, where their cells are among those held."""

    rows: NDArray[np.int64]
    places: NDArray[np.int32]
    weights: NDArray[np.float32]
    indptr: NDArray[np.int64]
    totals: NDArray[np.float64]


def _batches(plan: Plan, first: int, last: int, held: Gathered) -> Iterator[_Batch]:
    """Cut zones into batches of some cells; a zone is never cut."""
    while first < last:
        limit = plan.indptr[first] + _CELLS_AT_ONCE
        reach = int(np.searchsorted(plan.indptr, limit, side="right")) - 1
        stop = min(max(first + 1, reach), last)
        entries = slice(plan.indptr[first], plan.indptr[stop])
        yield _Batch(
            rows=plan.order[first:stop],
            places=held.places(plan.at[entries]),
            weights=plan.weights[entries],
            indptr=plan.indptr[first : stop + 1] - plan.indptr[first],
            totals=plan.totals[first:stop],
        )
        first = stop


def _figures(
    task: _Task, batch: _Batch, held: Gathered, marks: Mapping[str, NDArray[np.uint8]]
) -> list[NDArray[np.float64]]:
    """Return the figures of a batch by column, each of shape (zones of the batch,)."""
    own = {rule: of_cells[batch.places] for rule, of_cells in marks.items()}
    figures: list[NDArray[np.float64]] = []
    for rule in task.rules:
        figures += _look_figures(batch, own[rule], is_judged=task.quality is not None)
    usable = _Usable(batch, own, held)
    for index in task.indices:
        figures += usable.index_figures(index, task.own_rules.get(index.id, task.rule))
    for role in task.roles:
        figures += usable.band_figures(role, task.rule)
    return figures


def _look_figures(
    batch: _Batch, marks: NDArray[np.uint8], *, is_judged: bool
) -> list[NDArray[np.float64]]:
    """Return the figures of `LOOK_FIGURES`, each of shape (zones of the batch,)."""
    area = np.where(batch.totals > 0, batch.totals, 1.0)
    sums = sums_by_bit(marks, batch.weights, batch.indptr)

    def share_of(what: Loss | str) -> NDArray[np.float64]:
        # The whole zone's area and its cells' sum are rounded apart from each other.
        return np.minimum(sums[:, BITS[what]] / area, 1.0)

    def told(what: Loss | str) -> NDArray[np.float64]:
        return share_of(what) if is_judged else np.full(len(area), np.nan)

    off_grid = np.maximum(area - sums[:, -1], 0.0) / area
    return [
        share_of("usable"),
        sums[:, BITS["usable"]],
        told(Loss.CLOUD),
        told(Loss.SHADOW),
        told(Loss.SNOW),
        np.minimum(share_of(Loss.NODATA) + off_grid, 1.0),
        share_of(Loss.SATURATION),
        told("water"),
    ]


class _Usable:
    """The cells of a batch that some rule keeps, with their reflectance as it is asked for."""

    def __init__(
        self, batch: _Batch, marks: Mapping[str, NDArray[np.uint8]], held: Gathered
    ) -> None:
        by_rule = {rule: (own & USABLE).astype(np.bool_) for rule, own in marks.items()}
        some = reduce(np.logical_or, by_rule.values())
        before = np.concatenate([[0], np.cumsum(some, dtype=np.int64)])
        self._indptr = before[batch.indptr]
        self._places, self._weights = batch.places[some], batch.weights[some]
        self._counts = {rule: own[some] for rule, own in by_rule.items()}
        self._held = held
        self._bands: dict[BandRole, NDArray[np.float64]] = {}

    def index_figures(self, index: Index, rule: str) -> list[NDArray[np.float64]]:
        """Return the figures of `INDEX_STATS`, each of shape (zones of the batch,)."""
        values = np.empty(len(self._places), dtype=np.float32)
        for start in range(0, len(values), _CELLS_AT_ONCE):
            part = slice(start, start + _CELLS_AT_ONCE)
            bands = {role.value: self._reflectance(role, part) for role in index.roles}
            values[part] = index.compute(**bands)
        found = summarise(values, self._weights, self._indptr, self._counts[rule])
        quantiles = (found.p10, found.p50, found.p90)
        return [found.mean, found.sd, found.min, *quantiles, found.max, found.weight]

    def band_figures(self, role: BandRole, rule: str) -> list[NDArray[np.float64]]:
        """Return the figures of `BAND_STATS`, each of shape (zones of the batch,)."""
        values = self._reflectance(role, slice(None))
        return list(mean_and_sd(values, self._weights, self._indptr, self._counts[rule]))

    def _reflectance(self, role: BandRole, part: slice) -> NDArray[np.float64]:
        """Return a band's reflectance in some cells; NaN where it has no number.

        Kept only while all the cells fit into one part: a zone may be as large as a tile.
        """
        if len(self._places) > _CELLS_AT_ONCE:
            return self._held.reflectance(role, self._places[part])
        if role not in self._bands:
            self._bands[role] = self._held.reflectance(role, self._places)
        return self._bands[role]
