"""Measuring against decoding, against the general libraries, and as parcels grow in number."""

import math
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks.engine import rivals
from benchmarks.engine.costs import cost_of, interleaved, median_ratio, memory_watched
from benchmarks.engine.ours import TWELVE, Case, case_of
from benchmarks.engine.results import Figure, Result
from benchmarks.engine.scenes import (
    FULL_SIDE,
    LEFT,
    TOP,
    SceneOptions,
    decode_all,
    parcels_on,
    scene_in,
)
from service.observe import may_count
from service.spectral.quality import SCL
from service.tiles.reading import SceneSource, read_strips
from service.zonal.coverage import zones_on
from service.zonal.statistics import summarise

_CORNER = (LEFT, TOP)


@dataclass(frozen=True, slots=True, kw_only=True)
class EngineOptions:
    """What to run.

    Attributes
    ----------
    cache
        Folder of invented scenes and of plans.
    full
        A full tile and five turns; else an eighth of its side, and three.
    libraries
        Whether to compare with the general libraries too.
    compress
        How the scene's files are compressed.
    """

    cache: Path
    full: bool = False
    libraries: bool = True
    compress: str = "deflate"

    @property
    def side(self) -> int:
        """Rows and columns of the scene."""
        return FULL_SIDE if self.full else 2_048

    @property
    def parcels(self) -> int:
        """How many parcels; as dense on the small scene as ten thousand on the full one."""
        return round(10_000 * (self.side / FULL_SIDE) ** 2)

    @property
    def turns(self) -> int:
        """How often each piece of work is done."""
        return 5 if self.full else 3

    def limit(self, figure: float) -> float | None:
        """Return a limit that was set for the full size, None at any other."""
        return figure if self.full else None


def run(options: EngineOptions, tell: Callable[[str], None]) -> Result:
    """Run the benchmark; `tell` takes what begins."""
    tell("making the scene")
    source = scene_in(
        options.cache / "scenes", SceneOptions(side=options.side, compress=options.compress)
    )
    many = _case(options, source, options.parcels * 10)
    some = _case(options, source, options.parcels)
    tell("measuring against decoding")
    figures = _against_decoding(options, source, some, many)
    tell("watching memory")
    figures += _memory(options, some, many)
    if options.libraries:
        rivals.check_libraries()
        tell("measuring against the general libraries")
        figures += _against_libraries(options)
    told: dict[str, Any] = {**asdict(options), "side": options.side, "parcels": options.parcels}
    return Result(benchmark="engine", options={**told, "cache": None}, figures=figures)


def _case(options: EngineOptions, source: SceneSource, parcels: int, *, share: float = 1.0) -> Case:
    outlines = parcels_on(options.side, parcels, share=share)
    return case_of(source, outlines, options.cache / "plans")


