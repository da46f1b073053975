"""Own offsets, worked out by hand and by a loop over all pairs of looks."""

import numpy as np
import pytest

from service.seasons.baseline import Basis, basis_of
from service.seasons.offsets import OwnLooks, offsets_without_own_season


def own_looks(pair: list[int], day: list[int], residuals: list[float]) -> OwnLooks:
    order = np.argsort(day, kind="stable")
    return OwnLooks(
        pairs={(f"P{code}", "barley"): code for code in set(pair)},
        pair=np.array(pair, dtype=np.int32)[order],
        day=np.array(day, dtype=np.int32)[order],
        season=np.full(len(day), 2023, dtype=np.int32),
        residuals=np.array(residuals, dtype=np.float32)[order, None],
    )


def kernel(a: int, b: int) -> float:
    apart = min(abs(a - b), 365 - abs(a - b))
    return max(0.0, 1 - (apart / 20) ** 2)


def test_an_offset_shrinks_towards_the_crop() -> None:
    # K = 1 on the day, 1 - (10/20)² = 0.75 ten days off, 0 at twenty:
    # (0.08 + 0.75 · 0.04) / (1.75 + 4). Shrinkage: Efron and Morris 1975.
    looks = own_looks([0, 0, 0], [100, 110, 120], [0.08, 0.04, 9.0])
    offset, weight = looks.offsets_on(100, np.array([0]))
    assert weight[0, 0] == pytest.approx(1.75)
    assert offset[0, 0] == pytest.approx(0.11 / 5.75, rel=1e-6)


def test_days_run_round_the_year() -> None:
    looks = own_looks([0], [360], [0.1])
    _, weight = looks.offsets_on(5, np.array([0]))
    assert weight[0, 0] == pytest.approx(1 - (10 / 20) ** 2)


def test_the_last_day_of_a_leap_year_is_near_the_first() -> None:
    looks = own_looks([0], [0], [0.1])
    _, weight = looks.offsets_on(365, np.array([0]))
    assert weight[0, 0] == pytest.approx(1.0)


def test_a_parcel_without_looks_is_like_its_crop() -> None:
    looks = own_looks([0], [100], [0.1])
    codes = looks.codes(["P0", "P9"], ["barley", "barley"])
    offset, weight = looks.offsets_on(100, codes)
    np.testing.assert_array_equal(codes, [0, -1])
    assert (offset[1, 0], weight[1, 0]) == (0.0, 0.0)


@pytest.mark.parametrize(
    ("weight", "basis"), [(8.0, Basis.OWN), (7.9, Basis.BLENDED), (0.0, Basis.COHORT)]
)
def test_the_basis_says_how_much_is_the_parcels_own(weight: float, basis: Basis) -> None:
    assert basis_of(weight) is basis


def test_leaving_the_own_season_out_agrees_with_a_loop_over_pairs_of_looks() -> None:
    rng = np.random.default_rng(5)
    looks = 300
    pair, season = rng.integers(0, 4, looks), rng.integers(2020, 2023, looks)
    day, residual = rng.integers(0, 366, looks), rng.normal(0, 0.1, looks)
    residual[::17] = np.nan
    found = offsets_without_own_season(pair, season, day, residual[None, :])[0]
    known = np.isfinite(residual)
    for look in range(looks):
        others = np.flatnonzero((pair == pair[look]) & (season != season[look]) & known)
        shares = np.array([kernel(int(day[look]), int(day[other])) for other in others])
        expected = (shares * residual[others]).sum() / (shares.sum() + 4)
        assert found[look] == pytest.approx(expected, abs=1e-9)


def test_a_parcel_with_one_season_has_no_offset_for_it() -> None:
    day = np.arange(0, 360, 5)
    same = np.zeros(day.size, dtype=np.int64)
    found = offsets_without_own_season(same, same + 2023, day, np.full((1, day.size), 0.1))
    np.testing.assert_array_equal(found, 0.0)
