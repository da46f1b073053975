"""The usual course of a crop."""

import numpy as np

from service.seasons.usual import DAYS, change_nearby, usual_course


def test_a_course_is_the_median_within_eight_days_and_linear_between_knots() -> None:
    # Looks on days 100 and 120 alone, five each: knots 92 … 108 see the first five, 112 …
    # 128 the others.
    day = np.repeat([100, 120], 5)
    values = np.array([[0.1, 0.2, 0.3, 0.4, 9.0, 0.5, 0.6, 0.7, 0.8, -9.0]])
    course = usual_course(day, values)
    assert course.shape == (DAYS, 1)
    np.testing.assert_allclose(course[[92, 100, 108, 112, 120, 128], 0], [0.3] * 3 + [0.6] * 3)
    np.testing.assert_allclose(course[110, 0], 0.45)


def test_a_course_is_unknown_far_from_its_looks() -> None:
    course = usual_course(np.full(5, 100), np.full((1, 5), 0.4))
    known = np.flatnonzero(np.isfinite(course[:, 0]))
    assert (known[0], known[-1]) == (92 - 8, 108 + 8)


def test_four_looks_make_no_knot() -> None:
    day = np.full(5, 100)
    values = np.array([[0.1, 0.2, 0.3, 0.4, np.nan], [0.1, 0.2, 0.3, 0.4, 0.5]])
    course = usual_course(day, values)
    assert np.isnan(course[:, 0]).all()
    assert course[100, 1] == 0.3


def test_the_change_nearby_looks_five_days_ahead_and_three_back() -> None:
    course = np.linspace(0.0, 365.0, DAYS)[:, None]  # Rises by 1 a day.
    lower, higher = change_nearby(course, 100, later=5, earlier=3)
    np.testing.assert_allclose([lower[0], higher[0]], [3.0, 5.0])
    lower, higher = change_nearby(-course, 100, later=5, earlier=3)
    np.testing.assert_allclose([lower[0], higher[0]], [5.0, 3.0])


def test_the_change_nearby_runs_round_the_year() -> None:
    course = np.where(np.arange(DAYS) < 10, 0.1, 0.7)[:, None]
    lower, _ = change_nearby(course, 362, later=5, earlier=3)
    np.testing.assert_allclose(lower, [0.6])