def _against_decoding(
    options: EngineOptions, source: SceneSource, some: Case, many: Case
) -> list[Figure]:
    quarter = _case(options, source, options.parcels, share=0.25)
    cold = cost_of(some.plan)
    for case in (quarter, many):
        case.plan()
    decoding, few, clustered = interleaved(
        options.turns, lambda: decode_all(source), some.measure, quarter.measure
    )
    reference, all_of_them = interleaved(
        max(2, options.turns // 2), lambda: decode_all(source), many.measure
    )
    read, again = interleaved(2, lambda: _gather(some), lambda: decode_all(source))
    count, ten = options.parcels, options.parcels * 10
    spread, full = median_ratio(few, decoding), median_ratio(all_of_them, reference)
    limit = options.limit
    return [
        Figure(
            name=f"measuring {count:,} parcels, plan kept", value=spread, unit="D",
            must=limit(1.75), aim=limit(1.4), costs={"D": decoding, "measuring": few},
        ),
        Figure(
            name="the same on the wall", unit="D",
            value=float(np.median([a.wall / b.wall for a, b in zip(few, decoding, strict=True)])),
        ),
        Figure(name="reading and gathering alone", unit="D", value=median_ratio(read, again)),
        Figure(
            name="the same parcels in a quarter of the blocks", unit="D",
            value=median_ratio(clustered, decoding), must=limit(0.8), aim=limit(0.6),
        ),
        Figure(
            name=f"measuring {ten:,} parcels, plan kept", value=full, unit="D",
            must=limit(5.5), aim=limit(3.5), costs={"measuring": all_of_them},
        ),
        Figure(
            name="growth of measuring, parcels times ten", value=math.log10(full / spread),
            unit="(exponent)", must=limit(0.8), aim=limit(0.6),
        ),
        Figure(
            name=f"making the plan of {count:,} parcels", unit="D",
            value=cold.cpu / float(np.median([one.cpu for one in decoding])),
        ),
    ]  # fmt: skip


def _gather(case: Case) -> int:
    """Read a scene's strips and leave them."""
    strips = read_strips(case.source, case.plan(), may_count=may_count(SCL, TWELVE, "clear"))
    return sum(len(strip) for strip in strips)


def _memory(options: EngineOptions, some: Case, many: Case) -> list[Figure]:
    figures = []
    limits = ((some, 0.8, 0.4), (many, 2.5, 0.8))
    for case, must, aim in limits:
        with memory_watched() as memory:
            case.measure()
        figures.append(
            Figure(
                name=f"memory above idle, {len(case.stored):,} parcels", unit="GB",
                value=memory.above_idle / 1e9, must=options.limit(must), aim=options.limit(aim),
            )
        )  # fmt: skip
    return figures


def _against_libraries(options: EngineOptions) -> list[Figure]:
    """Compare on a quarter of the full tile: the library holds an image for each index."""
    side = FULL_SIDE // 2 if options.full else 1_024
    parcels = round(10_000 * (side / FULL_SIDE) ** 2)
    scene = SceneOptions(side=side, compress=options.compress)
    source = scene_in(options.cache / "scenes", scene)
    case = case_of(source, parcels_on(side, parcels), options.cache / "plans")
    features = rivals.features_of(list(case.outlines))
    turns = 2 if options.full else 1

    def by_index() -> None:
        for _, image in rivals.index_images(source):
            rivals.zonal_by_index([image], features, _CORNER)

    def at_once() -> None:
        images = [image for _, image in rivals.index_images(source)]
        rivals.zonal_at_once(images, features, _CORNER)

    case.measure()
    ours, theirs, together = interleaved(turns, case.measure, by_index, at_once)
    limit = options.limit
    return [
        Figure(
            name="against the zonal library, one call an index", unit="times", is_at_least=True,
            value=1 / median_ratio(ours, theirs), must=limit(10), aim=limit(14),
            costs={"ours": ours, "theirs": theirs},
        ),
        Figure(
            name="against the zonal library, all in one call", unit="times", is_at_least=True,
            value=1 / median_ratio(ours, together), must=limit(6), aim=limit(8),
        ),
        _one_index(options, case, features),
        _weights(options, case, features),
        _clipping(options, case, ours[0].cpu),
    ]  # fmt: skip


def _one_index(options: EngineOptions, case: Case, features: list[Any]) -> Figure:
    """Compare the step from an index's values to its statistics, weights known."""
    plan = case.plan()
    _, image = next(iter(rivals.index_images(case.source)))
    image[np.isnan(image)] = np.float32(0.5)

    def zonal() -> None:
        values: NDArray[np.float32] = image.reshape(-1)[plan.cells][plan.at]
        summarise(values, plan.weights, plan.indptr)

    ours, theirs = interleaved(3, zonal, lambda: rivals.zonal_by_index([image], features, _CORNER))
    return Figure(
        name="statistics of one index, weights known, against the library", unit="times",
        value=1 / median_ratio(ours, theirs), is_at_least=True,
        must=options.limit(25), aim=options.limit(40), costs={"ours": ours, "theirs": theirs},
    )  # fmt: skip


def _weights(options: EngineOptions, case: Case, features: list[Any]) -> Figure:
    grid = case.plan().grid
    ours, theirs = interleaved(
        3,
        lambda: zones_on(grid, case.outlines),
        lambda: rivals.coverage(features, grid.shape, _CORNER),
    )
    return Figure(
        name="weights against the library's coverage operation", unit="times", is_at_least=True,
        value=1 / median_ratio(ours, theirs), must=options.limit(10), aim=options.limit(20),
        costs={"ours": ours, "theirs": theirs},
    )  # fmt: skip


def _clipping(options: EngineOptions, case: Case, ours_cpu: float) -> Figure:
    """Clip a sample of the parcels; the figure is for all of them."""
    sample = list(case.outlines[: 30 if options.full else 8])
    clipped = cost_of(lambda: rivals.clip_each(case.source, sample))
    whole = clipped.cpu / len(sample) * len(case.outlines)
    return Figure(
        name="against a clip for each parcel and index (sampled)", unit="times", is_at_least=True,
        value=whole / ours_cpu, must=options.limit(300), aim=options.limit(500),
    )  # fmt: skip
