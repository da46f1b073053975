"""Medians over many looks at once, NaN left out."""

from typing import Final

import numpy as np
from numpy.typing import NDArray

Figures = NDArray[np.float64]
Rows = NDArray[np.floating]
"""Rows of looks, in either width: half the bytes sort in half the time."""
Counts = NDArray[np.int64]

SPREAD_OF_MEDIAN: Final = 1.4826
"""Median absolute deviation → standard deviation of a normal distribution (1 / Φ⁻¹(3/4))."""


def medians(values: Rows) -> tuple[Figures, Counts]:
    """Return the median of each row and how many numbers it rests on.

    Parameters
    ----------
    values
        Shape (measures, looks), NaN = unknown.

    Returns
    -------
    tuple
        Medians, shape (measures,), NaN where a row has no number; counts, shape (measures,).
    """
    count = np.count_nonzero(np.isfinite(values), axis=1)
    if values.shape[1] == 0:
        return np.full(values.shape[0], np.nan), count
    if count.min() == values.shape[1]:
        return np.median(values, axis=1).astype(np.float64), count
    # Sorting puts NaN last, so the numbers of a row stand in front.
    return _middle(np.sort(values, axis=1), np.zeros_like(count), count), count


def windowed_medians(
    day: Counts, values: Rows, *, centres: Counts, reach: int
) -> tuple[Figures, Counts]:
    """Return medians of the looks within `reach` days of each centre.

    Parameters
    ----------
    day
        Day of season of each look, ascending, shape (looks,).
    values
        Shape (measures, looks), NaN = unknown.
    centres
        Days of season, shape (centres,).
    reach
        Days to either side that count, both ends included.

    Returns
    -------
    tuple
        Medians and counts, shape (centres, measures).
    """
    first = np.searchsorted(day, centres - reach, side="left")
    last = np.searchsorted(day, centres + reach, side="right")
    found = [medians(values[:, a:b]) for a, b in zip(first, last, strict=True)]
    return np.stack([median for median, _ in found]), np.stack([count for _, count in found])


def grouped_medians(starts: Counts, values: Figures) -> tuple[Figures, Counts]:
    """Return the median of each group of neighbouring looks.

    Parameters
    ----------
    starts
        Where each group begins, ascending from 0, shape (groups,).
    values
        Shape (measures, looks), NaN = unknown.

    Returns
    -------
    tuple
        Medians and counts, shape (measures, groups).
    """
    group = _groups(starts, values.shape[1])
    found = np.empty((values.shape[0], starts.size))
    counts = np.empty((values.shape[0], starts.size), dtype=np.int64)
    for measure, row in enumerate(values):
        counts[measure] = np.bincount(group[np.isfinite(row)], minlength=starts.size)
        ranked = row[np.lexsort((row, group))]
        found[measure] = _middle(ranked[None, :], starts, counts[measure])
    return found, counts


def quantiles(values: Rows, share: float) -> tuple[Figures, Counts]:
    """Return a quantile of each row, and how many numbers it rests on.

    As `medians` does for the middle: NaN left out, NaN where a row has no number. The lower
    neighbour is taken, so that the largest of a few numbers never counts.
    """
    count = np.count_nonzero(np.isfinite(values), axis=1)
    if values.shape[1] == 0:
        return np.full(values.shape[0], np.nan), count
    return _at_share(np.sort(values, axis=1), np.zeros_like(count), count, share), count


def windowed_quantiles(
    day: Counts, values: Rows, share: float, *, centres: Counts, reach: int
) -> tuple[Figures, Counts]:
    """Return quantiles of the looks within `reach` days of each centre, as `windowed_medians`."""
    first = np.searchsorted(day, centres - reach, side="left")
    last = np.searchsorted(day, centres + reach, side="right")
    found = [quantiles(values[:, a:b], share) for a, b in zip(first, last, strict=True)]
    return np.stack([each for each, _ in found]), np.stack([count for _, count in found])


def grouped_quantiles(starts: Counts, values: Rows, share: float) -> tuple[Figures, Counts]:
    """Return a quantile of each group of neighbouring looks, as `grouped_medians`."""
    group = _groups(starts, values.shape[1])
    found = np.empty((values.shape[0], starts.size))
    counts = np.empty((values.shape[0], starts.size), dtype=np.int64)
    for measure, row in enumerate(values):
        counts[measure] = np.bincount(group[np.isfinite(row)], minlength=starts.size)
        ranked = row[np.lexsort((row, group))]
        found[measure] = _at_share(ranked[None, :], starts, counts[measure], share)
    return found, counts


def _groups(starts: Counts, looks: int) -> Counts:
    return np.repeat(np.arange(starts.size), np.diff(np.append(starts, looks)))


def _at_share(ranked: Rows, starts: Counts, count: Counts, share: float) -> Figures:
    """Return what stands at a share of `count` ascending numbers from each start on."""
    rows = np.arange(count.size) if ranked.shape[0] > 1 else np.zeros(count.size, dtype=np.int64)
    place = np.floor(share * np.maximum(count - 1, 0)).astype(np.int64)
    found = ranked[rows, np.minimum(starts + place, ranked.shape[1] - 1)]
    return np.where(count > 0, found, np.nan).astype(np.float64)


def _middle(ranked: Rows, starts: Counts, count: Counts) -> Figures:
    """Return the middle of `count` ascending numbers from each start on; NaN for none."""
    rows = np.arange(count.size) if ranked.shape[0] > 1 else np.zeros(count.size, dtype=np.int64)
    below = ranked[rows, starts + np.maximum(count - 1, 0) // 2]
    above = ranked[rows, starts + np.where(count > 0, count // 2, 0)]
    return np.where(count > 0, 0.5 * (below + above), np.nan).astype(np.float64)
