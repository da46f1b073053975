"""Quality layers of bits, and the bits of saturated bands."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.typing import NDArray

from service.spectral.quality import Loss
from service.spectral.quality_bits import QA_PIXEL, QA_RADSAT

CLEAR, WATER, SNOW = 21824, 21888, 30048
LOW_CONFIDENCES = 0b0101_0101 << 8

every_rule = pytest.mark.parametrize("rule", QA_PIXEL.rules)
numbers = hnp.arrays(np.uint16, 50, elements=st.integers(0, 65_535))


def of(*values: int, dtype: type = np.uint16) -> NDArray[Any]:
    return np.array(values, dtype=dtype)


def reason(value: int, rule: str = "clear") -> str | None:
    """Why a cell of this number is lost, None if it is usable or lost to nothing."""
    judged = QA_PIXEL.judge(of(value), rule)
    return next((loss.value for loss, cells in judged.lost.items() if cells[0]), None)


def kept(values: NDArray[Any], rule: str) -> NDArray[np.bool_]:
    return QA_PIXEL.judge(values, rule).usable


@given(numbers, st.sampled_from(sorted(QA_PIXEL.rules)))
def test_what_is_lost_is_disjoint_and_never_usable(values: NDArray[Any], rule: str) -> None:
    judged = QA_PIXEL.judge(values, rule)
    assert set(judged.lost) == set(Loss)
    counted = judged.usable.astype(int) + sum(cells.astype(int) for cells in judged.lost.values())
    assert counted.max() <= 1


@given(numbers)
def test_every_cell_is_usable_or_lost_under_the_rules_that_keep_all_surfaces(
    values: NDArray[Any],
) -> None:
    for rule in ("clear", "strict", "surface"):
        judged = QA_PIXEL.judge(values, rule)
        lost = np.any(list(judged.lost.values()), axis=0)
        np.testing.assert_array_equal(judged.usable, ~lost)


@given(numbers)
def test_a_narrower_rule_keeps_nothing_that_a_wider_one_drops(values: NDArray[Any]) -> None:
    for narrow, wide in (
        ("strict", "clear"),
        ("land", "clear"),
        ("clear", "surface"),
    ):
        assert not (kept(values, narrow) & ~kept(values, wide)).any()
    assert not (kept(values, "water") & kept(values, "snow")).any()


@given(numbers, st.sampled_from(sorted(QA_PIXEL.rules)))
def test_the_clear_bit_decides_nothing(values: NDArray[Any], rule: str) -> None:
    # Source: the published value table itself, which contradicts the text of this bit. A
    # number without any other bit is left aside: with none at all it tells nothing.
    some = values[((values | 64) != 64) & ((values & 1) == 0)]
    one, other = (QA_PIXEL.judge(each, rule) for each in (some | 64, some & ~np.uint16(64)))
    np.testing.assert_array_equal(one.usable, other.usable)
    np.testing.assert_array_equal(one.water, other.water)
    for loss in Loss:
        np.testing.assert_array_equal(one.lost[loss], other.lost[loss])


@given(numbers, st.sampled_from(sorted(QA_PIXEL.rules)))
def test_the_type_that_holds_the_numbers_does_not_matter(values: NDArray[Any], rule: str) -> None:
    for dtype in (np.uint32, np.int32, np.int64):
        np.testing.assert_array_equal(kept(values.astype(dtype), rule), kept(values, rule))


@pytest.mark.parametrize(
    ("bit", "lost_to"),
    [(1, "cloud"), (2, "cloud"), (3, "cloud"), (4, "shadow"), (5, "snow")],
)
def test_a_single_bit_costs_a_cell_whatever_the_confidences_say(bit: int, lost_to: str) -> None:
    assert reason(LOW_CONFIDENCES | 1 << bit) == lost_to


@pytest.mark.parametrize(
    ("shift", "lost_to"), [(8, "cloud"), (10, "shadow"), (12, "snow"), (14, "cloud")]
)
def test_a_high_confidence_costs_a_cell_without_its_bit(shift: int, lost_to: str) -> None:
    assert reason(LOW_CONFIDENCES | 0b11 << shift) == lost_to


def test_a_medium_confidence_of_cloud_costs_a_cell_under_the_strict_rule_only() -> None:
    value = (LOW_CONFIDENCES & ~(0b11 << 8)) | 0b10 << 8
    assert reason(value) is None
    assert kept(of(value), "clear")[0]
    assert reason(value, "strict") == "cloud"


def test_of_several_reasons_the_one_that_hides_most_is_named() -> None:
    cloud, shadow, snow = 1 << 3, 1 << 4, 1 << 5
    assert reason(LOW_CONFIDENCES | cloud | shadow | snow) == "cloud"
    assert reason(LOW_CONFIDENCES | shadow | snow) == "shadow"
    # Snow that a high confidence of cloud lies over is lost to the cloud.
    assert reason(LOW_CONFIDENCES | 0b11 << 8 | snow) == "cloud"


def test_water_and_snow_are_kept_by_their_rules_alone() -> None:
    values = of(CLEAR, WATER, SNOW)
    np.testing.assert_array_equal(kept(values, "clear"), [True, True, False])
    np.testing.assert_array_equal(kept(values, "land"), [True, False, False])
    np.testing.assert_array_equal(kept(values, "water"), [False, True, False])
    np.testing.assert_array_equal(kept(values, "snow"), [False, False, True])
    np.testing.assert_array_equal(kept(values, "surface"), [True, True, True])
    assert [reason(CLEAR, "water"), reason(WATER, "land"), reason(CLEAR, "snow")] == [None] * 3
    assert reason(SNOW, "water") == "snow"


@every_rule
def test_the_share_of_water_does_not_depend_on_the_rule(rule: str) -> None:
    values = of(CLEAR, WATER, WATER | 1 << 3, 1, 0)
    np.testing.assert_array_equal(
        QA_PIXEL.judge(values, rule).water, [False, True, True, False, False]
    )


@every_rule
@pytest.mark.parametrize("value", [0, 1])
def test_fill_and_a_number_without_any_bit_are_nodata(rule: str, value: int) -> None:
    judged = QA_PIXEL.judge(of(value), rule)
    assert not judged.usable[0]
    assert judged.lost[Loss.NODATA][0]
    assert not QA_PIXEL.unknown(of(value))


@pytest.mark.parametrize(
    ("value", "dtype"), [(3, np.uint16), (21825, np.uint16), (-1, np.int32), (65_536, np.int32)]
)
def test_a_number_that_the_layer_cannot_have_is_unknown_and_lost_to_nodata(
    value: int, dtype: type
) -> None:
    # Source: fill stands alone, "whole value is then 1" (LSDS-1618, LSDS-1619).
    values = of(CLEAR, value, dtype=dtype)
    assert QA_PIXEL.unknown(values)
    judged = QA_PIXEL.judge(values, "clear")
    np.testing.assert_array_equal(judged.usable, [True, False])
    np.testing.assert_array_equal(judged.lost[Loss.NODATA], [False, True])


def test_the_scene_classes_of_another_product_are_told_from_bits() -> None:
    assert QA_PIXEL.unknown(np.arange(12, dtype=np.uint16))
    assert not QA_PIXEL.unknown(of())


def test_what_lies_outside_the_layer_is_fill() -> None:
    assert QA_PIXEL.outside == 1


@every_rule
def test_a_rule_is_filed_under_its_id(rule: str) -> None:
    assert QA_PIXEL.rules[rule].id == rule


def test_no_rule_looks_at_bit_6() -> None:
    looked_at = {
        bit
        for rule in QA_PIXEL.rules.values()
        for field in (*(entry.field for entry in rule.drop), *rule.need)
        for bit in range(field.bit, field.bit + field.width)
    }
    assert looked_at == set(range(16)) - {6}


@pytest.mark.parametrize(
    ("value", "is_unknown"), [(0, False), (0b1011_0111_1111, False), (CLEAR, True), (-1, True)]
)
def test_a_layer_of_saturation_bits_has_twelve_of_them(value: int, is_unknown: bool) -> None:  # noqa: FBT001
    assert QA_RADSAT.unknown(of(0, value, dtype=np.int32)) == is_unknown
