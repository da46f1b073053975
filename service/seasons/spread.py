"""How far looks lie from what was expected of them."""

from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import (
    SPREAD_OF_MEDIAN,
    Counts,
    Figures,
    Rows,
    medians,
    windowed_medians,
)
from service.seasons.usual import KNOTS, Course, daily

REACH_DAYS: Final = 14
PRIOR_LOOKS: Final = 15.0
"""A crop with so many looks near a day counts as much as all crops together."""
FLOOR: Final = 0.015


def spreads(
    crop: Counts,
    day: Counts,
    shortfalls: Rows,
    *,
    is_pooled: NDArray[np.bool_],
) -> list[Course]:
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
    list of Course
        S² = w·s² + (1 - w)·s_all² with w = n / (n + 15), where s is 1.4826 times the median
        of the n absolute shortfalls of the crop within 14 days, and s_all that of all crops;
        at least 0.015. Every 4 days, linear between. Where no crop has a look near, s_all is
        that of the whole season.
    """
    order = np.argsort(day, kind="stable")
    crop, day, size = crop[order], day[order], np.abs(shortfalls[:, order])
    of_all = is_pooled[crop] if is_pooled.any() else np.ones(crop.size, dtype=bool)
    whole, _ = medians(size[:, of_all])
    pooled, _ = windowed_medians(day[of_all], size[:, of_all], centres=KNOTS, reach=REACH_DAYS)
    pooled = np.where(np.isfinite(pooled), pooled, whole)
    return [
        _of_crop(day[crop == each], size[:, crop == each], pooled) for each in range(is_pooled.size)
    ]


def _of_crop(day: Counts, size: Rows, pooled: Figures) -> Course:
    own, looks = windowed_medians(day, size, centres=KNOTS, reach=REACH_DAYS)
    weight = looks / (looks + PRIOR_LOOKS)
    squared = weight * np.nan_to_num(own) ** 2 + (1.0 - weight) * pooled**2
    return daily(np.maximum(SPREAD_OF_MEDIAN * np.sqrt(squared), FLOOR))
