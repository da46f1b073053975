"""The season axis: crop years that need not be calendar years."""

from dataclasses import dataclass
from datetime import date, timedelta


@dataclass(frozen=True, slots=True, kw_only=True)
class SeasonStart:
    """The day on which each crop year begins."""

    month: int
    day: int

    @classmethod
    def parse(cls, text: str) -> "SeasonStart":
        """Read ``MM-DD``."""
        month, day = text.split("-")
        return cls(month=int(month), day=int(day))

    def in_year(self, year: int) -> date:
        """Return the start that falls into a calendar year."""
        return date(year, self.month, self.day)


def season_ending_in(year: int, start: SeasonStart) -> tuple[date, date]:
    """Return first and last day of the crop year that ends in a calendar year.

    With a start on 1 October, 2024 is 2023-10-01 to 2024-09-30; with a start on 1 January
    the crop year is the calendar year.
    """
    is_calendar_year = (start.month, start.day) == (1, 1)
    return season_from(start.in_year(year if is_calendar_year else year - 1), start)


def season_from(first: date, start: SeasonStart) -> tuple[date, date]:
    """Return the crop year that begins on a day."""
    return first, start.in_year(first.year + 1) - timedelta(days=1)


def season_holding(day: date, start: SeasonStart) -> tuple[date, date]:
    """Return first and last day of the crop year that holds a day."""
    first = start.in_year(day.year)
    if first > day:
        first = start.in_year(day.year - 1)
    return season_from(first, start)


def day_of_season(day: date, start: SeasonStart) -> tuple[int, int]:
    """Return the crop year that holds a day, named by the year it ends in, and the day of it.

    The first day is 0. With a start on 1 October, 2023-10-02 is day 1 of 2024.
    """
    first, last = season_holding(day, start)
    return last.year, (day - first).days
