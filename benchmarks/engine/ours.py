"""The engine, called as an ingest calls it."""

from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import Transformer

from benchmarks.engine.scenes import CRS
from service.observe import Observed, may_count, observe
from service.spectral.indices import INDICES, Index
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.tiles.plans import Plans
from service.tiles.reading import SceneSource, grids_of, read_strips
from service.zonal.plan import Plan

TWELVE: Final[tuple[Index, ...]] = (
    *(index for index in INDICES.values() if index.watched),
    INDICES["evi"],
)
"""The twelve indices of the benchmark: all that are watched, and one more."""

_PLAN_BYTES: Final = 2**40


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """A scene and parcels on it.

    Attributes
    ----------
    source
        The scene.
    outlines
        The parcels in the scene's system.
    stored
        The same in WGS 84, as WKB.
    plans
        Where plans are kept.
    """

    source: SceneSource
    outlines: NDArray[np.object_]
    stored: list[bytes]
    plans: Plans

    def plan(self) -> Plan:
        """Return the plan, kept from the second time on."""
        return self.plans.plan_for(grids_of(self.source), self.stored)

    def measure(self) -> Observed:
        """Measure the scene: from its files to figures, with a plan that is kept."""
        strips = read_strips(
            self.source, plan := self.plan(), may_count=may_count(SCL, TWELVE, "clear")
        )
        roles = [BandRole(band.role) for band in self.source.bands]
        return observe(strips, plan, roles=roles, indices=TWELVE, quality=SCL, rule="clear")


def case_of(source: SceneSource, outlines: NDArray[np.object_], plans: Path) -> Case:
    """Return a case of parcels in the scene's system."""
    to_degrees = Transformer.from_crs(CRS, "OGC:CRS84", always_xy=True).transform
    degrees = shapely.transform(outlines, to_degrees, interleaved=False)
    return Case(
        source=source,
        outlines=outlines,
        stored=list(shapely.to_wkb(degrees)),
        plans=Plans(plans, limit_bytes=_PLAN_BYTES),
    )
