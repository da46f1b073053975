"""Real pixels through the running service, against two general libraries.

Pixels: the Sentinel-2 subset in the wheel of `spyndex` 0.12 (MIT), B02 B03 B04 B08, integers =
reflectance * 10,000; it has no georeference or date, so grid and date are ours. Index images:
`spyndex`, constants explicit. Statistics: `exactextract` 0.3 (Apache-2.0) with the same minimum
coverage on both sides. Outlines are invented, and projected here with `pyproj` alone.
"""

import dataclasses
import json
from collections.abc import Callable, Mapping, Sequence
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
import spyndex
from affine import Affine
from exactextract import exact_extract
from exactextract.feature import JSONFeatureSource
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Transformer
from shapely.geometry import mapping

from service.observe import Observed, observe
from service.spectral.indices import INDICES
from service.spectral.roles import BandRole
from service.zonal.coverage import Zones, project, zones_on
from service.zonal.grid import Grid
from service.zonal.plan import plan_of
from tests.scenes_in_memory import ArrayScene
from tests.serving import ORIGIN, Service, write_band

CRS = "EPSG:32633"
ROLES = {"blue": "B", "green": "G", "red": "R", "nir": "N"}
STATS = ("mean", "sd", "min", "p10", "p50", "p90", "max", "pixels")
WATCHED = ("ndvi", "evi2", "savi", "ndwi")
UNWATCHED = ("evi", "msavi", "gndvi")
# Names and constants of the oracle, as published: Huete et al. 1988, 2002; Jiang et al. 2008.
ORACLE: Mapping[str, tuple[str, dict[str, float]]] = {
    "ndvi": ("NDVI", {}),
    "evi2": ("EVI2", {"g": 2.5, "L": 1.0}),
    "savi": ("SAVI", {"L": 0.5}),
    "ndwi": ("NDWI", {}),
    "evi": ("EVI", {"g": 2.5, "C1": 6.0, "C2": 7.5, "L": 1.0}),
    "msavi": ("MSAVI", {}),
    "gndvi": ("GNDVI", {}),
}
# Statistic → operation of the oracle, and the name that its answer has there.
OPERATIONS = {
    "mean": ("mean(min_coverage_frac=1e-6)", "mean"),
    "sd": ("stdev(min_coverage_frac=1e-6)", "stdev"),
    "min": ("min(min_coverage_frac=1e-6)", "min"),
    "p10": ("quantile(q=0.1,min_coverage_frac=1e-6)", "quantile_10"),
    "p50": ("quantile(q=0.5,min_coverage_frac=1e-6)", "quantile_50"),
    "p90": ("quantile(q=0.9,min_coverage_frac=1e-6)", "quantile_90"),
    "max": ("max(min_coverage_frac=1e-6)", "max"),
    "pixels": ("count(min_coverage_frac=1e-6)", "count"),
}
MEAN_WITHIN = 1e-6
QUANTILE_WITHIN = 1e-4
# Stored statistics are float32, whose step is 6e-8 of the number.
WITHIN = {
    "mean": MEAN_WITHIN,
    "sd": MEAN_WITHIN,
    "min": MEAN_WITHIN,
    "p10": QUANTILE_WITHIN,
    "p50": QUANTILE_WITHIN,
    "p90": QUANTILE_WITHIN,
    "max": MEAN_WITHIN,
    "pixels": 1e-6,
}
Figures = dict[str, dict[str, NDArray[np.float64]]]
"""Index id → statistic → one number a parcel."""

SCENE = {
    "ref": "real",
    "sensor": "generic",
    "acquired_at": "2024-06-03T10:10:31Z",
    "scaling": {"scale": 0.0001, "offset": 0.0},
}


def real_numbers() -> dict[str, NDArray[np.uint16]]:
    text = (resources.files("spyndex") / "data" / "S2_10m.json").read_text("utf-8")
    stack = np.array(json.loads(text))
    assert stack.shape == (4, 300, 300)
    return dict(zip(ROLES, stack.astype(np.uint16), strict=True))


