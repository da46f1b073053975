"""How far a crop is off its usual course in one pass."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Counts, Figures, grouped_medians, medians
from service.seasons.usual import YEAR_DAYS, Course, change_nearby

PRIOR_LOOKS: Final = 3.0
"""A cohort of this many looks counts as much as what it did in the pass before."""
KEPT_SHARE: Final = 0.8
"""Share of the last level that is believed to last until this pass."""
LOOKS_TO_CARRY: Final = 5
"""A level rests on at least so many looks to be carried on to later passes."""
LOOKS_OF_NEW_CROP: Final = 8
"""A crop without history is judged only in a cohort of at least so many looks."""
NEW_CROP_SPREAD: Final = 0.03
NEW_CROP_DAYS: Final = 1.7
"""How many days parcels of a crop without history are ahead or behind each other."""
LATER_DAYS: Final = 5
EARLIER_DAYS: Final = 3
RISE_DAYS: Final = 20
"""Over how many past days the rise of the usual value is told."""
"""How far a parcel may be ahead of or behind its baseline without having departed."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Carried:
    """What a crop's cohort hands on to later passes of the season; NaN = nothing yet.

    `level` is the last level that rested on at least 5 looks; `median` and its `day` are
    those of the last pass in which the crop had no history. Shapes (measures,).
    """

    level: Figures
    median: Figures
    day: int | None

    @classmethod
    def nothing(cls, measures: int) -> "Carried":
        """Return what the first pass of a season starts from."""
        unknown = np.full(measures, np.nan)
        return cls(level=unknown, median=unknown, day=None)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Cohort:
    """One crop in one pass; all arrays have shape (measures,), NaN = unknown.

    Attributes
    ----------
    usual
        Usual value of the crop on the day.
    level
        How far the crop is off it in this pass.
    spread
        Spread of looks about what is expected of them.
    lower, higher
        By how much the usual value gets lower, and higher, 5 days later or 3 earlier.
    rising
        By how much the usual value rose over the past 20 days.
    looks
        Looks of the crop in the pass.
    is_new
        Whether the crop has no history at this time of the season.
    """

    usual: Figures
    level: Figures
    spread: Figures
    lower: Figures
    higher: Figures
    rising: Figures
    looks: int
    is_new: bool

    @property
    def is_too_small(self) -> bool:
        """Whether a crop without history has too few looks to be judged."""
        return self.is_new and self.looks < LOOKS_OF_NEW_CROP


def level_of(shift: Figures, looks: NDArray[np.integer], last: Figures) -> Figures:
    """Return a crop's level from its median shift in a pass and its last level.

    M = w·m + (1 - w)·0.8·last with w = n / (n + 3); an unknown shift or last level counts
    as 0. All of one shape.
    """
    weight = looks / (looks + PRIOR_LOOKS)
    level: Figures = weight * np.nan_to_num(shift)
    level += (1.0 - weight) * KEPT_SHARE * np.nan_to_num(last)
    return level


def known_crop(
    values: Figures, course: Course, spread: Course, *, day: int, carried: Carried
) -> tuple[Cohort, Carried]:
    """Return the cohort of a crop with history, and what it hands on.

    Parameters
    ----------
    values
        Looks of the crop in the pass, shape (looks, measures), NaN = unknown.
    course, spread
        The crop's usual course and its spread, shape (DAYS, measures).
    day
        Day of season of the pass.
    carried
        What earlier passes of the season handed on.
    """
    shift, looks = medians((values - course[day]).T)
    lower, higher = change_nearby(course, day, later=LATER_DAYS, earlier=EARLIER_DAYS)
    cohort = Cohort(
        usual=course[day],
        level=level_of(shift, looks, carried.level),
        spread=spread[day],
        lower=lower,
        higher=higher,
        rising=course[day] - course[(day - RISE_DAYS) % YEAR_DAYS],
        looks=len(values),
        is_new=False,
    )
    level = np.where((looks >= LOOKS_TO_CARRY) & np.isfinite(shift), shift, carried.level)
    return cohort, Carried(level=level, median=carried.median, day=carried.day)


def new_crop(values: Figures, *, day: int, carried: Carried) -> tuple[Cohort, Carried]:
    """Return the cohort of a crop without history, and what it hands on.

    Its median in the pass stands for the usual value; how fast that moves is read from the
    pass before, and is 0 in the first one. S² = 0.03² + (1.7 days · dμ/dτ)².
    """
    median, _ = medians(values.T)
    rate = np.full_like(median, np.nan)
    if carried.day is not None and day > carried.day:
        rate = (median - carried.median) / (day - carried.day)
    slope = np.nan_to_num(rate)
    cohort = Cohort(
        usual=median,
        level=np.zeros_like(median),
        spread=np.hypot(NEW_CROP_SPREAD, NEW_CROP_DAYS * slope),
        lower=np.maximum(0.0, np.maximum(-LATER_DAYS * slope, EARLIER_DAYS * slope)),
        higher=np.maximum(0.0, np.maximum(LATER_DAYS * slope, -EARLIER_DAYS * slope)),
        rising=RISE_DAYS * rate,
        looks=len(values),
        is_new=True,
    )
    return cohort, Carried(level=carried.level, median=median, day=day)


def past_levels(segment: Counts, starts: Counts, shifts: Figures) -> Figures:
    """Return the level of every crop and pass of the past.

    Parameters
    ----------
    segment
        Crop and season of each group, as one ascending number, shape (groups,).
    starts
        Where the looks of each group (a crop in a pass, in order of acquisition within its
        segment) begin, shape (groups,).
    shifts
        Observed minus usual, shape (measures, looks), NaN = unknown.

    Returns
    -------
    Figures
        Shape (measures, groups).
    """
    shift, looks = grouped_medians(starts, shifts)
    # The place of the newest group at or before each that has enough looks; -1 for none.
    enough = np.where(looks >= LOOKS_TO_CARRY, np.arange(starts.size), -1)
    newest = np.maximum.accumulate(enough, axis=1)
    before = np.column_stack([np.full(len(newest), -1, dtype=np.int64), newest[:, :-1]])
    before = before[:, : starts.size]
    in_segment = (before >= 0) & (segment[before] == segment)
    last = np.where(in_segment, np.take_along_axis(shift, before, axis=1), np.nan)
    return level_of(shift, looks, last)
