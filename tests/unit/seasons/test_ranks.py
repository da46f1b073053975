"""p-values of looks: their rank among past scores."""

import numpy as np
import pytest

from service.seasons.ranks import KEPT_EXACTLY, LOOKS_OF_CROP, POOLED, Ranking, Ranks


def by_definition(past: np.ndarray, scores: np.ndarray) -> list[float]:
    """Conformal p-value as Vovk, Gammerman and Shafer 2005 define it, count by count."""
    return [(1 + sum(past >= score)) / (past.size + 1) for score in scores]


def test_a_p_value_counts_the_past_scores_at_least_as_high() -> None:
    past = np.array([1.0, 2.0, 2.0, 5.0])
    scores = np.array([0.0, 1.0, 2.0, 2.5, 5.0, 6.0, np.nan])
    found = Ranking.of(past).p(scores)
    np.testing.assert_allclose(found[:-1], by_definition(past, scores[:-1]))
    np.testing.assert_allclose(found[:-1], [5 / 5, 5 / 5, 4 / 5, 2 / 5, 2 / 5, 1 / 5])
    assert np.isnan(found[-1])


def test_thinning_leaves_the_small_p_values_as_they_are() -> None:
    rng = np.random.default_rng(1)
    past = rng.normal(size=60_000).astype(np.float32).astype(np.float64)
    ranking = Ranking.of(past)
    assert ranking.scores.size <= 3 * KEPT_EXACTLY
    scores = rng.normal(size=300).astype(np.float32).astype(np.float64)
    exact = np.array(by_definition(past, scores))
    found = ranking.p(scores)
    small = exact <= KEPT_EXACTLY / past.size
    assert small.sum() > 10
    np.testing.assert_allclose(found[small], exact[small])
    np.testing.assert_allclose(found, exact, atol=1e-3)


def test_a_crop_with_enough_past_is_ranked_among_its_own() -> None:
    crops = ("barley", "oats")
    crop = np.repeat([0, 1], [LOOKS_OF_CROP, LOOKS_OF_CROP - 1])
    scores = np.where(crop == 0, 0.0, 10.0)
    ranks = Ranks.of(crops, crop, scores)
    assert set(ranks.by_crop) == {"barley", POOLED}
    found = ranks.p(["barley", "oats", "rye"], np.array([5.0, 5.0, 5.0]))
    n = 2 * LOOKS_OF_CROP - 1
    pooled = LOOKS_OF_CROP / (n + 1)
    np.testing.assert_allclose(found, [1 / (LOOKS_OF_CROP + 1), pooled, pooled])


def test_looks_without_a_crop_are_neither_ranked_nor_ranked_among() -> None:
    ranks = Ranks.of(("", "barley"), np.array([0, 0, 1, 1]), np.array([9.0, 9.0, 1.0, 2.0]))
    found = ranks.p(["", "barley"], np.array([1.5, 1.5]))
    assert np.isnan(found[0])
    assert found[1] == pytest.approx(2 / 3)


def test_without_a_past_there_is_no_p_value() -> None:
    ranks = Ranks.of((), np.empty(0, dtype=np.int64), np.empty(0))
    assert ranks.by_crop == {}
    assert np.isnan(ranks.p(["barley"], np.array([1.0]))).all()


def test_rankings_are_kept_in_arrays_and_read_again() -> None:
    rng = np.random.default_rng(2)
    crop = rng.integers(0, 2, 9_000)
    ranks = Ranks.of(("barley", "oats"), crop, rng.normal(size=9_000))
    read = Ranks.from_arrays(ranks.to_arrays())
    scores = rng.normal(size=50)
    for name in ("barley", "oats", "rye"):
        np.testing.assert_array_equal(read.p([name] * 50, scores), ranks.p([name] * 50, scores))
    assert Ranks.from_arrays({}).by_crop == {}
