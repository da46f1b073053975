"""How far a crop is off its usual course in one pass, worked out by hand."""

import numpy as np
import pytest

from service.seasons.cohort import Carried, known_crop, level_of, new_crop, past_levels
from service.seasons.usual import DAYS

COURSE = np.full((DAYS, 1), 0.5)
SPREAD = np.full((DAYS, 1), 0.02)


def carried(level: float) -> Carried:
    return Carried(level=np.array([level]), median=np.array([np.nan]), day=None)


def test_a_level_weighs_the_pass_against_the_last_one() -> None:
    # n = 3: w = 3 / 6. 0.5 · 0.10 + 0.5 · 0.8 · 0.05 = 0.07.
    level = level_of(np.array([0.10]), np.array([3]), np.array([0.05]))
    np.testing.assert_allclose(level, [0.07])


def test_without_an_earlier_level_a_small_cohort_is_half_believed() -> None:
    cohort, after = known_crop(
        np.array([[0.6], [0.6], [0.6]]), COURSE, SPREAD, day=10, carried=carried(np.nan)
    )
    np.testing.assert_allclose(cohort.level, [0.05])
    assert np.isnan(after.level).all(), "three looks are too few to be carried on"


def test_five_looks_are_carried_on() -> None:
    values = np.array([[0.4], [0.45], [0.5], [0.6], [0.4]])
    _, after = known_crop(values, COURSE, SPREAD, day=10, carried=carried(0.3))
    np.testing.assert_allclose(after.level, [-0.05])


def test_the_past_is_levelled_as_the_present_is() -> None:
    rng = np.random.default_rng(1)
    passes = [rng.normal(0.1 * k, 0.05, (n, 1)) for k, n in enumerate([6, 2, 9, 1, 4])]
    state, expected = Carried.nothing(1), []
    for values in passes:
        cohort, state = known_crop(values, 0 * COURSE, SPREAD, day=10, carried=state)
        expected.append(cohort.level[0])
    starts = np.cumsum([0, 6, 2, 9, 1])
    shifts = np.concatenate(passes).T
    found = past_levels(np.zeros(5, dtype=np.int64), starts, shifts)
    np.testing.assert_allclose(found[0], expected)


def test_a_level_is_not_carried_into_another_season() -> None:
    shifts = np.array([[0.2] * 5 + [0.0]])
    levels = past_levels(np.array([0, 1]), np.array([0, 5]), shifts)
    np.testing.assert_allclose(levels[0], [5 / 8 * 0.2, 0.0])


def test_a_crop_without_history_is_compared_with_its_median_in_the_pass() -> None:
    first, after = new_crop(np.full((8, 1), 0.40), day=100, carried=Carried.nothing(1))
    np.testing.assert_allclose(first.spread, [0.03])
    np.testing.assert_allclose([first.lower[0], first.higher[0]], [0.0, 0.0])
    # It falls by 0.02 a day: S² = 0.03² + (1.7 · 0.02)², lower by 0.1 in five days.
    second, _ = new_crop(np.full((8, 1), 0.20), day=110, carried=after)
    np.testing.assert_allclose(second.usual, [0.20])
    np.testing.assert_allclose(second.spread, [np.sqrt(0.03**2 + 0.034**2)])
    np.testing.assert_allclose([second.lower[0], second.higher[0]], [0.10, 0.06])


@pytest.mark.parametrize(("looks", "is_too_small"), [(7, True), (8, False)])
def test_a_crop_without_history_needs_eight_parcels(looks: int, *, is_too_small: bool) -> None:
    cohort, _ = new_crop(np.full((looks, 1), 0.4), day=100, carried=Carried.nothing(1))
    assert cohort.is_too_small == is_too_small
