"""Quality layers and rules."""

import numpy as np
import pytest
from numpy.typing import NDArray

from service.spectral.quality import SCL, ClassLayer, ClassRule, Loss, QualityClass

ALL = np.arange(12, dtype=np.uint8).reshape(3, 4)

every_rule = pytest.mark.parametrize("rule", SCL.rules.values(), ids=SCL.rules)


@every_rule
def test_what_is_lost_is_disjoint_and_never_usable(rule: ClassRule) -> None:
    judged = SCL.judge(ALL, rule.id)
    counted = judged.usable.astype(int) + sum(cells.astype(int) for cells in judged.lost.values())
    assert counted.max() == 1
    assert set(judged.lost) == set(Loss)


def test_every_class_is_usable_or_lost_under_the_default_rule() -> None:
    judged = SCL.judge(ALL, "clear")
    lost = np.any(list(judged.lost.values()), axis=0)
    np.testing.assert_array_equal(judged.usable, ~lost)


def test_water_that_a_rule_does_not_want_is_neither_usable_nor_lost() -> None:
    judged = SCL.judge(np.array([6], np.uint8), "land")
    assert not judged.usable[0]
    assert not any(cells[0] for cells in judged.lost.values())
    assert judged.water[0]


def test_an_unclassified_cell_that_a_rule_does_not_want_has_no_reason_of_loss() -> None:
    judged = SCL.judge(np.array([7], np.uint8), "strict")
    assert not judged.usable[0]
    assert not any(cells[0] for cells in judged.lost.values())


@every_rule
def test_the_share_of_water_does_not_depend_on_the_rule(rule: ClassRule) -> None:
    np.testing.assert_array_equal(SCL.judge(ALL, rule.id).water, ALL == 6)


def test_a_cast_shadow_is_usable_when_kept_and_lost_to_shadow_when_not() -> None:
    cells = np.array([2], np.uint8)
    clear, strict = (SCL.judge(cells, rule) for rule in ("clear", "strict"))
    assert clear.usable[0]
    assert not clear.lost[Loss.SHADOW][0]
    assert not strict.usable[0]
    assert strict.lost[Loss.SHADOW][0]


@pytest.mark.parametrize(
    ("dtype", "stray"),
    [(np.uint8, 255), (np.int16, -1), (np.int16, -8), (np.uint16, 65535), (np.uint8, 12)],
)
def test_a_number_that_is_no_class_is_lost_to_nodata_and_called_unknown(
    dtype: type, stray: int
) -> None:
    cells: NDArray[np.integer] = np.array([4, stray], dtype=dtype)
    judged = SCL.judge(cells, "clear")
    np.testing.assert_array_equal(judged.usable, [True, False])
    np.testing.assert_array_equal(judged.lost[Loss.NODATA], [False, True])
    assert SCL.unknown(cells)


def test_the_classes_of_the_layer_are_known() -> None:
    assert not SCL.unknown(ALL)
    assert not SCL.unknown(np.array([], np.uint8))


def test_a_gap_between_classes_is_no_class() -> None:
    classes = {value: QualityClass(value=value, name="CLEAR", loss=None) for value in (1, 3)}
    rule = ClassRule(id="clear", keep=frozenset({1, 2, 3}))
    layer = ClassLayer(
        id="made-up",
        dtypes=("uint8",),
        outside=1,
        classes=classes,
        water=frozenset(),
        rules={"clear": rule},
    )
    judged = layer.judge(np.array([1, 2, 3], np.uint8), rule.id)
    np.testing.assert_array_equal(judged.usable, [True, False, True])
    np.testing.assert_array_equal(judged.lost[Loss.NODATA], [False, True, False])


@every_rule
def test_a_rule_keeps_known_classes_and_is_filed_under_its_id(rule: ClassRule) -> None:
    assert rule.keep <= set(SCL.classes)
    assert SCL.rules[rule.id] is rule


def test_the_layer_may_come_in_its_own_type_or_in_that_of_a_stack_of_bands() -> None:
    assert SCL.dtypes[0] == "uint8"
    assert "uint16" in SCL.dtypes
    assert not any(name.startswith("float") for name in SCL.dtypes)
