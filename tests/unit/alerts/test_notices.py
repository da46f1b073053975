"""Regional notices: a shift that the crops of a region share."""

from datetime import datetime, timedelta
from math import nan

import pytest

from service.alerts.notices import (
    CropShift,
    Notice,
    NoticeState,
    Region,
    season_over,
    watch_region,
)
from tests.scored_looks import FIRST

CROPS = ("barley", "beet", "maize")


def crop(
    name: str,
    moisture: float,
    *,
    looks: int = 8,
    green: float = 0.8,
    haze: float = 0.0,
    rising: float = 0.0,
    dryness: float | None = None,
) -> CropShift:
    """Return a crop's shift; without a word on 1.6 µm, by so much as moisture tells alone."""
    return CropShift(
        crop=name,
        looks=looks,
        moisture=moisture,
        dryness=-moisture / 2 if dryness is None else dryness,
        green=green,
        rising=rising,
        haze=haze,
    )


def at(day: int) -> datetime:
    return FIRST + timedelta(days=day)


def watched(
    shifts: list[float], *, every_days: int = 5, region: Region | None = None, first: int = 0
) -> tuple[Region, list[Notice]]:
    """Return memory and notices after passes in which all crops share a shift."""
    region, told = region or Region(name="10-01"), []
    for number, shift in enumerate(shifts):
        region, new = watch_region(
            region,
            [crop(name, shift) for name in CROPS],
            at=at(first + every_days * number),
        )
        told += new
    return region, told


def test_three_dry_passes_of_four_open_a_notice() -> None:
    for shifts in ([-0.05] * 3, [-0.05, -0.01, -0.06, -0.05]):
        region, (notice,) = watched(shifts)
        assert notice.state is NoticeState.OPEN
        assert notice.opened_at == at(5 * (len(shifts) - 1))
        assert (notice.measure, notice.crops) == ("ndmi", CROPS)
        assert region.notice == notice
    for shifts in ([-0.05] * 2, [-0.045] * 8, [-0.05, 0.0, 0.0, -0.05, -0.05, 0.0, 0.0]):
        assert watched(shifts)[1] == []


@pytest.mark.parametrize(("every_days", "notices"), [(3, 0), (4, 1)])
def test_what_lasts_less_than_eight_days_is_weather(every_days: int, notices: int) -> None:
    assert len(watched([-0.06] * 3, every_days=every_days)[1]) == notices


def test_a_notice_closes_after_three_passes_of_four_above_half_its_limit() -> None:
    region, told = watched([-0.05] * 3 + [-0.01, -0.03, -0.02, -0.02])
    assert [notice.state.value for notice in told] == ["open", "closed"]
    assert (told[-1].closed_at, told[-1].id, region.notice) == (at(30), told[0].id, None)
    assert region.recent == (), "the next one starts from nothing"


def test_a_deeper_shift_moves_an_open_notice() -> None:
    _, told = watched([-0.05, -0.05, -0.05, -0.08, -0.06])
    assert [notice.shift for notice in told] == [-0.05, -0.08]


def test_the_median_crop_tells() -> None:
    region = Region()
    for number in range(3):
        region, told = watch_region(
            region,
            [crop("barley", -0.09), crop("beet", -0.06), crop("maize", 0.01)],
            at=at(5 * number),
        )
    (notice,) = told
    assert (notice.shift, notice.crops) == (-0.06, ("barley", "beet"))


@pytest.mark.parametrize(
    "silent",
    [
        crop("beet", -0.06, looks=7),
        crop("beet", -0.06, green=0.4),
        crop("beet", -0.06, haze=0.015),
        crop("beet", -0.06, rising=-0.1),
        crop("beet", nan, dryness=0.03),
    ],
    ids=["few", "bare", "hazy", "ripening", "unknown"],
)
def test_a_crop_that_does_not_tell_leaves_too_few(silent: CropShift) -> None:
    assert not silent.tells
    region = Region()
    for number in range(6):
        region, told = watch_region(
            region, [crop("barley", -0.06), silent, crop("maize", -0.06)], at=at(5 * number)
        )
        assert told == []
    assert region.recent == ()


def test_less_cover_is_no_drought() -> None:
    # Ripe early or cut: NDMI falls, 1.6 µm hardly rises.
    assert crop("barley", -0.10, dryness=0.01).shift == pytest.approx(-0.025)
    assert crop("barley", -0.10, dryness=0.06).shift == -0.10
    assert crop("barley", -0.10, dryness=nan).shift == -0.10


def test_identity_is_region_kind_and_opening() -> None:
    _, (first,) = watched([-0.05] * 3)
    _, (again,) = watched([-0.05] * 3)
    _, (later,) = watched([-0.05] * 3, first=1)
    _, (elsewhere,) = watched([-0.05] * 3, region=Region(name="04-01"))
    assert first.id == again.id
    assert len({first.id, later.id, elsewhere.id}) == 3


def test_the_end_of_a_season_closes_a_notice() -> None:
    region, _ = watched([-0.05] * 3)
    after, (closed,) = season_over(region, at=at(40))
    assert (closed.state, closed.closed_at) == (NoticeState.CLOSED, at(40))
    assert after == Region(name="10-01")
    assert season_over(after, at=at(41)) == (after, [])


def test_a_region_is_kept_and_read_again() -> None:
    for shifts in ([], [-0.05], [-0.05] * 3):
        region, told = watched(shifts)
        assert Region.from_dict(region.as_dict()) == region
        assert all(Notice.from_dict(notice.as_dict()) == notice for notice in told)
