"""Spread of looks about what is expected, by hand."""

import numpy as np
import pytest

from service.seasons.spread import spreads

ONE = np.ones(1, dtype=bool)


def test_a_crop_is_blended_with_all_crops_by_its_looks() -> None:
    # Crop 0: 15 looks of |E| 0.10, so w = 15/30; crop 1: 85 looks of |E| 0.02; the pooled
    # median is 0.02. S² = 0.5 · (1.4826 · 0.10)² + 0.5 · (1.4826 · 0.02)².
    crop = np.repeat([0, 1], [15, 85])
    day = np.full(100, 100)
    shortfalls = np.where(crop == 0, -0.10, 0.02)[None, :]
    found = spreads(crop, day, shortfalls, is_pooled=np.ones(2, dtype=bool))
    assert found[0][100, 0] == pytest.approx(1.4826 * np.sqrt((0.10**2 + 0.02**2) / 2))
    assert found[1][100, 0] == pytest.approx(1.4826 * 0.02)


def test_a_spread_has_a_floor() -> None:
    found = spreads(
        np.zeros(20, dtype=np.int64),
        np.full(20, 50),
        np.zeros((1, 20)),
        is_pooled=ONE,
    )
    np.testing.assert_allclose(found[0], 0.015)


def test_far_from_all_looks_the_whole_season_counts() -> None:
    found = spreads(
        np.zeros(20, dtype=np.int64),
        np.full(20, 50),
        np.full((1, 20), 0.10),
        is_pooled=ONE,
    )
    assert found[0][300, 0] == pytest.approx(1.4826 * 0.10)


def test_a_spread_looks_fourteen_days_to_either_side() -> None:
    day = np.repeat([86, 85, 114, 115], [4, 9, 4, 9])
    shortfalls = np.where(np.isin(day, [86, 114]), 0.10, 0.90)[None, :]
    found = spreads(np.zeros(day.size, dtype=np.int64), day, shortfalls, is_pooled=ONE)
    assert found[0][100, 0] == pytest.approx(1.4826 * 0.10)


def test_what_has_no_crop_makes_no_other_crop_uncertain() -> None:
    crop = np.repeat([0, 1], [50, 50])
    shortfalls = np.where(crop == 0, 0.40, 0.02)[None, :]
    found = spreads(crop, np.full(100, 100), shortfalls, is_pooled=np.array([False, True]))
    assert found[1][100, 0] == pytest.approx(1.4826 * 0.02)
