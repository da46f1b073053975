"""How far looks lie from what was expected of them.

Departures are not normally distributed: near a harvest or a mowing a few parcels of a crop
lie far off while most lie close. So a spread is the larger of two estimates that agree for
a normal distribution, one from the middle of the absolute shortfalls and one from their
tail; and what the crop's own looks show in the pass counts beside the past.
"""

from dataclasses import dataclass
from statistics import NormalDist
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import (
    SPREAD_OF_MEDIAN,
    Counts,
    Figures,
    Rows,
    grouped_quantiles,
    medians,
    quantiles,
    windowed_medians,
    windowed_quantiles,
)
from service.seasons.usual import KNOTS, Course, daily

REACH_DAYS: Final = 14
PRIOR_LOOKS: Final = 15.0
"""A crop with so many looks near a day counts as much as all crops together; and so many other
looks of a crop in a pass as much as its past."""
FLOOR: Final = 0.015
TAIL: Final = 0.9
"""Share of past looks that lie closer than the one by which their tail is told."""
TAIL_IN_PASS: Final = 0.7
"""The same in one pass: lower, as a few parcels may be in trouble at a time."""
LOOKS_OF_TAIL: Final = 20


def _spread_of(share: float) -> float:
    """Return absolute quantile → standard deviation of a normal distribution."""
    return 1.0 / NormalDist().inv_cdf(0.5 + share / 2)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spreads:
    """The spread of one crop over the season, shapes (DAYS, measures).

    `middle` is told by the middle of the past shortfalls, `whole` by their tail as well.
    """

    middle: Course
    whole: Course


def spreads(
    crop: Counts, day: Counts, shortfalls: Rows, *, is_pooled: NDArray[np.bool_]
) -> list[Spreads]:
    """Return the spread of each crop over the season.

    Parameters
    ----------
    crop, day
        Of each past look, shape (looks,).
    shortfalls
        Observed minus expected with the look's own season left out of its baseline, shape
        (measures, looks), NaN = unknown.
    is_pooled
        Whether a crop counts among all crops, shape (crops,).

    Returns
    -------
    list of Spreads
        The middle: S² = w·s² + (1 - w)·s_all² with w = n / (n + 15), where s is 1.4826 times
        the median of the n absolute shortfalls of the crop within 14 days, and s_all that of
        all crops; at least 0.015. Where no crop has a look near, s_all is that of the whole
        season. The whole: at least the 0.9 quantile of them over 1.645. Every 4 days, linear
        between.
    """
    order = np.argsort(day, kind="stable")
    crop, day, size = crop[order], day[order], np.abs(shortfalls[:, order])
    is_of_all = is_pooled[crop] if is_pooled.any() else np.ones(crop.size, dtype=bool)
    of_all = slice(None) if is_of_all.all() else is_of_all
    whole, _ = medians(size[:, of_all])
    pooled, _ = windowed_medians(day[of_all], size[:, of_all], centres=KNOTS, reach=REACH_DAYS)
    pooled = np.where(np.isfinite(pooled), pooled, whole)
    return [
        _of_crop(day[crop == each], size[:, crop == each], pooled) for each in range(is_pooled.size)
    ]


def spread_in_pass(shortfall: Figures, *, middle: Figures, whole: Figures) -> Figures:
    """Return the spread of the looks of one crop in one pass.

    S² = v·p² + (1 - v)·whole² with v = (n - 1) / (n + 14), where p is the larger of `middle`
    and what the 0.7 quantile of the n absolute shortfalls in the pass tells.

    Parameters
    ----------
    shortfall
        Shape (looks, measures), NaN = unknown.
    middle, whole
        The crop's spreads on the day, shape (measures,).
    """
    tail, looks = quantiles(np.abs(shortfall.T), TAIL_IN_PASS)
    return _blended(tail, looks, middle, whole)


def past_spreads(starts: Counts, shortfalls: Rows, *, middle: Figures, whole: Figures) -> Figures:
    """Return the spread of every crop and pass of the past, shape (measures, groups).

    Parameters
    ----------
    starts
        Where the looks of each group (a crop in a pass) begin, shape (groups,).
    shortfalls
        Shape (measures, looks), NaN = unknown.
    middle, whole
        The spreads of each group's crop on its day, shape (measures, groups).
    """
    tail, looks = grouped_quantiles(starts, np.abs(shortfalls), TAIL_IN_PASS)
    return _blended(tail, looks, middle, whole)


def _blended(tail: Figures, looks: Counts, middle: Figures, whole: Figures) -> Figures:
    # A look says nothing of its own spread: the others do.
    others = np.maximum(looks - 1, 0)
    weight = others / (others + PRIOR_LOOKS)
    shown = np.fmax(middle, _spread_of(TAIL_IN_PASS) * tail)
    blended: Figures = np.sqrt(weight * shown**2 + (1.0 - weight) * whole**2)
    return blended


def _of_crop(day: Counts, size: Rows, pooled: Figures) -> Spreads:
    own, looks = windowed_medians(day, size, centres=KNOTS, reach=REACH_DAYS)
    weight = looks / (looks + PRIOR_LOOKS)
    squared = weight * np.nan_to_num(own) ** 2 + (1.0 - weight) * pooled**2
    middle = np.maximum(SPREAD_OF_MEDIAN * np.sqrt(squared), FLOOR)
    tail, looks = windowed_quantiles(day, size, TAIL, centres=KNOTS, reach=REACH_DAYS)
    known = np.where(looks >= LOOKS_OF_TAIL, _spread_of(TAIL) * tail, 0.0)
    return Spreads(middle=daily(middle), whole=daily(np.maximum(middle, known)))
