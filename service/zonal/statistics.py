"""Coverage-weighted statistics of many zones at once.

Everywhere here ``values`` and ``weights`` hold the cells of one zone after the other, and
zone i owns the entries ``indptr[i]:indptr[i + 1]``. A NaN value is a cell that does not
count, and so are a weight of 0 and a false in ``counts``; a zone without a cell that counts has
NaN for every statistic and a weight of 0. Sums are in float64, in an order that depends on the
zone alone, so that its figures do not depend on other zones.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled
from service.zonal.ordering import distinct

Figures = NDArray[np.float64]

_SHARES: Final = np.array([0.1, 0.5, 0.9])
_MEAN, _SD, _MIN, _P10, _MAX, _WEIGHT = 0, 1, 2, 3, 6, 7
_NAMES: Final = ("mean", "sd", "min", "p10", "p50", "p90", "max", "weight")
_FIGURES: Final = len(_NAMES)


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


def summarise(
    values: NDArray[np.float32],
    weights: NDArray[np.float32],
    indptr: NDArray[np.int64],
    counts: NDArray[np.bool_] | None = None,
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
    counts
        Which cells count, shape (cells,); all, if not given.

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
    if counts is None:
        counts = np.ones(len(values), dtype=np.bool_)
    figures = _columns(_summarised(values, weights, indptr, counts, _SHARES))
    return Summary(**dict(zip(_NAMES, figures, strict=True)))


def mean_and_sd(
    values: NDArray[np.float64],
    weights: NDArray[np.float32],
    indptr: NDArray[np.int64],
    counts: NDArray[np.bool_] | None = None,
) -> tuple[Figures, Figures]:
    """Weighted mean and population standard deviation of each zone.

    Parameters
    ----------
    values
        Shape (cells,), any unit; NaN does not count.
    weights, indptr, counts
        As in `summarise`.

    Returns
    -------
    tuple
        Mean and standard deviation (in two passes), each of shape (zones,); NaN where no
        cell counts.
    """
    if counts is None:
        counts = np.ones(len(values), dtype=np.bool_)
    mean, sd = _columns(_means(values, weights, indptr, counts))
    return mean, sd


def sums_by_bit(
    marks: NDArray[np.uint8], weights: NDArray[np.float32], indptr: NDArray[np.int64]
) -> Figures:
    """Add up the weights of the cells that have each of eight marks.

    Parameters
    ----------
    marks
        One mark to a bit, shape (cells,).
    weights, indptr
        As in `summarise`.

    Returns
    -------
    Figures
        Shape (zones, 9): by bit, lowest first, and last the sum of all weights.
    """
    return _sums_by_bit(marks, weights, indptr)


def _columns(figures: Figures) -> list[Figures]:
    return [np.ascontiguousarray(column) for column in figures.T]


@compiled
def _sums_by_bit(
    marks: NDArray[np.uint8], weights: NDArray[np.float32], indptr: NDArray[np.int64]
) -> Figures:
    sums = np.zeros((len(indptr) - 1, 9))
    for zone in range(len(indptr) - 1):
        own = sums[zone]
        for at in range(indptr[zone], indptr[zone + 1]):
            weight = np.float64(weights[at])
            own[8] += weight
            left = marks[at]
            bit = 0
            while left:
                if left & 1:
                    own[bit] += weight
                left >>= 1
                bit += 1
    return sums


@compiled
def _means(
    values: NDArray[np.float64],
    weights: NDArray[np.float32],
    indptr: NDArray[np.int64],
    counts: NDArray[np.bool_],
) -> Figures:
    found = np.full((len(indptr) - 1, 2), np.nan)
    for zone in range(len(indptr) - 1):
        total, first, second = 0.0, 0.0, 0.0
        for at in range(indptr[zone], indptr[zone + 1]):
            if counts[at] and weights[at] > 0 and not np.isnan(values[at]):
                total += weights[at]
                first += weights[at] * np.float64(values[at])
        if total == 0:
            continue
        mean = first / total
        for at in range(indptr[zone], indptr[zone + 1]):
            if counts[at] and weights[at] > 0 and not np.isnan(values[at]):
                apart = values[at] - mean
                second += weights[at] * (apart * apart)
        found[zone, 0] = mean
        found[zone, 1] = np.sqrt(second / total)
    return found


@compiled
def _summarised(
    values: NDArray[np.float32],
    weights: NDArray[np.float32],
    indptr: NDArray[np.int64],
    counts: NDArray[np.bool_],
    shares: Figures,
) -> Figures:
    zones = len(indptr) - 1
    found = np.full((zones, _FIGURES), np.nan)
    longest = 1
    for zone in range(zones):
        longest = max(longest, indptr[zone + 1] - indptr[zone])
    packed = np.empty(longest, np.uint64)
    spare = np.empty(longest, np.uint64)
    joint = packed.view(np.float64)
    kept = np.empty(longest, np.float32)
    ends = np.empty(longest + 1, np.int32)
    for zone in range(zones):
        start, stop = indptr[zone], indptr[zone + 1]
        number = distinct(values, weights, counts, start, stop, packed, spare, kept, ends)
        found[zone, _WEIGHT] = 0.0
        if number:
            _read(kept, joint, number, shares, found[zone])
    return found


@compiled
def _read(
    values: NDArray[np.float32], weights: Figures, number: int, shares: Figures, figures: Figures
) -> None:
    """Read the figures of one zone from its distinct values and their joint weights."""
    last = number - 1
    total, first = 0.0, 0.0
    for at in range(last + 1):
        total += weights[at]
        first += weights[at] * values[at]
    # The last bit of a rounded sum may leave the range of the values.
    mean = min(max(first / total, np.float64(values[0])), np.float64(values[last]))
    second, before = 0.0, 0.0
    place, low = 0.0, np.float64(values[0])
    wanted = 0
    for at in range(last + 1):
        value = np.float64(values[at])
        apart = value - mean
        second += weights[at] * (apart * apart)
        here = at * weights[at] + last * before
        while wanted < len(shares) and here > shares[wanted] * last * total:
            part = (shares[wanted] * last * total - place) / (here - place)
            # Values of very different size may round past the neighbour.
            figures[_P10 + wanted] = min(max(low + part * (value - low), low), value)
            wanted += 1
        before += weights[at]
        place, low = here, value
    for late in range(wanted, len(shares)):
        figures[_P10 + late] = np.float64(values[last])
    figures[_MEAN] = mean
    figures[_SD] = np.sqrt(second / total)
    figures[_MIN] = values[0]
    figures[_MAX] = values[last]
    figures[_WEIGHT] = total
