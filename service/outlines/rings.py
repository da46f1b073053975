"""Rings put together to polygons, as a Shapefile means them.

Seen from above, outer rings run clockwise and holes the other way; a record's rings come in
any order (ESRI Shapefile Technical Description, July 1998, page 8).
"""

from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.zonal.boundary import broken_ring

_FEWEST: Final = 4
_MOST_PAIRS: Final = 100_000
"""Of holes and outer rings; telling which lies in which takes 0.2 s then."""


def polygons_of(rings: Sequence[NDArray[np.float64]], *, pointer: str) -> BaseGeometry:
    """Return the polygon or multipolygon of some rings.

    Parameters
    ----------
    rings
        Positions (x, y) of each ring, shape (positions, 2), the last equal to the first.
    pointer
        Where they stand, for the error.

    Raises
    ------
    RejectedInput
        A ring is too short or open, or a hole lies in no outer ring.
    """
    if any(len(ring) < _FEWEST or not np.array_equal(ring[0], ring[-1]) for ring in rings):
        raise broken_ring(pointer)
    if not all(np.isfinite(ring).all() for ring in rings):
        raise RejectedInput.at(
            pointer, "A position is no pair of finite numbers.", code="invalid-geometry"
        )
    drawn = np.array([shapely.linearrings(ring) for ring in rings])
    is_hole = shapely.is_ccw(drawn)
    if is_hole.all():
        # A writer that turns every ring the wrong way; nothing tells a hole then.
        is_hole[:] = False
    shells = shapely.polygons(drawn[~is_hole])
    holes: list[list[Any]] = [[] for _ in shells]
    for hole, shell in zip(
        drawn[is_hole], _shells_of(drawn[is_hole], shells, pointer), strict=True
    ):
        holes[shell].append(hole)
    parts = [
        shapely.Polygon(ring, inner) for ring, inner in zip(drawn[~is_hole], holes, strict=True)
    ]
    return parts[0] if len(parts) == 1 else shapely.MultiPolygon(parts)


def _shells_of(holes: NDArray[Any], shells: NDArray[Any], pointer: str) -> list[int]:
    """Return for each hole the smallest outer ring around it."""
    if not len(holes):
        return []
    if len(holes) * len(shells) > _MOST_PAIRS:
        raise RejectedInput.at(
            pointer,
            "The outline has too many parts and holes. Send its parts as parcels of their own.",
            code="invalid-geometry",
        )
    inside, around = shapely.STRtree(shells).query(holes, predicate="covered_by")
    area = shapely.area(shells)
    best: dict[int, int] = {}
    for hole, shell in zip(inside.tolist(), around.tolist(), strict=True):
        if hole not in best or area[shell] < area[best[hole]]:
            best[hole] = shell
    if len(best) < len(holes):
        raise RejectedInput.at(
            pointer,
            "A hole lies in no outer ring, or the outer ring crosses itself. Outer rings of a "
            "Shapefile run clockwise, holes counter-clockwise.",
            code="invalid-geometry",
        )
    return [best[hole] for hole in range(len(holes))]