def star(
    random: np.random.Generator, col: float, row: float, *, cells: float, corners: int
) -> shapely.Polygon:
    """Return a polygon with a ragged, concave edge around a place on the tile, in metres."""
    angles = np.sort(random.uniform(0, 2 * np.pi, corners)) + np.linspace(0, 1e-3, corners)
    radii = 10 * cells * random.uniform(0.35, 1.0, corners)
    x, y = ORIGIN[0] + 10 * col, ORIGIN[1] - 10 * row
    return shapely.Polygon(
        np.column_stack([x + radii * np.cos(angles), y + radii * np.sin(angles)])
    )


def outlines() -> dict[str, shapely.Geometry]:
    """Return 42 irregular parcels, in metres."""
    random = np.random.default_rng(20240603)
    found: dict[str, shapely.Geometry] = {}
    for number in range(30):
        col, row = random.uniform(40, 260, 2)
        size, corners = random.uniform(4, 35), int(random.integers(8, 40))
        found[f"concave-{number}"] = star(random, col, row, cells=size, corners=corners)
    for number in range(4):
        col, row = random.uniform(50, 250, 2)
        whole = star(random, col, row, cells=30, corners=24)
        hole = star(random, col, row, cells=9, corners=12)
        found[f"hole-{number}"] = whole.difference(hole)
    for number in range(4):
        col, row = random.uniform(60, 240, 2)
        parts = [star(random, col + 45 * step, row, cells=20, corners=15) for step in (-0.5, 0.5)]
        found[f"parts-{number}"] = shapely.MultiPolygon(parts)
    # 0.2 ha are twenty cells; the second is smaller than one.
    found["small"] = star(random, 120.3, 80.7, cells=3.2, corners=7)
    found["tiny"] = star(random, 200.4, 210.6, cells=0.4, corners=6)
    found["over the edge"] = star(random, 150, 1, cells=25, corners=20)
    found["over the corner"] = star(random, 299, 299, cells=25, corners=20)
    return found


OUTLINES = outlines()


def test_the_parcels_are_what_the_comparison_needs() -> None:
    tile = shapely.box(ORIGIN[0], ORIGIN[1] - 3000, ORIGIN[0] + 3000, ORIGIN[1])
    assert len(OUTLINES) == 42
    assert all(outline.is_valid for outline in OUTLINES.values())
    assert all(o.convex_hull.area > 1.1 * o.area for o in OUTLINES.values() if o.area > 1e4)
    assert sum(len(o.interiors) for o in OUTLINES.values() if o.geom_type == "Polygon") == 4
    assert sum(o.geom_type == "MultiPolygon" for o in OUTLINES.values()) >= 4
    assert [ref for ref, o in OUTLINES.items() if not tile.contains(o)] == [
        "over the edge",
        "over the corner",
    ]


def in_degrees() -> dict[str, shapely.Geometry]:
    to_degrees = Transformer.from_crs(CRS, "OGC:CRS84", always_xy=True).transform
    return {
        ref: shapely.transform(outline, to_degrees, interleaved=False)
        for ref, outline in OUTLINES.items()
    }


def features() -> list[dict[str, Any]]:
    return [
        {"type": "Feature", "properties": {"ref": ref}, "geometry": mapping(outline)}
        for ref, outline in in_degrees().items()
    ]


def index_images(
    indices: Sequence[str], numbers: Mapping[str, NDArray[np.uint16]]
) -> dict[str, NDArray[np.float32]]:
    """Return index images by the oracle, in float64 from the numbers and stored as float32."""
    reflectances = {ROLES[role]: band / 10_000 for role, band in numbers.items()}
    images = {}
    for index in indices:
        name, constants = ORACLE[index]
        known = {**reflectances, **constants}
        needed = {band: known[band] for band in spyndex.indices[name].bands}
        images[index] = spyndex.computeIndex(name, params=needed).astype(np.float32)
    return images


def oracle(indices: Sequence[str], numbers: Mapping[str, NDArray[np.uint16]]) -> Figures:
    """Return the figures of every parcel by the oracles."""
    x0, y0 = ORIGIN
    to_metres = Transformer.from_crs("OGC:CRS84", CRS, always_xy=True).transform
    placed = [
        shapely.transform(outline, to_metres, interleaved=False)
        for outline in in_degrees().values()
    ]
    zones = [{"type": "Feature", "properties": {}, "geometry": mapping(o)} for o in placed]
    operations = [operation for operation, _ in OPERATIONS.values()]
    found: Figures = {}
    for index, image in index_images(indices, numbers).items():
        raster = NumPyRasterSource(image, x0, y0 - 3000, x0 + 3000, y0)
        rows = [
            f["properties"] for f in exact_extract(raster, JSONFeatureSource(zones), operations)
        ]
        found[index] = {
            stat: np.array([row[name] for row in rows]) for stat, (_, name) in OPERATIONS.items()
        }
    return found


