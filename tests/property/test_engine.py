"""The whole engine, from files to figures, against the general zonal library.

Two hundred invented scenes with sets of parcels: several reference systems, bands on two grids
that need not nest, tiles and strips, integers and reals, clouds; parcels with holes, of several
parts, thinner than a cell, smaller than one, over the edge of the scene, over one another.

Oracle: `exactextract` over index images computed here by numpy from the published formulas
(Rouse et al. 1974; Gao 1996; Jiang et al. 2008), with the same minimum coverage on its side.
"""

import dataclasses
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import rasterio
import shapely
from affine import Affine
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Transformer

from service.observe import Observed, may_count, observe
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.plans import Plans
from service.tiles.reading import BandSource, SceneSource, grids_of, read_strips
from service.zonal.coverage import MIN_COVERAGE, project, shares_on
from service.zonal.plan import Plan

RED, NIR, SWIR = BandRole.RED, BandRole.NIR, BandRole.SWIR16
CHOSEN = tuple(INDICES[name] for name in ("ndvi", "evi2", "ndmi"))
SCALE, OFFSET = 1e-4, -0.1
SETS, GROUPS = 200, 20
# Centres of grids: UTM north and south, an equal-area system, one next to 180°.
SYSTEMS = (
    ("EPSG:32633", 512_345.0, 5_400_120.0),
    ("EPSG:32733", 388_870.0, 7_234_560.0),
    ("EPSG:3035", 4_321_000.0, 3_210_030.0),
    ("EPSG:32660", 520_010.0, 1_000_000.0),
)
LEAST = f"min_coverage_frac={MIN_COVERAGE}"
OPERATIONS = {
    "mean": f"mean({LEAST})", "sd": f"stdev({LEAST})", "min": f"min({LEAST})",
    "p10": f"quantile(q=0.1,{LEAST})", "p50": f"quantile(q=0.5,{LEAST})",
    "p90": f"quantile(q=0.9,{LEAST})", "max": f"max({LEAST})", "pixels": f"count({LEAST})",
}  # fmt: skip
TOLERANCE = {"mean": 1e-6, "sd": 1e-6, "p10": 1e-5, "p50": 1e-5, "p90": 1e-5, "pixels": 1e-6}


@dataclass(frozen=True, kw_only=True)
class Invented:
    """A scene in files, the same numbers as arrays, and parcels in WGS 84."""

    source: SceneSource
    transform: Affine
    bands: dict[BandRole, NDArray[Any]]
    usable: NDArray[np.bool_]
    parcels: list[bytes]


