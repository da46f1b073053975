"""Which crop year and which day of it a date is."""

from datetime import date

import pytest

from service.seasons.axis import SeasonStart, day_of_season

NORTH, SOUTH = SeasonStart(month=10, day=1), SeasonStart(month=4, day=1)


@pytest.mark.parametrize(
    ("day", "start", "expected"),
    [
        (date(2023, 10, 1), NORTH, (2024, 0)),
        (date(2023, 9, 30), NORTH, (2023, 364)),
        (date(2024, 9, 30), NORTH, (2024, 365)),  # 2024 is a leap year
        (date(2024, 3, 31), SOUTH, (2024, 365)),
        (date(2024, 4, 1), SOUTH, (2025, 0)),
        (date(2024, 12, 31), SeasonStart(month=1, day=1), (2024, 365)),
    ],
)
def test_a_day_has_its_place_in_a_crop_year(
    day: date, start: SeasonStart, expected: tuple[int, int]
) -> None:
    assert day_of_season(day, start) == expected
