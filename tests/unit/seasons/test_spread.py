"""Spread of looks about what is expected, by hand."""

import numpy as np
import pytest

from service.seasons.spread import past_spreads, spread_in_pass, spreads

ONE = np.ones(1, dtype=bool)


def test_a_crop_is_blended_with_all_crops_by_its_looks() -> None:
    # Crop 0: 15 looks of |E| 0.10, so w = 15/30; crop 1: 85 looks of |E| 0.02; the pooled
    # median is 0.02. S² = 0.5 · (1.4826 · 0.10)² + 0.5 · (1.4826 · 0.02)².
    crop = np.repeat([0, 1], [15, 85])
    day = np.full(100, 100)
    shortfalls = np.where(crop == 0, -0.10, 0.02)[None, :]
    found = spreads(crop, day, shortfalls, is_pooled=np.ones(2, dtype=bool))
    assert found[0].middle[100, 0] == pytest.approx(1.4826 * np.sqrt((0.10**2 + 0.02**2) / 2))
    assert found[1].middle[100, 0] == pytest.approx(1.4826 * 0.02)


def test_a_spread_has_a_floor() -> None:
    found = spreads(
        np.zeros(20, dtype=np.int64),
        np.full(20, 50),
        np.zeros((1, 20)),
        is_pooled=ONE,
    )
    np.testing.assert_allclose([found[0].middle, found[0].whole], 0.015)


def test_far_from_all_looks_the_whole_season_counts() -> None:
    found = spreads(
        np.zeros(20, dtype=np.int64),
        np.full(20, 50),
        np.full((1, 20), 0.10),
        is_pooled=ONE,
    )
    assert found[0].middle[300, 0] == pytest.approx(1.4826 * 0.10)


def test_a_spread_looks_fourteen_days_to_either_side() -> None:
    day = np.repeat([86, 85, 114, 115], [4, 9, 4, 9])
    shortfalls = np.where(np.isin(day, [86, 114]), 0.10, 0.90)[None, :]
    found = spreads(np.zeros(day.size, dtype=np.int64), day, shortfalls, is_pooled=ONE)
    assert found[0].middle[100, 0] == pytest.approx(1.4826 * 0.10)


def test_what_has_no_crop_makes_no_other_crop_uncertain() -> None:
    crop = np.repeat([0, 1], [50, 50])
    shortfalls = np.where(crop == 0, 0.40, 0.02)[None, :]
    found = spreads(crop, np.full(100, 100), shortfalls, is_pooled=np.array([False, True]))
    assert found[1].middle[100, 0] == pytest.approx(1.4826 * 0.02)


# The 0.9 and 0.7 quantiles of |x| of a standard normal distribution (printed tables of the
# normal distribution: Φ(1.6449) = 0.95, Φ(1.0364) = 0.85).
TAIL, TAIL_IN_PASS = 1.6449, 1.0364


def test_a_tail_widens_a_spread_that_the_middle_does_not_see() -> None:
    # Nine looks in ten at 0.02, then some at 0.50: the median stays.
    size = np.repeat([0.02, 0.50], [80, 20])[None, :]
    found = spreads(np.zeros(100, dtype=np.int64), np.full(100, 100), size, is_pooled=ONE)
    assert found[0].middle[100, 0] == pytest.approx(1.4826 * 0.02)
    assert found[0].whole[100, 0] == pytest.approx(0.50 / TAIL, rel=1e-4)


def test_few_looks_have_no_tail() -> None:
    size = np.repeat([0.02, 0.50], [15, 4])[None, :]
    found = spreads(np.zeros(19, dtype=np.int64), np.full(19, 100), size, is_pooled=ONE)
    assert found[0].whole[100, 0] == found[0].middle[100, 0]


def test_looks_that_lie_apart_in_a_pass_widen_its_spread() -> None:
    # 16 looks: v = 15 / 30. Half of them lie 0.2 off.
    shortfall = np.repeat([0.0, -0.2], [8, 8])[:, None]
    middle, whole = np.array([0.03]), np.array([0.05])
    expected = np.sqrt(0.5 * (0.2 / TAIL_IN_PASS) ** 2 + 0.5 * 0.05**2)
    found = spread_in_pass(shortfall, middle=middle, whole=whole)
    np.testing.assert_allclose(found, [expected], rtol=1e-4)


@pytest.mark.parametrize("looks", [1, 2, 3, 8, 15])
def test_one_parcel_in_trouble_does_not_widen_the_spread_of_its_pass(looks: int) -> None:
    shortfall = np.full((looks, 1), 0.01)
    calm = spread_in_pass(shortfall, middle=np.array([0.03]), whole=np.array([0.05]))
    shortfall[0] = -0.8
    found = spread_in_pass(shortfall, middle=np.array([0.03]), whole=np.array([0.05]))
    np.testing.assert_array_equal(found, calm)


def test_the_passes_of_the_past_are_spread_as_those_of_the_present() -> None:
    rng = np.random.default_rng(3)
    passes = [rng.normal(0, 0.1, (looks, 2)) for looks in (1, 9, 2, 40)]
    passes[1][3, 0] = np.nan
    middle, whole = np.array([0.03, 0.02]), np.array([0.05, 0.09])
    expected = [spread_in_pass(each, middle=middle, whole=whole) for each in passes]
    found = past_spreads(
        np.cumsum([0, 1, 9, 2]),
        np.concatenate(passes).T,
        middle=np.tile(middle[:, None], 4),
        whole=np.tile(whole[:, None], 4),
    )
    np.testing.assert_allclose(found, np.stack(expected).T)