def invented(seed: int, folder: Path) -> Invented:
    random = np.random.default_rng([20_261_001, seed])
    crs, x, y = SYSTEMS[seed % len(SYSTEMS)]
    rows, cols = (2 * random.integers(15, 40, 2)).tolist()
    fine = Affine(10, 0, x - 5 * cols, 0, -10, y + 5 * rows)
    shift = (0.0, 0.0) if seed % 2 else tuple(random.uniform(-9, 9, 2))
    step = 20 if seed % 3 else 30
    coarse = Affine(step, 0, fine.c + shift[0], 0, -step, fine.f + shift[1])
    coarse_shape = (-(-rows * 10 // step) + 1, -(-cols * 10 // step) + 1)
    dtype = ("uint16", "int16", "float32", "int32")[seed // 2 % 4]
    # Few levels make many equal values, whose weights have to be joined.
    levels = random.integers(1_050, 6_000, random.integers(3, 9)) if seed % 5 < 2 else None
    layers = {
        RED: (drawn(random, (rows, cols), levels).astype(dtype), fine),
        NIR: (drawn(random, (rows, cols), levels).astype(dtype), fine),
        SWIR: (drawn(random, coarse_shape, levels).astype(dtype), coarse),
    }
    classes = random.choice(
        [4, 5, 6, 9, 3, 0], p=[0.5, 0.2, 0.1, 0.1, 0.05, 0.05], size=coarse_shape
    )
    quality = (classes.astype(np.uint8), coarse)
    sources = tuple(
        BandSource(
            role=role, path=written(folder / f"{seed}-{role}.tif", crs, random, *layer), nodata=0,
            scaling=Scaling(scale=SCALE, offset=OFFSET), saturated=6_001,
        )
        for role, layer in layers.items()
    )  # fmt: skip
    path = written(folder / f"{seed}-quality.tif", crs, random, *quality)
    on_grid = {role: on_fine_grid(*layer, fine, (rows, cols)) for role, layer in layers.items()}
    seen = np.any([known(numbers) for numbers in on_grid.values()], axis=0)
    classes_there = on_fine_grid(*quality, fine, (rows, cols))
    return Invented(
        source=SceneSource(
            bands=sources,
            quality=BandSource(role="quality", path=path, scaling=None, nodata=0),
        ),
        transform=fine,
        bands=on_grid,
        usable=seen & np.isin(classes_there, sorted(SCL.rules["clear"].keep)),
        parcels=parcels_on(random, crs, fine, (rows, cols)),
    )


def drawn(
    random: np.random.Generator, shape: tuple[int, int], levels: NDArray[Any] | None
) -> NDArray[Any]:
    numbers = (
        random.choice(levels, shape) if levels is not None else random.integers(1_050, 6_000, shape)
    )
    numbers[random.random(shape) < 0.02] = 0
    numbers[random.random(shape) < 0.01] = 6_001
    return numbers


def written(
    path: Path, crs: str, random: np.random.Generator, numbers: NDArray[Any], transform: Affine
) -> Path:
    tiled = {"tiled": True, "blockxsize": 32, "blockysize": 16}
    layout = [tiled, {"blockysize": 1}, {"blockysize": 7}][random.integers(3)]
    how = {"compress": random.choice(["deflate", "lzw", "zstd"])} | layout
    with rasterio.open(
        path, "w", driver="GTiff", height=numbers.shape[0], width=numbers.shape[1], count=1,
        dtype=numbers.dtype, crs=crs, transform=transform, **how,
    ) as file:  # fmt: skip
        file.write(numbers, 1)
    return path


def on_fine_grid(
    numbers: NDArray[Any], at: Affine, fine: Affine, shape: tuple[int, int]
) -> NDArray[np.float64]:
    """The number at the centre of each fine cell; 0, which is no data, where there is none."""
    ys = fine.f + (np.arange(shape[0]) + 0.5) * fine.e
    xs = fine.c + (np.arange(shape[1]) + 0.5) * fine.a
    rows, cols = np.floor((ys - at.f) / at.e).astype(int), np.floor((xs - at.c) / at.a).astype(int)
    inside = np.outer(
        (rows >= 0) & (rows < numbers.shape[0]), (cols >= 0) & (cols < numbers.shape[1])
    )
    taken = numbers[np.ix_(rows.clip(0, numbers.shape[0] - 1), cols.clip(0, numbers.shape[1] - 1))]
    return np.where(inside, taken, 0).astype(float)


def known(numbers: NDArray[np.float64]) -> NDArray[np.bool_]:
    return (numbers != 0) & (numbers != 6_001)


def parcels_on(
    random: np.random.Generator, crs: str, fine: Affine, shape: tuple[int, int]
) -> list[bytes]:
    """Parcels of every kind on a grid and over its edge, as WKB in WGS 84."""
    to_degrees = Transformer.from_crs(crs, "OGC:CRS84", always_xy=True).transform
    kinds = ["plain", "hole", "parts", "sliver", "tiny", "large"]
    outlines = [outline(random, fine, shape, kind) for kind in kinds * 2]
    return [
        shapely.to_wkb(shapely.transform(one, to_degrees, interleaved=False)) for one in outlines
    ]


def outline(
    random: np.random.Generator, fine: Affine, shape: tuple[int, int], kind: str
) -> shapely.Geometry:
    reach = {"tiny": 6.0, "large": 300.0}.get(kind, 80.0)
    x = fine.c + 10 * random.uniform(-3, shape[1] + 3)
    y = fine.f - 10 * random.uniform(-3, shape[0] + 3)
    first = star(random, x, y, reach)
    if kind == "hole":
        point = first.representative_point()
        return first.difference(shapely.affinity.scale(first, 0.5, 0.4, origin=point))
    if kind == "parts":
        return first.union(star(random, x + 150, y - 40, 50))
    if kind == "sliver":
        ends = [(x, y), (x + random.uniform(-300, 300), y + random.uniform(-300, 300))]
        return shapely.LineString(ends).buffer(random.uniform(0.05, 3), cap_style="flat")
    return first


def star(random: np.random.Generator, x: float, y: float, reach: float) -> shapely.Polygon:
    corners = int(random.integers(3, 14))
    angles = np.linspace(0, 2 * np.pi, corners, endpoint=False)
    far = reach * random.uniform(0.3, 1.0, corners)
    return shapely.Polygon(np.column_stack([x + far * np.cos(angles), y + far * np.sin(angles)]))


def truth(scene: Invented, geometries: NDArray[np.object_]) -> dict[str, list[dict[str, float]]]:
    """What the library says of each index and parcel."""
    red, nir, swir = (
        np.where(
            scene.usable & known(scene.bands[role]), scene.bands[role] * SCALE + OFFSET, np.nan
        )
        for role in (RED, NIR, SWIR)
    )

    def ratio(top: NDArray[np.float64], bottom: NDArray[np.float64]) -> NDArray[np.float32]:
        divisor = np.where(np.abs(bottom) < 1e-6, np.nan, bottom)
        return (top / divisor).astype(np.float32)

    images = {
        "ndvi": ratio(nir - red, nir + red),
        "evi2": ratio(2.5 * (nir - red), nir + 2.4 * red + 1),
        "ndmi": ratio(nir - swir, nir + swir),
    }
    features = [
        {"type": "Feature", "properties": {}, "geometry": shapely.geometry.mapping(one)}
        for one in geometries
    ]
    return {name: list(by_library(image, scene, features)) for name, image in images.items()}


def by_library(
    image: NDArray[np.float32], scene: Invented, features: list[Any]
) -> Iterator[dict[str, float]]:
    left, top = scene.transform.c, scene.transform.f
    rows, cols = image.shape
    source = NumPyRasterSource(image, left, top - 10 * rows, left + 10 * cols, top)
    answers = exact_extract(
        source, JSONFeatureSource(features), [f"{name}={how}" for name, how in OPERATIONS.items()]
    )
    for answer in answers:
        # The library adds the percentage to the name of a quantile: p10 becomes p10_10.
        figures = {name.split("_")[0]: figure for name, figure in answer["properties"].items()}
        yield {name: np.nan if figures[name] is None else figures[name] for name in OPERATIONS}


def compared(
    seen: Observed, expected: dict[str, list[dict[str, float]]], sure: NDArray[np.bool_]
) -> list[str]:
    """Where figures are further from the library's than the tolerance, in words."""
    by_name = dict(zip(seen.columns, seen.figures.T.astype(float), strict=True))
    wrong = []
    for index, parcels in expected.items():
        for stat in OPERATIONS:
            got = by_name[f"{index}.{stat}"]
            want = np.array([figures[stat] for figures in parcels])
            far = TOLERANCE.get(stat, 0.0) * np.maximum(1.0, np.abs(want))
            is_far = ~((np.abs(got - want) <= far) | (np.isnan(got) & np.isnan(want))) & sure
            wrong += [f"{index}.{stat} {got[at]} {want[at]}" for at in np.flatnonzero(is_far)]
    return wrong


def clear_of_the_least_share(scene: Invented, plan: Plan) -> NDArray[np.bool_]:
    """Which parcels have no cell so near to the minimum coverage that rounding decides."""
    grid = plan.grid
    place = scene.transform
    inside = [
        shapely.transform(
            one, lambda p: (p - [place.c, place.f]) / [place.a, place.e], interleaved=True
        )
        for one in project(shapely.from_wkb(scene.parcels), grid.crs)
    ]
    _, shares, counts = shares_on(grid.shape, np.array(inside, dtype=object), least=1e-8)
    near = np.abs(np.log2(shares / MIN_COVERAGE)) < 1
    ends = np.concatenate([[0], np.cumsum(counts)])
    return np.array([not near[a:b].any() for a, b in pairwise(ends)])


def measured(scene: Invented, plan: Plan, *, strip_cells: int) -> Observed:
    strips = read_strips(
        scene.source, plan, may_count=may_count(SCL, CHOSEN, "clear"), strip_cells=strip_cells
    )
    roles = (RED, NIR, SWIR)
    return observe(strips, plan, roles=roles, indices=CHOSEN, quality=SCL, rule="clear")


@pytest.mark.parametrize("group", range(GROUPS))
def test_figures_are_those_of_the_general_zonal_library(group: int, tmp_path: Path) -> None:
    plans = Plans(tmp_path / "plans", limit_bytes=2**30)
    for seed in range(group, SETS, GROUPS):
        scene = invented(seed, tmp_path)
        plan = plans.plan_for(grids_of(scene.source), scene.parcels)
        sure = clear_of_the_least_share(scene, plan)
        assert sure.sum() >= 8
        expected = truth(scene, project(shapely.from_wkb(scene.parcels), plan.grid.crs))

        whole = measured(scene, plan, strip_cells=10**9)
        in_strips = measured(scene, plan, strip_cells=100)

        assert compared(whole, expected, sure) == []
        np.testing.assert_array_equal(in_strips.figures, whole.figures)


def test_one_wrong_weight_of_an_edge_cell_is_noticed(tmp_path: Path) -> None:
    plans = Plans(tmp_path / "plans", limit_bytes=2**30)
    noticed = 0
    for seed in range(10):
        scene = invented(seed, tmp_path)
        plan = plans.plan_for(grids_of(scene.source), scene.parcels)
        expected = truth(scene, project(shapely.from_wkb(scene.parcels), plan.grid.crs))
        sure = clear_of_the_least_share(scene, plan)
        edge = np.flatnonzero((plan.weights > 0.2) & (plan.weights < 0.8))
        weights = plan.weights.copy()
        weights[edge] *= np.float32(1.001)

        wrong = compared(
            measured(scene, dataclasses.replace(plan, weights=weights), strip_cells=10**9),
            expected,
            sure,
        )

        noticed += any(".mean" in line for line in wrong)
    assert noticed == 10


def test_equal_values_that_are_not_joined_would_be_noticed(tmp_path: Path) -> None:
    # The quantile's definition over cells instead of distinct values: what the library gives
    # where no two values are equal, and far from it where some are.
    plans = Plans(tmp_path / "plans", limit_bytes=2**30)
    scene = invented(0, tmp_path)
    plan = plans.plan_for(grids_of(scene.source), scene.parcels)
    expected = truth(scene, project(shapely.from_wkb(scene.parcels), plan.grid.crs))["ndvi"]
    nir, red = (
        np.where(
            scene.usable & known(scene.bands[role]), scene.bands[role] * SCALE + OFFSET, np.nan
        )
        for role in (NIR, RED)
    )
    image = ((nir - red) / (nir + red)).astype(np.float32).reshape(-1)
    apart = []
    for zone, given in enumerate(plan.order.tolist()):
        entries = slice(plan.indptr[zone], plan.indptr[zone + 1])
        values, weights = image[plan.cells[plan.at[entries]]], plan.weights[entries].astype(float)
        count = ~np.isnan(values)
        if count.sum() > 20:
            median = over_cells(values[count].astype(float), weights[count], 0.5)
            apart.append(abs(median - expected[given]["p50"]))
    assert len(apart) > 3
    assert max(apart) > 1e-3


def over_cells(values: NDArray[np.float64], weights: NDArray[np.float64], share: float) -> float:
    order = np.argsort(values)
    values, weights = values[order], weights[order]
    gaps = len(values) - 1
    places = np.arange(len(values)) * weights + gaps * (np.cumsum(weights) - weights)
    return float(np.interp(share * gaps * weights.sum(), places, values))