def differences(ours: Figures, theirs: Figures) -> dict[tuple[str, str], NDArray[np.float64]]:
    """Return by index and statistic how far each parcel's figures are apart (pixels: relative)."""
    found = {}
    for index, stats in theirs.items():
        for stat, expected in stats.items():
            scale = expected if stat == "pixels" else 1.0
            found[index, stat] = np.abs(ours[index][stat] - expected) / scale
    return found


def beyond(ours: Figures, theirs: Figures) -> dict[tuple[str, str], float]:
    """Return the largest difference of each index and statistic that is out of bounds."""
    largest = {key: float(np.max(diff)) for key, diff in differences(ours, theirs).items()}
    # Written so that NaN is out of bounds.
    return {key: value for key, value in largest.items() if not value <= WITHIN[key[1]]}


def figures_of_service(service: Service, scene: str) -> Figures:
    """Ask the series of every parcel; each must hold one look of the scene."""
    found: dict[str, dict[str, list[float]]] = {i: {s: [] for s in STATS} for i in WATCHED}
    query = {"index": ",".join(WATCHED), "stat": ",".join(STATS), "min_valid": 0}
    for ref in OUTLINES:
        answer = service.get(f"/v1/parcels/{ref}/series", params=query)
        for index in WATCHED:
            columns = answer["indices"][index]
            assert columns["scene"] == [scene]
            for stat in STATS:
                found[index][stat] += columns[stat]
    return {i: {s: np.array(v) for s, v in stats.items()} for i, stats in found.items()}


def post_real(service: Service, folder: Path, numbers: Mapping[str, Any], scene: Any) -> Any:
    folder.mkdir()
    files = {role: write_band(folder / f"{role}.tif", band) for role, band in numbers.items()}
    answer = service.post_scene(scene, files)
    assert (answer.status_code, answer.json()["state"]) == (200, "done"), answer.text
    return answer.json()


def test_every_parcel_s_figures_equal_two_general_libraries_on_real_pixels(
    service: Service, tmp_path: Path
) -> None:
    numbers = real_numbers()
    assert service.put_parcels(*features()).json()["created"] == len(OUTLINES)
    report = post_real(service, tmp_path / "real", numbers, SCENE)
    measured = [i for i, told in report["indices"].items() if told["state"] == "measured"]
    # Every watched index that four bands can feed is compared.
    assert sorted(measured) == sorted(WATCHED)
    assert report["parcels_in_footprint"] == len(OUTLINES)
    ours, theirs = figures_of_service(service, "real"), oracle(WATCHED, numbers)
    assert beyond(ours, theirs) == {}


def test_a_forgotten_offset_fails_the_comparison_by_a_tenth_and_more(
    service: Service, tmp_path: Path
) -> None:
    # The numbers as a product of baseline 05.10 holds them: 1,000 more (ESA, BOA_ADD_OFFSET).
    numbers = real_numbers()
    stored = {role: band + np.uint16(1000) for role, band in numbers.items()}
    service.put_parcels(*features())
    right = {"processing_baseline": "05.10", "sensor": "sentinel-2-l2a", "quality": "none"}
    scene = {key: value for key, value in SCENE.items() if key != "scaling"} | right
    post_real(service, tmp_path / "right", stored, scene)
    theirs = oracle(WATCHED, numbers)
    assert beyond(figures_of_service(service, "real"), theirs) == {}

    forgotten = {**scene, "scaling": SCENE["scaling"], "replace": True}
    post_real(service, tmp_path / "wrong", stored, forgotten)
    wrong = figures_of_service(service, "real")
    apart = differences(wrong, theirs)
    assert beyond(wrong, theirs).keys() >= {(i, s) for i in WATCHED for s in ("mean", "p50", "p90")}
    assert np.median(apart["ndvi", "mean"]) > 0.1
    assert float(np.max(apart["ndvi", "mean"])) > 0.2


