"""How far a parcel is off its crop at a time of the season, season after season.

o(τ) = ΣK·r / (ΣK + 4) with K = 1 - (d / 20)² for looks less than 20 days from τ, round the
year. Shrinking towards 0 after Efron and Morris 1975: a parcel with few looks is taken to be
like its crop.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Counts, Figures
from service.seasons.usual import YEAR_DAYS

REACH_DAYS: Final = 20
SHRINKAGE: Final = 4.0
"""Weight of the belief that a parcel is like its crop, in looks on the very day."""
OWN_WEIGHT: Final = 8.0
"""From this weight of own looks on, a baseline counts as the parcel's own."""
_CENTRE: Final = YEAR_DAYS // 2
_KEY_STEP: Final = 1024  # More than a year and the looks repeated beside it.


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OwnLooks:
    """What is left of past looks when the crop's level is taken off, by parcel and crop.

    Attributes
    ----------
    pairs
        (parcel, crop) → code.
    pair, day, season
        Of each look, shape (looks,); looks are in order of their day.
    residuals
        Observed minus level, winsorised, float32, shape (looks, measures), NaN = unknown.
    """

    pairs: Mapping[tuple[str, str], int]
    pair: NDArray[np.int32]
    day: NDArray[np.int32]
    season: NDArray[np.int32]
    residuals: NDArray[np.float32]

    def codes(self, parcels: Sequence[str], crops: Sequence[str]) -> Counts:
        """Return the code of each parcel with its crop; -1 where it never carried it."""
        found = (self.pairs.get(pair, -1) for pair in zip(parcels, crops, strict=True))
        return np.fromiter(found, np.int64, len(parcels))

    def offsets_on(self, day: int, codes: Counts) -> tuple[Figures, Figures]:
        """Return own offsets on a day of season, and the weight ΣK that each rests on.

        `codes` are those of parcels with their crops, shape (parcels,); both answers have
        shape (parcels, measures), 0 where there is no look.
        """
        near = self._near(day)
        kernel = _kernel(self.day[near], day)
        pair, residuals = self.pair[near], self.residuals[near]
        size = max(len(self.pairs), 1)
        weight = np.zeros((size + 1, residuals.shape[1]))
        summed = np.zeros_like(weight)
        for measure, column in enumerate(residuals.T):
            known = np.isfinite(column)
            some, share = pair[known], kernel[known]
            weight[:size, measure] = np.bincount(some, share, size)
            summed[:size, measure] = np.bincount(some, share * column[known], size)
        # Code -1 takes the last row, which stays 0.
        return shrunk(summed[codes], weight[codes]), weight[codes]

    def of_pair(self, code: int) -> "OwnLooks":
        """Return the looks of one parcel with its crop, as code 0; none for code -1."""
        chosen = np.flatnonzero(self.pair == code)
        return OwnLooks(
            pairs={pair: 0 for pair, each in self.pairs.items() if each == code},
            pair=np.zeros(chosen.size, dtype=np.int32),
            day=self.day[chosen],
            season=self.season[chosen],
            residuals=self.residuals[chosen],
        )

    def seasons(self) -> tuple[int, ...]:
        """Return the seasons of the looks."""
        return tuple(int(season) for season in np.unique(self.season))

    def _near(self, day: int) -> NDArray[np.int64]:
        """Return the places of looks near a day, round the year."""
        turns = (day - YEAR_DAYS, day, day + YEAR_DAYS)
        first = np.searchsorted(self.day, [turn - REACH_DAYS for turn in turns], side="right")
        last = np.searchsorted(self.day, [turn + REACH_DAYS for turn in turns], side="left")
        return np.concatenate([np.arange(a, max(a, b)) for a, b in zip(first, last, strict=True)])


def shrunk(summed: Figures, weight: Figures) -> Figures:
    """Return the offset for ΣK·r and ΣK."""
    offset: Figures = summed / (weight + SHRINKAGE)
    return offset


def offsets_without_own_season(
    pair: Counts, season: Counts, day: Counts, residuals: Figures
) -> Figures:
    """Return, for every past look, its parcel's offset as the other seasons give it.

    Parameters
    ----------
    pair, season, day
        Of each look, shape (looks,).
    residuals
        Shape (measures, looks), NaN = unknown.

    Returns
    -------
    Figures
        Shape (measures, looks); 0 where no other season has a look near the day.
    """
    within = pair * (season.max(initial=0) + 1) + season
    of_all, of_season = _Windows.around(pair, day), _Windows.around(within, day)
    offsets = np.empty_like(residuals)
    for measure, column in enumerate(residuals):
        known = np.isfinite(column)
        weight, summed = of_all.sums(day, known, column)
        own_weight, own_summed = of_season.sums(day, known, column)
        weight = np.maximum(weight - own_weight, 0.0)
        # Differences of running sums leave traces of rounding where nothing is.
        alone = weight < 1e-6
        offsets[measure] = shrunk(np.where(alone, 0.0, summed - own_summed), weight)
    return offsets


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Windows:
    """For every look, where the looks of its group within 20 days stand in a sorted row.

    Looks near the ends of the year stand there a second time, a year earlier or later, so
    that a window never runs round the end. K is a polynomial in the day, so sums over a
    window are differences of running sums.
    """

    look: Counts
    centred: Figures
    first: Counts
    last: Counts

    @classmethod
    def around(cls, group: Counts, day: Counts) -> "_Windows":
        _, code = np.unique(group, return_inverse=True)
        early = np.flatnonzero(day < REACH_DAYS)
        late = np.flatnonzero(day > YEAR_DAYS - REACH_DAYS)
        look = np.concatenate([np.arange(day.size), early, late])
        turned = np.concatenate([day, day[early] + YEAR_DAYS, day[late] - YEAR_DAYS])
        key = code[look] * _KEY_STEP + turned
        order = np.argsort(key, kind="stable")
        wanted = code * _KEY_STEP + day
        return cls(
            look=look[order],
            centred=turned[order].astype(np.float64) - _CENTRE,
            first=np.searchsorted(key[order], wanted - REACH_DAYS, side="right"),
            last=np.searchsorted(key[order], wanted + REACH_DAYS, side="left"),
        )

    def sums(
        self, day: Counts, known: NDArray[np.bool_], values: Figures
    ) -> tuple[Figures, Figures]:
        """Return ΣK and ΣK·value about every look."""
        at = day.astype(np.float64) - _CENTRE
        weight = self._sum(known.astype(np.float64), at)
        return weight, self._sum(np.where(known, values, 0.0), at)

    def _sum(self, values: Figures, at: Figures) -> Figures:
        row = values[self.look]
        zeroth, first, second = (
            self._between(row * power) for power in (1.0, self.centred, self.centred**2)
        )
        total: Figures = zeroth - (at**2 * zeroth - 2 * at * first + second) / REACH_DAYS**2
        return total

    def _between(self, row: Figures) -> Figures:
        running = np.concatenate([[0.0], np.cumsum(row)])
        difference: Figures = running[self.last] - running[self.first]
        return difference


def _kernel(days: NDArray[np.integer], day: int) -> Figures:
    apart = np.abs(days.astype(np.float64) - day)
    apart = np.minimum(apart, np.abs(YEAR_DAYS - apart))
    kernel: Figures = 1.0 - (apart / REACH_DAYS) ** 2
    return kernel
