"""Coverage-weighted statistics in plain numpy: the second oracle, beside the general library.

Everywhere here ``values`` and ``weights`` hold the cells of one zone after the other, and
zone i owns the entries ``indptr[i]:indptr[i + 1]``. A NaN value is a cell that does not
count, and so is a weight of 0; a zone without a cell that counts has NaN for every statistic
and a weight of 0. Sums are in float64. There is no loop over zones.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

Figures = NDArray[np.float64]

_SIGN: Final = np.uint32(0x8000_0000)
_ZONE_SHIFT: Final = np.uint64(32)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Summary:
    """Statistics of each zone, float64, shape (zones,); NaN where no cell counts.

    `sd` is the weighted population standard deviation; `p10`, `p50` and `p90` are weighted
    quantiles; `weight` is the sum of the weights that count, 0 where none does.
    """

    mean: Figures
    sd: Figures
    min: Figures
    p10: Figures
    p50: Figures
    p90: Figures
    max: Figures
    weight: Figures


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Distinct:
    """The distinct values of each zone that has any, ascending, with their joint weights."""

    values: Figures  # (values,)
    weights: Figures  # (values,)
    starts: NDArray[np.intp]  # (filled zones,) where each zone begins
    counts: NDArray[np.intp]  # (filled zones,) distinct values of each
    zones: NDArray[np.intp]  # (filled zones,) which zone it is


def sums(amounts: NDArray[np.floating], indptr: NDArray[np.int64]) -> Figures:
    """Add up the amounts of each zone; 0 for a zone without cells."""
    totals = np.zeros(len(indptr) - 1)
    # `reduceat` gives a neighbour's first amount for an empty slice, so those are left out.
    filled = indptr[1:] > indptr[:-1]
    if filled.any():
        totals[filled] = np.add.reduceat(amounts, indptr[:-1][filled], dtype=np.float64)
    return totals


def narrowed(indptr: NDArray[np.int64], counts: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Return the `indptr` of the cells that are left where `counts` is true."""
    before = np.concatenate([[0], np.cumsum(counts, dtype=np.int64)])
    return before[indptr]


def mean_and_sd(
    values: NDArray[np.floating], weights: NDArray[np.float32], indptr: NDArray[np.int64]
) -> tuple[Figures, Figures]:
    """Weighted mean and population standard deviation of each zone.

    Parameters
    ----------
    values
        Shape (cells,), any unit; NaN does not count.
    weights
        Coverage fractions, shape (cells,).
    indptr
        Shape (zones + 1,).

    Returns
    -------
    tuple
        Mean and standard deviation (in two passes), each of shape (zones,); NaN where no
        cell counts.
    """
    counts = ~np.isnan(values) & (weights > 0)
    kept = values[counts].astype(np.float64)
    shares = weights[counts].astype(np.float64)
    ends = narrowed(indptr, counts)
    total = sums(shares, ends)
    total[total == 0] = np.nan
    mean = sums(shares * kept, ends) / total
    apart = kept - np.repeat(mean, np.diff(ends))
    return mean, np.sqrt(sums(shares * apart * apart, ends) / total)


