"""The usual course of each crop over the season, and how to read a course on any day."""

from typing import Final

import numpy as np

from service.seasons.medians import Counts, Figures, Rows, windowed_medians

YEAR_DAYS: Final = 365
DAYS: Final = YEAR_DAYS + 1
"""Days of a season axis: the last one is used in leap years only."""
KNOTS: Final = np.arange(0, 365, 4)
"""Days at which a course is worked out; it is linear between them."""
REACH_DAYS: Final = 8
LOOKS_NEEDED: Final = 5

Course = Figures
"""A value for every day of season and measure, shape (DAYS, measures), NaN = unknown."""


def usual_course(day: Counts, values: Rows) -> Course:
    """Return the usual course of one crop.

    Parameters
    ----------
    day
        Day of season of all history looks of the crop, ascending, shape (looks,).
    values
        Shape (measures, looks), NaN = unknown.

    Returns
    -------
    Course
        Median of the looks within 8 days, every 4 days where at least 5 looks are, linear
        between. NaN further than those 8 days before the first or behind the last such day.

    Notes
    -----
    The windows do not run round the ends of the axis: before its first day a parcel usually
    carried something else.
    """
    found, count = windowed_medians(day, values, centres=KNOTS, reach=REACH_DAYS)
    return daily(np.where(count >= LOOKS_NEEDED, found, np.nan), held_days=REACH_DAYS)


def daily(at_knots: Figures, *, held_days: int = DAYS) -> Course:
    """Return a course linear between the known knots, and level for some days outside them.

    Parameters
    ----------
    at_knots
        Shape (knots, measures), NaN = unknown.
    held_days
        How long the first and the last known value hold beyond their knot.

    Returns
    -------
    Course
        NaN where nothing is known near enough.
    """
    days = np.arange(DAYS)
    course = np.full((DAYS, at_knots.shape[1]), np.nan)
    for measure, column in enumerate(at_knots.T):
        known = np.isfinite(column)
        if not known.any():
            continue
        knots = KNOTS[known]
        near = (days >= knots[0] - held_days) & (days <= knots[-1] + held_days)
        course[near, measure] = np.interp(days[near], knots, column[known])
    return course


def change_nearby(course: Course, day: int, *, later: int, earlier: int) -> tuple[Figures, Figures]:
    """Return by how much a course is lower, and by how much higher, on days near a day.

    Both are 0 or more, shape (measures,), NaN where the course is unknown on that day. Days
    run round the year: what stands at the end of the axis goes on behind it.
    """
    near = course[np.arange(day - earlier, day + later + 1) % YEAR_DAYS]
    here = course[day]
    lower = here - np.fmin.reduce(near, axis=0)
    higher = np.fmax.reduce(near, axis=0) - here
    return lower, higher
