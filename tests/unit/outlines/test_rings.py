"""Rings of a Shapefile record put together, against the geometry that they were taken from.

Orientation by the ESRI Shapefile Technical Description, July 1998, page 8: outer rings run
clockwise, holes counter-clockwise, in any order.
"""

from collections.abc import Sequence

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.outlines.rings import polygons_of

OUTER, HOLE, ISLAND = (
    shapely.box(0, 0, 9, 9),
    shapely.box(2, 2, 7, 7),
    shapely.box(3, 3, 5, 5),
)
LAKE_WITH_ISLAND = shapely.MultiPolygon([OUTER.difference(HOLE), ISLAND])
APART = shapely.MultiPolygon([OUTER.difference(HOLE), shapely.box(20, 0, 25, 5)])


def rings_of(shape: BaseGeometry, *, outer_is_clockwise: bool = True) -> list[NDArray[np.float64]]:
    """Return a geometry's rings as a Shapefile has them, or all the other way round."""
    found = []
    for part in shapely.get_parts(shape):
        turned = shapely.orient_polygons(part, exterior_cw=outer_is_clockwise)
        found += [np.asarray(ring.coords) for ring in (turned.exterior, *turned.interiors)]
    return found


def refusal(rings: Sequence[NDArray[np.float64]]) -> str:
    with pytest.raises(RejectedInput) as caught:
        polygons_of(rings, pointer="/g")
    return caught.value.detail


@given(st.sampled_from([OUTER, LAKE_WITH_ISLAND, APART]), st.randoms(use_true_random=False))
def test_rings_in_any_order_give_the_geometry_that_they_were_taken_from(
    shape: BaseGeometry, random: st.DataObject
) -> None:
    rings = rings_of(shape)
    random.shuffle(rings)  # type: ignore[attr-defined]
    found = polygons_of(rings, pointer="/g")
    assert found.is_valid
    assert found.normalize() == shape.normalize()


def test_a_hole_belongs_to_the_smallest_outer_ring_around_it() -> None:
    pond = shapely.box(3.5, 3.5, 4, 4)
    shape = shapely.MultiPolygon([OUTER.difference(HOLE), ISLAND.difference(pond)])
    assert polygons_of(rings_of(shape), pointer="/g").normalize() == shape.normalize()


def test_a_ring_that_runs_the_wrong_way_alone_is_an_outline_all_the_same() -> None:
    rings = rings_of(OUTER, outer_is_clockwise=False)
    assert polygons_of(rings, pointer="/g").equals(OUTER)


def test_a_hole_in_no_outer_ring_is_refused() -> None:
    stray = rings_of(shapely.box(50, 50, 51, 51), outer_is_clockwise=False)
    assert "hole lies in no outer ring" in refusal([*rings_of(OUTER), *stray])


def test_two_outer_rings_in_one_another_make_no_hole() -> None:
    found = polygons_of([*rings_of(OUTER), *rings_of(HOLE)], pointer="/g")
    assert not found.is_valid


def test_open_short_and_endless_rings_are_refused() -> None:
    ring = rings_of(OUTER)[0]
    assert "last equal to the first" in refusal([ring[:-1]])
    assert "last equal to the first" in refusal([ring[:1]])
    endless = ring.copy()
    endless[1] = np.inf
    assert "finite" in refusal([endless])


def test_rings_by_the_thousand_are_refused_before_each_is_held_against_each() -> None:
    boxes = [shapely.box(x, 0, x + 0.9, 0.9) for x in range(400)]
    outer = [ring for box in boxes for ring in rings_of(box)]
    holes = [
        ring
        for x in range(400)
        for ring in rings_of(shapely.box(x + 0.1, 0.1, x + 0.2, 0.2), outer_is_clockwise=False)
    ]
    assert "too many parts" in refusal([*outer, *holes])
