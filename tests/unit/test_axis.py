"""Crop years that need not be calendar years."""

from datetime import date, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.seasons.axis import SeasonStart, season_ending_in, season_from, season_holding

STARTS = st.builds(
    SeasonStart, month=st.integers(min_value=1, max_value=12), day=st.integers(1, 28)
)
DAYS = st.dates(min_value=date(1900, 1, 1), max_value=date(2200, 12, 31))
DAY = timedelta(days=1)


@pytest.mark.parametrize(
    ("start", "year", "first", "last"),
    [
        # The contract's own example: a start on 1 October.
        ("10-01", 2024, date(2023, 10, 1), date(2024, 9, 30)),
        # The southern default.
        ("04-01", 2024, date(2023, 4, 1), date(2024, 3, 31)),
        ("01-01", 2024, date(2024, 1, 1), date(2024, 12, 31)),
        ("01-02", 2024, date(2023, 1, 2), date(2024, 1, 1)),
        # A leap day is inside, and at an end.
        ("03-01", 2024, date(2023, 3, 1), date(2024, 2, 29)),
        ("03-01", 2023, date(2022, 3, 1), date(2023, 2, 28)),
    ],
)
def test_a_year_names_the_crop_year_that_ends_in_it(
    start: str, year: int, first: date, last: date
) -> None:
    assert season_ending_in(year, SeasonStart.parse(start)) == (first, last)


@given(day=DAYS, start=STARTS)
def test_every_day_lies_in_one_crop_year_of_about_a_year(day: date, start: SeasonStart) -> None:
    first, last = season_holding(day, start)
    assert first <= day <= last
    assert (first.month, first.day) == (start.month, start.day)
    assert (last - first).days in (364, 365)


@given(day=DAYS, start=STARTS)
def test_crop_years_follow_one_another_without_gap(day: date, start: SeasonStart) -> None:
    first, last = season_holding(day, start)
    assert season_holding(first, start) == season_holding(last, start) == (first, last)
    assert season_holding(first - DAY, start)[1] == first - DAY
    assert season_holding(last + DAY, start)[0] == last + DAY


@given(day=DAYS, start=STARTS)
def test_a_crop_year_is_named_by_the_year_of_its_last_day(day: date, start: SeasonStart) -> None:
    first, last = season_holding(day, start)
    assert season_ending_in(last.year, start) == (first, last) == season_from(first, start)
