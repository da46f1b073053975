"""Small crops are compared under their group, large ones under their own name."""

import pytest

from service.seasons.groups import compared_under

CEREALS = {"wheat": "cereals", "rye": "cereals", "oats": "cereals"}


@pytest.mark.parametrize(
    ("parcels", "groups", "expected"),
    [
        # Nobody said what belongs together.
        ({"wheat": 3, "rye": 2}, {}, {}),
        # Large crops keep to themselves.
        ({"wheat": 8, "rye": 9}, CEREALS, {}),
        # Small ones make up a cohort together.
        ({"wheat": 5, "rye": 3}, CEREALS, {"wheat": "cereals", "rye": "cereals"}),
        ({"wheat": 90, "rye": 5, "oats": 3}, CEREALS, {"rye": "cereals", "oats": "cereals"}),
        # Too few even so: with the largest of the group.
        ({"wheat": 90, "rye": 5, "oats": 1}, CEREALS, {"rye": "wheat", "oats": "wheat"}),
        ({"wheat": 9, "rye": 9, "oats": 1}, CEREALS, {"oats": "rye"}),
        # There is none large enough: they stay too few, but together.
        ({"wheat": 3, "rye": 2}, CEREALS, {"wheat": "cereals", "rye": "cereals"}),
        # What is not grown this season lends nobody its past.
        ({"wheat": 90, "rye": 0}, CEREALS, {}),
        ({"wheat": 90}, CEREALS, {}),
        # A group may bear the name of a crop.
        ({"rye": 30, "oats": 2}, {"oats": "rye"}, {"oats": "rye"}),
        ({"rye": 3, "oats": 2}, {"oats": "rye", "rye": "rye"}, {"oats": "rye"}),
        # A crop outside the group is left alone, however small.
        ({"beet": 2, "rye": 7, "oats": 1}, CEREALS, {"rye": "cereals", "oats": "cereals"}),
    ],
)
def test_crops_are_compared_under_a_label_with_enough_parcels(
    parcels: dict[str, int], groups: dict[str, str], expected: dict[str, str]
) -> None:
    assert compared_under(parcels, groups) == expected
