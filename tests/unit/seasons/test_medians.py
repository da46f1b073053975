"""Medians, against numpy's own."""

from statistics import NormalDist

import numpy as np
import pytest

from service.seasons.baseline import BAND
from service.seasons.medians import SPREAD_OF_MEDIAN, grouped_medians, medians, windowed_medians

UNKNOWN = np.nan


def test_the_constants_are_those_of_the_normal_distribution() -> None:
    # Outside check: the standard library's normal distribution.
    assert pytest.approx(1 / NormalDist().inv_cdf(0.75), abs=5e-5) == SPREAD_OF_MEDIAN
    assert pytest.approx(NormalDist().inv_cdf(0.95), abs=5e-4) == BAND


def test_a_median_leaves_unknown_values_out() -> None:
    rows = np.array([[3.0, UNKNOWN, 1.0, 2.0], [UNKNOWN] * 4, [4.0, 1.0, UNKNOWN, UNKNOWN]])
    found, count = medians(rows)
    np.testing.assert_array_equal(found, [2.0, UNKNOWN, 2.5])
    np.testing.assert_array_equal(count, [3, 0, 2])


def test_a_window_holds_both_of_its_ends() -> None:
    day = np.array([0, 8, 9, 16, 17])
    values = np.array([[1.0, 2.0, 3.0, 4.0, 100.0]])
    found, count = windowed_medians(day, values, centres=np.array([8, 300]), reach=8)
    np.testing.assert_array_equal(found[:, 0], [2.5, UNKNOWN])
    np.testing.assert_array_equal(count[:, 0], [4, 0])


def test_grouped_medians_are_those_of_each_group() -> None:
    rng = np.random.default_rng(3)
    sizes = np.array([1, 2, 7, 1, 30])
    starts = np.concatenate([[0], np.cumsum(sizes)[:-1]])
    values = rng.normal(size=(3, sizes.sum()))
    values[rng.random(values.shape) < 0.2] = np.nan
    values[1, 0] = np.nan
    found, count = grouped_medians(starts, values)
    for group, part in enumerate(np.split(values, starts[1:], axis=1)):
        for measure, row in enumerate(part):
            known = row[np.isfinite(row)]
            expected = np.median(known) if known.size else np.nan
            np.testing.assert_array_equal(found[measure, group], expected)
            assert count[measure, group] == known.size
