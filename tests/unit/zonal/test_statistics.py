"""Weighted statistics on cases that a person can check."""

import dataclasses

import numpy as np
import pytest

from service.zonal.statistics import mean_and_sd, summarise, sums_by_bit
from tests import numpy_statistics

NINE = np.arange(1, 10, dtype=np.float32)
SQUARE = np.array([0.25, 0.5, 0.25, 0.5, 1.0, 0.5, 0.25, 0.5, 0.25], dtype=np.float32)


def pointer(*counts):
    return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)


def of_one_zone(values, weights=None):
    values = np.array(values, dtype=np.float32)
    weights = np.ones(len(values)) if weights is None else np.array(weights)
    found = summarise(values, weights.astype(np.float32), pointer(len(values)))
    return {name: figure[0] for name, figure in dataclasses_items(found)}


def dataclasses_items(found):
    return [(field.name, getattr(found, field.name)) for field in dataclasses.fields(found)]


def test_a_square_between_nine_cells():
    found = of_one_zone(NINE, SQUARE)

    # Corners 1, 3, 7, 9 weigh 1/4, edges 1/2, the middle 1: the spread is
    # (1/4 (16 + 4 + 4 + 16) + 1/2 (9 + 1 + 1 + 9)) / 4 = 5.
    assert found["weight"] == 4.0
    assert found["mean"] == found["p50"] == 5.0
    assert found["sd"] == pytest.approx(np.sqrt(5), rel=1e-12)
    assert (found["min"], found["max"]) == (1.0, 9.0)


def test_quantiles_by_hand():
    # Two values, 3 cells of the first and 1 of the second: they stand at 0 and at
    # 1·1 + 1·3 = 4, and q is read at q·1·4.
    found = of_one_zone([1, 1, 1, 2])

    assert found["p10"] == pytest.approx(1.1, rel=1e-12)
    assert found["p50"] == pytest.approx(1.5, rel=1e-12)
    assert found["p90"] == pytest.approx(1.9, rel=1e-12)


def test_quantiles_of_distinct_values_of_equal_weight_are_the_usual_ones():
    values = np.array([0.31, 0.12, 0.77, 0.45, 0.46, 0.02, 0.93], dtype=np.float32)

    found = of_one_zone(values, np.full(7, 0.5))

    # Hyndman and Fan 1996, type 7, by numpy.
    usual = np.quantile(values.astype(float), [0.1, 0.5, 0.9], method="linear")
    np.testing.assert_allclose([found["p10"], found["p50"], found["p90"]], usual, rtol=1e-12)


def test_equal_values_are_one_value_however_they_are_spread_over_cells():
    whole = of_one_zone([0.2, 0.5, 0.8], [2.0, 1.0, 1.0])
    spread = of_one_zone([0.5, 0.2, 0.8, 0.2, 0.2], [1.0, 0.5, 1.0, 0.5, 1.0])

    assert spread == whole


def test_zero_and_minus_zero_are_one_value():
    assert of_one_zone([-0.0, 0.0, 1.0]) == of_one_zone([0.0, 0.0, 1.0])


def test_negative_values_come_first():
    found = of_one_zone([0.5, -0.25, 0.0, -0.5, 0.25])

    assert (found["min"], found["p50"], found["max"]) == (-0.5, 0.0, 0.5)


def test_one_cell_is_its_own_statistics():
    found = of_one_zone([0.4], [0.125])

    value = float(np.float32(0.4))
    assert found == {
        "mean": value, "sd": 0.0, "min": value, "p10": value, "p50": value, "p90": value,
        "max": value, "weight": 0.125,
    }  # fmt: skip


def test_unknown_cells_and_cells_without_weight_do_not_count():
    with_gaps = of_one_zone([np.nan, 1, 2, np.nan, 9], [1, 0.5, 1, 1, 0])

    assert with_gaps == of_one_zone([1, 2], [0.5, 1])


@pytest.mark.parametrize("counts", [(0, 3, 0), (3, 0, 0), (0, 0, 3), (0, 0, 0)])
def test_a_zone_without_cells_is_unknown_and_leaves_its_neighbours_alone(counts):
    values = NINE[: sum(counts)]

    found = summarise(values, np.ones_like(values), pointer(*counts))

    for zone, count in enumerate(counts):
        figures = {name: figure[zone] for name, figure in dataclasses_items(found)}
        assert figures.pop("weight") == count
        if count:
            assert figures["mean"] == 2.0
        else:
            assert all(np.isnan(figure) for figure in figures.values())