def summarise(
    values: NDArray[np.float32], weights: NDArray[np.float32], indptr: NDArray[np.int64]
) -> Summary:
    """Mean, spread, extremes and quantiles of each zone.

    Parameters
    ----------
    values
        float32, shape (cells,), any unit; NaN does not count.
    weights
        Coverage fractions, shape (cells,).
    indptr
        Shape (zones + 1,).

    Returns
    -------
    Summary
        Each figure of shape (zones,); NaN where no cell counts.

    Notes
    -----
    Equal values are merged first, without which a quantile depends on how a value is spread
    over cells. Of the m distinct values v_i, i = 0 … m-1, ascending, with weights w_i, their
    running sum C_i and total W, value v_i stands at s_i = i w_i + (m - 1) C_(i-1); the
    quantile q is read at q (m - 1) W, linear between neighbours. This is the definition of
    `exactextract`, which is the oracle in the tests; with equal weights it is the usual
    linear quantile (Hyndman and Fan 1996, type 7).
    """
    zones = len(indptr) - 1
    distinct = _distinct(values, weights, indptr)
    at = distinct.zones

    def spread_out(figures: Figures, missing: float = np.nan) -> Figures:
        everywhere = np.full(zones, missing)
        everywhere[at] = figures
        return everywhere

    if not len(at):
        unknown = spread_out(np.empty(0))
        return Summary(
            mean=unknown, sd=unknown, min=unknown, p10=unknown, p50=unknown, p90=unknown,
            max=unknown, weight=np.zeros(zones),
        )  # fmt: skip
    starts, counts = distinct.starts, distinct.counts
    weight = np.add.reduceat(distinct.weights, starts)
    lowest, highest = distinct.values[starts], distinct.values[starts + counts - 1]
    mean = np.add.reduceat(distinct.weights * distinct.values, starts) / weight
    # The last bit of a rounded sum may leave the range of the values.
    mean = np.clip(mean, lowest, highest)
    apart = distinct.values - np.repeat(mean, counts)
    variance = np.add.reduceat(distinct.weights * apart * apart, starts) / weight
    p10, p50, p90 = _quantiles(distinct, weight, (0.1, 0.5, 0.9))
    return Summary(
        mean=spread_out(mean),
        sd=spread_out(np.sqrt(variance)),
        min=spread_out(lowest),
        p10=spread_out(p10),
        p50=spread_out(p50),
        p90=spread_out(p90),
        max=spread_out(highest),
        weight=spread_out(weight, missing=0.0),
    )


def _distinct(
    values: NDArray[np.float32], weights: NDArray[np.float32], indptr: NDArray[np.int64]
) -> _Distinct:
    counts = ~np.isnan(values) & (weights > 0)
    # Adding 0 turns -0.0 into 0.0, which is the same value with other bits.
    kept = values[counts] + np.float32(0)
    per_zone = np.diff(narrowed(indptr, counts))
    zone = np.repeat(np.arange(len(per_zone), dtype=np.uint64), per_zone)
    # One integer sorts by zone, then by value: the bits of a positive float32 ascend with it,
    # those of a negative one descend, so the latter are turned over.
    bits = kept.view(np.uint32)
    ascending = np.where(bits & _SIGN, ~bits, bits | _SIGN)
    keys = (zone << _ZONE_SHIFT) | ascending
    order = np.argsort(keys)
    keys = keys[order]
    firsts = _runs(keys)
    joint = weights[counts][order].astype(np.float64)
    owner = (keys[firsts] >> _ZONE_SHIFT).astype(np.intp)
    starts = _runs(owner)
    return _Distinct(
        values=kept[order][firsts].astype(np.float64),
        weights=np.add.reduceat(joint, firsts) if len(firsts) else joint,
        starts=starts,
        counts=np.diff(np.append(starts, len(owner))),
        zones=owner[starts],
    )


def _runs(keys: NDArray[np.uint64] | NDArray[np.intp]) -> NDArray[np.intp]:
    """Return where each run of equal keys begins."""
    return np.flatnonzero(np.concatenate([np.ones(len(keys[:1]), bool), keys[1:] != keys[:-1]]))


def _quantiles(distinct: _Distinct, weight: Figures, shares: tuple[float, ...]) -> list[Figures]:
    """Read weighted quantiles; each of shape (filled zones,)."""
    starts, counts = distinct.starts, distinct.counts
    lasts = starts + counts - 1
    running = np.cumsum(distinct.weights) - distinct.weights
    before = running - np.repeat(running[starts], counts)
    rank = np.arange(len(before)) - np.repeat(starts, counts)
    gaps = counts - 1.0
    places = rank * distinct.weights + np.repeat(gaps, counts) * before
    read = []
    for share in shares:
        target = share * gaps * weight
        reached = np.add.reduceat(places <= np.repeat(target, counts), starts, dtype=np.intp)
        below = starts + reached - 1
        above = np.minimum(below + 1, lasts)
        low, high = distinct.values[below], distinct.values[above]
        width = places[above] - places[below]
        # Where there is no neighbour above, the width is 0 and so is the way to it.
        part = np.divide(target - places[below], width, out=np.zeros_like(width), where=width > 0)
        # Values of very different size may round past the neighbour.
        read.append(np.clip(low + part * (high - low), low, high))
    return read
