"""Scenes as arrays, and their numbers in the cells of a plan, without any file."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.spectral.gathered import Gathered, Layer, Meaning
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.zonal.plan import Plan


@dataclass(frozen=True, kw_only=True)
class ArrayScene:
    """Stored numbers on the measuring grid: reflectance = number / 10,000 - 0.1 unless said so."""

    bands: Mapping[BandRole, NDArray[Any]]
    quality: NDArray[Any] | None = None
    bits: NDArray[Any] | None = None
    bit_of: Mapping[BandRole, int] = field(default_factory=dict)
    near_cloud: NDArray[np.bool_] | None = None
    scale: float = 1e-4
    offset: float = -0.1
    nodata: float | None = 0
    saturated: float | None = 65_535

    def strip(self, plan: Plan, first: int, last: int) -> Gathered:
        """The scene in some cells of a plan."""
        cells = plan.cells[first:last]

        def layer(numbers: NDArray[Any]) -> Layer:
            return Layer(numbers=np.asarray(numbers).reshape(-1)[cells])

        held = Gathered(first, last)
        if self.quality is not None:
            held.classes = layer(self.quality)
        if self.near_cloud is not None:
            held.near_cloud = layer(self.near_cloud).numbers
        if self.bits is not None:
            held.bits = layer(self.bits)
        for role, numbers in self.bands.items():
            meaning = Meaning(
                scaling=Scaling(scale=self.scale, offset=self.offset),
                nodata=self.nodata,
                saturated=self.saturated,
                bit=self.bit_of.get(role),
            )
            held.take(role, layer(numbers), meaning)
        return held

    def strips(self, plan: Plan, cuts: Sequence[int] = ()) -> Iterator[Gathered]:
        """The scene in all cells of a plan, cut before some of them."""
        inner = {cut for cut in cuts if 0 < cut < len(plan.cells)}
        for first, last in pairwise([0, *sorted(inner), len(plan.cells)]):
            yield self.strip(plan, first, last)