def test_a_zone_of_unknown_cells_is_unknown_and_never_zero():
    values = np.array([np.nan, np.nan, 4], dtype=np.float32)

    found = summarise(values, np.ones(3, np.float32), pointer(2, 1))
    mean, sd = mean_and_sd(values, np.ones(3, np.float32), pointer(2, 1))

    assert found.weight.tolist() == [0.0, 1.0]
    for figure in (found.mean, found.sd, found.min, found.p50, found.max, mean, sd):
        assert np.isnan(figure[0])
        assert not np.isnan(figure[1])


def test_no_zones_give_no_figures():
    nothing = np.empty(0, np.float32)

    found = summarise(nothing, nothing, pointer())

    assert all(figure.shape == (0,) for _, figure in dataclasses_items(found))
    assert all(figure.shape == (0,) for figure in mean_and_sd(nothing, nothing, pointer()))


def test_mean_and_spread_alone_agree_with_the_whole_summary():
    weights = np.tile(SQUARE, 2)
    values = np.concatenate([NINE, NINE * 2])

    found = summarise(values, weights, pointer(9, 9))
    mean, sd = mean_and_sd(values, weights, pointer(9, 9))

    np.testing.assert_allclose(mean, found.mean, rtol=1e-12)
    np.testing.assert_allclose(sd, found.sd, rtol=1e-12)


def test_a_small_spread_on_a_large_mean_is_not_lost():
    values = 10_000 + np.array([0.0, 0.5, 1.0], dtype=np.float32)

    _, sd = mean_and_sd(values.astype(float), np.ones(3, np.float32), pointer(3))

    assert sd[0] == pytest.approx(np.sqrt(1 / 6), rel=1e-12)
    assert of_one_zone(values)["sd"] == pytest.approx(np.sqrt(1 / 6), rel=1e-12)


def test_weights_are_added_up_by_mark_and_over_all():
    marks = np.array([0b01, 0b11, 0b1000_0000, 0b10], dtype=np.uint8)

    sums = sums_by_bit(marks, np.array([1, 2, 4, 8], dtype=np.float32), pointer(0, 2, 0, 2, 0))

    empty = [0.0] * 9
    assert sums.tolist() == [
        empty, [3, 2, 0, 0, 0, 0, 0, 0, 3], empty, [0, 8, 0, 0, 0, 0, 0, 4, 12], empty
    ]  # fmt: skip


def test_cells_that_a_rule_drops_do_not_count():
    kept = np.array([True, False, True, False])

    found = summarise(NINE[:4], np.ones(4, np.float32), pointer(2, 2), kept)
    mean, _ = mean_and_sd(NINE[:4].astype(float), np.ones(4, np.float32), pointer(2, 2), kept)

    assert found.weight.tolist() == [1, 1]
    assert found.mean.tolist() == found.max.tolist() == mean.tolist() == [1, 3]


@pytest.mark.parametrize("size", [5, 24, 25, 300, 4096, 4097, 20_000])
@pytest.mark.parametrize("shape", ["even", "one far away", "few values", "two heaps", "infinite"])
def test_zones_of_any_size_and_shape_are_as_by_plain_numpy(size, shape):
    random = np.random.default_rng([size, len(shape)])
    values = random.normal(0.4, 0.2, size).astype(np.float32)
    if shape == "one far away":
        values[size // 2] = 1e30
    elif shape == "few values":
        values = values.round(1)
    elif shape == "two heaps":
        values = (values * 1e-6 + random.integers(0, 2, size)).astype(np.float32)
    elif shape == "infinite":
        values[:3] = np.inf, -np.inf, np.nan
    weights = np.where(random.random(size) < 0.3, random.random(size), 1).astype(np.float32)

    with np.errstate(invalid="ignore"):
        expected = numpy_statistics.summarise(values, weights, pointer(size))
    found = summarise(values, weights, pointer(size))

    for field in dataclasses.fields(found):
        got, truth = getattr(found, field.name), getattr(expected, field.name)
        np.testing.assert_allclose(got, truth, rtol=1e-12, atol=1e-12, err_msg=field.name)
