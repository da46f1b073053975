"""Shortfalls, departures, scores and suspect looks of one pass, by hand."""

from collections.abc import Mapping

import numpy as np
import pytest

from service.seasons.baseline import Baselines
from service.seasons.departure import Departures, departures_in, scores, suspect_looks
from service.seasons.offsets import OwnLooks
from service.seasons.ranks import Ranks
from service.seasons.usual import DAYS

MEASURES = ("ndvi", "ndwi")
SIGNS = np.array([-1.0, 1.0])


def baselines(course: Mapping[str, np.ndarray], spread: float = 0.05) -> Baselines:
    own = OwnLooks(
        pairs={("A", "barley"): 0},
        pair=np.zeros(4, dtype=np.int32),
        day=np.full(4, 100, dtype=np.int32),
        season=np.full(4, 2023, dtype=np.int32),
        residuals=np.full((4, 2), 0.04, dtype=np.float32),
    )
    return Baselines(
        measures=MEASURES,
        usual=course,
        spread={crop: np.full((DAYS, 2), spread) for crop in course},
        seasons=dict.fromkeys(course, (2023,)),
        own=own,
        middle={crop: np.full((DAYS, 2), spread) for crop in course},
        ranks=Ranks(by_crop={}),
        version="v1",
    )


def departed(values: list[list[float]], course: np.ndarray, **options: float) -> Departures:
    parcels = ["A", "B", "C", "D", "E"][: len(values)]
    return departures_in(
        baselines({"barley": course}, **options),
        parcels=parcels,
        crops=["barley"] * len(values),
        day=100,
        values=np.array(values),
        carried={},
    )


def test_expected_is_the_crops_course_with_its_level_and_the_parcels_offset() -> None:
    # Three looks 0.10 above the course: M = 3/6 · 0.10 = 0.05. Parcel A: four looks of 0.04
    # on the day, o = 4 · 0.04 / (4 + 4) = 0.02. e(A) = 0.6 + 0.05 + 0.02.
    found = departed([[0.7, 0.7]] * 3, np.full((DAYS, 2), 0.6))
    np.testing.assert_allclose(found.expected[:, 0], [0.67, 0.65, 0.65], rtol=1e-6)
    np.testing.assert_allclose(found.shortfall[:, 0], [0.03, 0.05, 0.05], rtol=1e-5)
    np.testing.assert_allclose(found.own_shortfall[:, 0], [0.08, 0.10, 0.10], rtol=1e-6)


def test_a_departure_is_towards_the_worse_side() -> None:
    found = departed([[0.6, 0.6], [0.6, 0.6], [0.3, 0.9]], np.full((DAYS, 2), 0.6))
    adverse, _ = found.adverse(SIGNS)
    np.testing.assert_allclose(adverse[2], [6.0, 6.0])
    np.testing.assert_allclose(found.signed(SIGNS)[2], [-6.0, 6.0])


def test_what_is_usual_within_a_few_days_is_no_departure() -> None:
    # The course falls by 0.02 a day, so it is lower by 0.10 in five days. Parcel C is 0.08
    # below: ahead of its crop by four days, no more.
    course = np.repeat((2.0 - 0.02 * np.arange(DAYS))[:, None], 2, axis=1)
    found = departed([[0.0, 0.0], [0.0, 0.0], [-0.08, 0.0]], course)
    adverse, _ = found.adverse(SIGNS)
    assert adverse[2, 0] == pytest.approx(-0.02 / 0.05)
    assert found.signed(SIGNS)[2, 0] == 0.0


def test_a_crop_without_history_rests_on_its_cohort_alone() -> None:
    found = departures_in(
        baselines({"barley": np.full((DAYS, 2), 0.6)}),
        parcels=["A", "B", "C"],
        crops=["oats"] * 3,
        day=100,
        values=np.array([[0.2, 0.2], [0.5, 0.5], [0.6, 0.6]]),
        carried={},
    )
    assert found.cohorts["oats"].is_new
    np.testing.assert_allclose(found.expected, 0.5)
    np.testing.assert_array_equal(found.weight, 0.0)


def test_a_score_is_the_largest_departure_unless_the_own_calendar_contradicts() -> None:
    adverse = np.array([[5.0, 2.0], [5.0, 2.0], [np.nan, 1.0], [np.nan, np.nan]])
    own = np.array([[4.0, 0.0], [0.5, 0.0], [np.nan, 1.0], [np.nan, np.nan]])
    score, leading = scores(adverse, own)
    np.testing.assert_array_equal(score, [5.0, 2.5, 1.0, np.nan])
    np.testing.assert_array_equal(leading, [0, 0, 1, -1])


@pytest.mark.parametrize(
    ("hot", "nir", "swir16", "is_suspect"),
    [
        (0.021, 0.02, 0.02, True),
        (0.019, 0.02, 0.02, False),
        (0.05, -0.05, -0.05, False),  # water
        (0.05, -0.05, -0.03, True),  # swir16 not dark enough
        (0.061, -0.05, -0.05, True),  # too bright for water
        (np.nan, -0.05, -0.05, False),
    ],
)
def test_haze_makes_a_look_suspect_unless_it_is_water(
    hot: float, nir: float, swir16: float, *, is_suspect: bool
) -> None:
    found = suspect_looks(np.array([[hot, nir, swir16]]), ("hot", "nir", "swir16"))
    assert bool(found[0]) is is_suspect


def test_without_visible_bands_no_look_is_suspect() -> None:
    assert not suspect_looks(np.array([[-0.3]]), ("ndvi",)).any()
