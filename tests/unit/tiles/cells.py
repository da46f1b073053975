"""What `read_strips` gives, put back into images."""

from collections.abc import Callable
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from service.spectral.gathered import Gathered, Layer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.reading import SceneSource, grids_of, read_strips
from service.zonal.coverage import zones_on
from service.zonal.plan import Plan, plan_of

AS_STORED = Scaling(scale=1.0, offset=0.0)
"""A reflectance that is the stored number."""


def plan_for(source: SceneSource, *boxes: tuple[int, int, int, int]) -> Plan:
    """A plan of rectangles by first row, last row, first column, last column; of all cells."""
    grids = grids_of(source)
    place, (rows, cols) = grids.measuring.transform, grids.measuring.shape
    outlines = [
        shapely.box(
            place.c + place.a * left, min(place.f + place.e * top, place.f + place.e * bottom),
            place.c + place.a * right, max(place.f + place.e * top, place.f + place.e * bottom),
        )
        for top, bottom, left, right in boxes or [(0, rows, 0, cols)]
    ]  # fmt: skip
    return plan_of(grids.measuring, zones_on(grids.measuring, outlines), grids.others)


def strips_of(source: SceneSource, plan: Plan | None = None, **how: Any) -> list[Gathered]:
    """All strips of a scene."""
    return list(read_strips(source, plan or plan_for(source), **how))


def image(
    strips: list[Gathered], plan: Plan, of: Callable[[Gathered], NDArray[Any]]
) -> NDArray[np.float64]:
    """What the strips say of each cell as an image, NaN elsewhere; no cell comes twice."""
    whole = np.full(plan.grid.shape[0] * plan.grid.shape[1], np.nan)
    seen = np.zeros(whole.shape, dtype=int)
    for strip in strips:
        cells = plan.cells[strip.first : strip.last]
        seen[cells] += 1
        whole[cells] = of(strip)
    assert seen[plan.cells].all()
    assert seen.max(initial=0) <= 1
    return whole.reshape(plan.grid.shape)


def band_image(strips: list[Gathered], plan: Plan, role: BandRole) -> NDArray[np.float64]:
    """A band's numbers, NaN where it has none."""
    return image(strips, plan, lambda s: s.reflectance(role, np.arange(len(s), dtype=np.int32)))


def layer_image(
    strips: list[Gathered], plan: Plan, of: Callable[[Gathered], Layer | None]
) -> NDArray[np.float64]:
    """A layer's numbers, NaN where it has none."""

    def numbers(strip: Gathered) -> NDArray[np.float64]:
        layer = of(strip)
        assert layer is not None
        if layer.at is None:
            return layer.numbers.astype(float)
        places = np.where(layer.at < 0, len(layer.numbers), layer.at - layer.first)
        return np.append(layer.numbers.astype(float), np.nan)[places]

    return image(strips, plan, numbers)
