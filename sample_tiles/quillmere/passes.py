"""When the satellites looked: dates of clear passes over past seasons and the running one."""

from datetime import UTC, date, datetime, time, timedelta
from typing import Final

import numpy as np

# Two satellites in one orbit come by in turn, five days apart; both pass at mid-morning.
REVISIT_DAYS: Final = 5
PLATFORMS: Final = ("sentinel-2a", "sentinel-2b")
PASS_TIME: Final = time(10, 6, 20, tzinfo=UTC)
# Clear looks of a past season, October to September: few in winter, many in summer.
CLEAR_BY_MONTH: Final = (2, 1, 1, 1, 1, 2, 3, 4, 4, 4, 4, 3)
SCENES: Final = 18
FIRST_SCENE_DAY: Final = 185
SCENE_PASSES: Final = 28


def season_start(year: int) -> date:
    """Return the first day of the season that ends in a year."""
    return date(year - 1, 10, 1)


def clear_days(year: int, *, seed: int) -> list[int]:
    """Return days of a past season, from 0, on which a pass was clear."""
    random = np.random.default_rng([seed, year, 1])
    days = np.arange(random.integers(REVISIT_DAYS), 365, REVISIT_DAYS)
    months = [(season_start(year) + timedelta(days=int(day))).month for day in days]
    chosen: list[int] = []
    for at, count in enumerate(CLEAR_BY_MONTH):
        of_month = days[np.asarray(months) == (at + 9) % 12 + 1]
        chosen += sorted(int(day) for day in random.choice(of_month, count, replace=False))
    return chosen


def scene_days(year: int, *, seed: int) -> list[int]:
    """Return days of the running season with a scene, 5 or 10 days apart."""
    random = np.random.default_rng([seed, year, 1])
    steps = np.full(SCENES - 1, 2)
    # As many short steps as fill the span from the first pass to the last.
    short = random.choice(SCENES - 1, 2 * (SCENES - 1) - (SCENE_PASSES - 1), replace=False)
    steps[short] = 1
    first = FIRST_SCENE_DAY + random.integers(REVISIT_DAYS)
    return [int(first + REVISIT_DAYS * step) for step in (0, *np.cumsum(steps))]


def acquired_at(year: int, day: int) -> datetime:
    """Return the instant of the pass of a day; it wanders by some seconds."""
    at = datetime.combine(season_start(year) + timedelta(days=day), PASS_TIME)
    return at + timedelta(seconds=(7 * day + year) % 23)


def platform_of(day: int) -> str:
    """Return which of the two satellites passes on a day."""
    return PLATFORMS[day // REVISIT_DAYS % 2]