def test_a_forgotten_offset_turns_an_ndvi_of_0_789_into_0_517(
    service: Service, tmp_path: Path
) -> None:
    # The published case: red 1400 and nir 4400 of baseline 04.00 or later.
    service.put_parcels(features()[0])
    numbers = {
        "red": np.full((300, 300), 1400, dtype=np.uint16),
        "nir": np.full((300, 300), 4400, dtype=np.uint16),
    }
    for ref, day, baseline in (("with", "03", "05.10"), ("without", "08", "03.01")):
        scene = {
            "ref": ref,
            "sensor": "sentinel-2-l2a",
            "acquired_at": f"2024-06-{day}T10:10:31Z",
            "processing_baseline": baseline,
            "quality": "none",
        }
        post_real(service, tmp_path / ref, numbers, scene)
    assert service.series("concave-0")["mean"] == pytest.approx([0.789474, 0.517241], abs=1e-6)


def zones_of_parcels() -> Zones:
    return zones_on(_GRID, project(list(in_degrees().values()), CRS))


_GRID = Grid(crs=CRS, transform=Affine(10, 0, ORIGIN[0], 0, -10, ORIGIN[1]), shape=(300, 300))


def observed(indices: Sequence[str], zones: Zones) -> Figures:
    """Return figures straight from `observe`, without service or files."""
    scene = ArrayScene(
        bands={BandRole(role): band for role, band in real_numbers().items()},
        offset=0.0,
        nodata=None,
        saturated=None,
    )
    plan = plan_of(_GRID, zones)
    answer = observe(
        scene.strips(plan),
        plan,
        roles=[BandRole(role) for role in ROLES],
        indices=[INDICES[index] for index in indices],
        quality=None,
        rule="none",
    )
    return {
        index: {stat: _column(answer, f"{index}.{stat}") for stat in STATS} for index in indices
    }


def _column(answer: Observed, name: str) -> NDArray[np.float64]:
    return answer.figures[:, answer.columns.index(name)].astype(np.float64)


def test_indices_that_are_not_watched_equal_the_libraries_on_real_pixels_too() -> None:
    # Together with the watched ones these are all that four bands can feed.
    fed = {i.id for i in INDICES.values() if {role.value for role in i.roles} <= ROLES.keys()}
    assert fed == {*WATCHED, *UNWATCHED}
    ours = observed(UNWATCHED, zones_of_parcels())
    assert beyond(ours, oracle(UNWATCHED, real_numbers())) == {}


def _all_or_nothing(zones: Zones) -> NDArray[np.float32]:
    return np.ones_like(zones.weights)


def _by_centre(zones: Zones) -> NDArray[np.float32]:
    return (zones.weights >= 0.5).astype(np.float32)


@pytest.mark.parametrize(
    ("weights", "apart"),
    [(_all_or_nothing, 1e-2), (_by_centre, 1e-3)],
    ids=["every touched cell whole", "cells by half or more"],
)
def test_without_coverage_fractions_means_move_by_thousandths_and_more(
    weights: Callable[[Zones], NDArray[np.float32]], apart: float
) -> None:
    zones, theirs = zones_of_parcels(), oracle(WATCHED, real_numbers())
    assert beyond(observed(WATCHED, zones), theirs) == {}
    wrong = observed(WATCHED, dataclasses.replace(zones, weights=weights(zones)))
    assert float(np.nanmax(differences(wrong, theirs)["ndvi", "mean"])) > apart


def test_one_edge_cell_taken_whole_is_seen_in_nearly_every_parcel() -> None:
    zones, theirs = zones_of_parcels(), oracle(["ndvi"], real_numbers())
    weights = zones.weights.copy()
    for start, stop in zip(zones.indptr, zones.indptr[1:], strict=False):
        weights[start + int(np.argmin(zones.weights[start:stop]))] = 1.0
    wrong = observed(["ndvi"], dataclasses.replace(zones, weights=weights))
    moved = differences(wrong, theirs)["ndvi", "mean"]
    assert int((moved > MEAN_WITHIN).sum()) >= len(zones) - 1
