"""The past as it would have been judged: each look with its own season left out."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.cohort import EARLIER_DAYS, LATER_DAYS
from service.seasons.departure import scores, suspect_looks
from service.seasons.history import Flags
from service.seasons.medians import Counts, Figures
from service.seasons.usual import DAYS, Course, change_nearby

_CHUNK: Final = 65_536


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Past:
    """Looks of finished seasons against baselines without their own season.

    Attributes
    ----------
    measures, crops, parcels
        Names that columns and codes stand for.
    parcel, crop, season, day, pass_at
        Of each look, by crop, season, pass and parcel, shape (looks,).
    shortfall
        Observed minus expected, float32, shape (measures, looks), NaN = unknown.
    level
        How far the crop was off its usual course in the pass, same shape.
    spread
        By crop and pass, float32, shape (measures, groups).
    group
        The crop and pass of each look, shape (looks,).
    usual
        By crop over the season, shape (crops, DAYS, measures).
    is_known
        Whether a person said that the departure was real, shape (looks,).
    """

    measures: tuple[str, ...]
    crops: tuple[str, ...]
    parcels: tuple[str, ...]
    parcel: Counts
    crop: Counts
    season: Counts
    day: Counts
    pass_at: Counts
    shortfall: NDArray[np.float32]
    level: NDArray[np.float32]
    spread: NDArray[np.float32]
    group: Counts
    usual: Figures
    is_known: Flags

    def scores(self, signs: Mapping[str, float], *, relieved: bool) -> Figures:
        """Return the score of every look, shape (looks,), NaN for suspect and unknown ones.

        Parameters
        ----------
        signs
            Watched measure → -1 where lower is worse, 1 where higher is worse.
        relieved
            Whether the tolerance in time is taken off, as it is in judging.
        """
        watched = [at for at, measure in enumerate(self.measures) if measure in signs]
        worse = np.array([signs[self.measures[at]] for at in watched])
        reliefs = self._reliefs(watched, worse) if relieved else None
        found = np.full(self.crop.size, np.nan)
        for first in range(0, found.size, _CHUNK):
            some = slice(first, first + _CHUNK)
            crop, day = self.crop[some], self.day[some]
            short = self.shortfall[:, some].T.astype(np.float64)
            own = short + self.level[:, some].T
            relief = 0.0 if reliefs is None else reliefs[crop, day]
            spread = self.spread[watched][:, self.group[some]].T
            adverse = (worse * short[:, watched] - relief) / spread
            by_calendar = (worse * own[:, watched] - relief) / spread
            score, _ = scores(adverse, by_calendar)
            score[suspect_looks(short, self.measures)] = np.nan
            found[some] = score
        return found

    def clear_looks(self, scored: Figures) -> Counts:
        """Return how many clear looks the crop of each look had in its pass."""
        if scored.size == 0:
            return np.zeros(0, dtype=np.int64)
        clear: Counts = np.bincount(self.group, np.isfinite(scored))[self.group].astype(np.int64)
        return clear

    def _reliefs(self, watched: list[int], worse: Figures) -> Figures:
        """Return by how much the usual value gets worse nearby, (crops, DAYS, watched)."""
        found = np.zeros((len(self.crops), DAYS, len(watched)))
        for crop, course in enumerate(self.usual[:, :, watched]):
            found[crop] = _relief_by_day(course, worse)
        return found


def _relief_by_day(course: Course, worse: Figures) -> Figures:
    relief = np.empty_like(course)
    for day in range(DAYS):
        lower, higher = change_nearby(course, day, later=LATER_DAYS, earlier=EARLIER_DAYS)
        relief[day] = np.where(worse < 0, lower, higher)
    return relief
