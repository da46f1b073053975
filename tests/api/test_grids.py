"""Grids and passes over HTTP: figures against an independent computation by a general library.

The oracle is `tests.zonal_oracle`; pixels and outlines are random, and ours.
"""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
from numpy.typing import NDArray
from shapely.affinity import rotate, translate
from shapely.geometry import mapping

from tests.serving import Service, write_band
from tests.zonal_oracle import LOSSES, OPERATIONS, Expected, Layer, expected, to_crs, to_degrees

INDICES = ("ndvi", "ndmi", "nbr", "nbr2")
SHARES = ("valid_share", "water", *LOSSES)
# Stored statistics are float32; the quantiles of the oracle merge equal values as ours do.
WITHIN = dict.fromkeys(OPERATIONS, 2e-6) | dict.fromkeys(("p10", "p50", "p90"), 1e-4)
# Cell in metres, and where the grid begins beside the tile's corner, metres east and north:
# none of the grids nests in another, and the coarse ones leave a strip of the tile empty.
GRIDS = {"red": (10, 0, 0), "nir": (20, -7, 4), "swir16": (30, -13, 11), "swir22": (60, 25, -18)}
QUALITY = (20, 9, -6)
SIDE_M = 600
Corner = tuple[float, float]
SCENE = {
    "sensor": "sentinel-2-l2a",
    "platform": "sentinel-2b",
    "processing_baseline": "05.10",
    "acquired_at": "2024-06-03T10:10:31Z",
}


def layer(
    random: np.random.Generator, corner: Corner, grid: tuple[float, float, float], numbers: Any
) -> Layer:
    cell_m, east, north = grid
    cells = round(SIDE_M / cell_m) + 1
    return Layer(
        numbers=numbers(random, (cells, cells)),
        origin=(corner[0] + east, corner[1] + north),
        cell_m=cell_m,
    )


def reflected(random: np.random.Generator, shape: tuple[int, int]) -> NDArray[np.uint16]:
    """Return numbers of surfaces, some less than nothing, some missing, some saturated."""
    numbers = random.integers(950, 6_000, shape)
    chance = random.random(shape)
    numbers[chance < 0.03] = 0
    numbers[chance > 0.98] = 65_535
    # A corner where no band has anything, and one where all are saturated.
    third, rest = shape[0] // 3, shape[0] * 3 // 4
    numbers[rest:, :third] = 0
    numbers[rest:, rest:] = 65_535
    return numbers.astype(np.uint16)


def classes(random: np.random.Generator, shape: tuple[int, int]) -> NDArray[np.uint8]:
    likely = [0.02, 0.02, 0.06, 0.08, 0.4, 0.12, 0.06, 0.06, 0.05, 0.05, 0.04, 0.04]
    return random.choice(12, shape, p=likely).astype(np.uint8)


def scene_of(seed: int, corner: Corner) -> tuple[dict[str, Layer], Layer]:
    random = np.random.default_rng(seed)
    bands = {role: layer(random, corner, grid, reflected) for role, grid in GRIDS.items()}
    return bands, layer(random, corner, QUALITY, classes)


def written(folder: Path, bands: Mapping[str, Layer], quality: Layer, crs: str) -> dict[str, Path]:
    folder.mkdir()
    return {
        part: write_band(
            folder / f"{part}.tif",
            each.numbers,
            cell_m=each.cell_m,
            origin=each.origin,
            crs=crs,
        )
        for part, each in {**bands, "quality": quality}.items()
    }


def box(x: float, y: float, width: float, height: float | None = None) -> shapely.Polygon:
    """Return a rectangle by its upper left corner, metres east and south of the tile's."""
    return shapely.box(x, -y - (height or width), x + width, -y)


def outlines() -> dict[str, shapely.Geometry]:
    """Return parcels beside the tile's corner, in metres."""
    ragged = [(211, -97), (340, -120), (301, -188), (352, -259), (247, -231), (190, -262)]
    ring = shapely.Polygon(ragged)
    return {
        "ragged": ring,
        "hole": box(60, 80, 110).difference(rotate(box(90, 110, 45), 33)),
        "parts": shapely.MultiPolygon([rotate(box(400, 60, 70), 20), rotate(box(500, 90, 33), 71)]),
        "sliver": rotate(box(150, 300, 320, 3), 17),
        "tiny": shapely.Polygon([(281.3, -331.2), (284.9, -332.0), (282.2, -335.7)]),
        "over a cell's corner": box(308, 318, 4),
        "over the east edge": rotate(box(540, 250, 120), 12),
        "over the corner": rotate(box(-40, -40, 130), 40),
        "where nothing is": box(20, 500, 90),
        "where all is saturated": box(510, 500, 60),
        "all": box(-50, -50, 690),
    }


def features(placed: Mapping[str, shapely.Geometry]) -> list[dict[str, Any]]:
    """Return parcels, given in degrees, as features."""
    return [
        {"type": "Feature", "properties": {"ref": ref}, "geometry": mapping(outline)}
        for ref, outline in placed.items()
    ]


def around(corner: Corner, crs: str) -> dict[str, shapely.Geometry]:
    return {
        ref: to_degrees(translate(outline, *corner), crs) for ref, outline in outlines().items()
    }


def posted(service: Service, ref: str, files: Mapping[str, Path], **more: Any) -> dict[str, Any]:
    answer = service.post_scene({**SCENE, "ref": ref, "tile": ref, **more}, files)
    assert (answer.status_code, answer.json()["state"]) == (200, "done"), answer.text
    told: dict[str, Any] = answer.json()
    return told


def in_scene(service: Service, ref: str) -> dict[str, dict[str, Any]]:
    listed = service.get(f"/v1/scenes/{ref}/parcels", params={"limit": 1000})["parcels"]
    return {one["parcel"]: one for one in listed}


def series(service: Service, parcel: str, **params: Any) -> dict[str, Any]:
    query = {"index": ",".join(INDICES), "stat": ",".join(OPERATIONS), "min_valid": 0, **params}
    found: dict[str, Any] = service.get(f"/v1/parcels/{parcel}/series", params=query)["indices"]
    return found


def beyond(found: Mapping[str, Any], truth: Mapping[str, float | None]) -> dict[str, Any]:
    """Return the statistics of one look that differ, with both figures."""
    apart = {}
    for stat, right in truth.items():
        (ours,) = found[stat]
        if right is None or ours is None:
            is_same = ours is None and right is None
        else:
            is_same = ours == pytest.approx(right, rel=WITHIN[stat], abs=WITHIN[stat])
        # A count of nothing is 0, and no figure is null.
        if not is_same and not (stat == "pixels" and not ours and not right):
            apart[stat] = (ours, right)
    return apart


def check_look(service: Service, ref: str, scene: str, truth: Expected) -> None:
    """Compare the one look at a parcel with the oracle's."""
    found = series(service, ref)
    for index, stats in truth.indices.items():
        assert found[index]["scene"] == [scene], (ref, index)
        assert beyond(found[index], stats) == {}, (ref, index)


@pytest.mark.parametrize(
    ("crs", "corner"),
    [
        ("EPSG:32633", (500_000.0, 5_500_000.0)),
        ("EPSG:32719", (371_240.0, 6_290_430.0)),
        ("EPSG:3035", (4_321_010.0, 2_951_030.0)),
        ("EPSG:2154", (652_390.0, 6_862_270.0)),
    ],
    ids=["UTM north", "UTM south", "equal-area Europe", "conic France"],
)
def test_bands_of_10_20_30_and_60_m_that_do_not_nest_give_the_oracle_s_figures(
    service: Service, tmp_path: Path, crs: str, corner: Corner
) -> None:
    bands, quality = scene_of(20240603, corner)
    placed = around(corner, crs)
    assert service.put_parcels(*features(placed)).json()["created"] == len(placed)
    report = posted(service, "s1", written(tmp_path / "s1", bands, quality, crs))
    assert report["parcels_in_footprint"] == len(placed)
    measured = {i for i, told in report["indices"].items() if told["state"] == "measured"}
    assert set(INDICES) <= measured
    looks = in_scene(service, "s1")
    for ref, outline in placed.items():
        truth = expected(bands, quality, outline, crs)
        shares = {name: looks[ref][name] for name in SHARES}
        assert shares == pytest.approx(truth.shares, abs=2e-6), ref
        check_look(service, ref, "s1", truth)
    # What the comparison is about does occur.
    assert all(0 < looks["all"][name] < 1 for name in SHARES)
    assert looks["tiny"]["pixels"] < 1
    assert looks["where nothing is"]["nodata"] > 0.9
    assert looks["where all is saturated"]["saturation"] > 0.9
    assert looks["over the east edge"]["nodata"] > 0.3


def test_a_parcel_beside_all_cells_has_no_look_and_is_not_in_the_footprint(
    service: Service, tmp_path: Path
) -> None:
    corner, crs = (500_000.0, 5_500_000.0), "EPSG:32633"
    beside = {
        "near": to_degrees(translate(box(0, -20, 15), *corner), crs),
        "in": to_degrees(translate(box(0, 0, 15), *corner), crs),
    }
    service.put_parcels(*features(beside))
    report = posted(service, "s1", written(tmp_path / "s1", *scene_of(7, corner), crs))
    assert report["parcels_in_footprint"] == 1
    assert list(in_scene(service, "s1")) == ["in"]


# 12 degrees east is where the zones 32 and 33 meet.
ZONES = {"EPSG:32632": "33UUQ", "EPSG:32633": "32UQV"}
LON, LAT = 12.0, 49.6


def on_the_border() -> dict[str, shapely.Geometry]:
    """Return parcels on both sides of the meridian where two zones meet, in degrees."""
    x, y = to_crs(shapely.Point(LON, LAT), "EPSG:32632").coords[0]
    return {
        ref: to_degrees(translate(outline, x - 300, y + 300), "EPSG:32632")
        for ref, outline in outlines().items()
        if ref in ("ragged", "hole", "parts", "sliver", "tiny")
    }


def clear_scene(
    seed: int, corner: Corner, *, cloudy_columns: int = 0
) -> tuple[dict[str, Layer], Layer]:
    """Return a scene that is clear but for its first columns of the quality layer."""
    random = np.random.default_rng(seed)
    numbers = (lambda rng, shape: rng.integers(1_100, 6_000, shape).astype(np.uint16),)
    bands = {
        role: layer(random, corner, (grid[0], -grid[0], grid[0]), *numbers)
        for role, grid in GRIDS.items()
    }
    quality = layer(random, corner, (20, -20, 20), lambda _rng, shape: np.full(shape, 4, np.uint8))
    quality.numbers[:, :cloudy_columns] = 9
    return bands, quality


def corner_in(crs: str) -> Corner:
    """Return a corner on 10 m, so that the tile holds the parcels on the border."""
    x, y = to_crs(shapely.Point(LON, LAT), crs).coords[0]
    return round(x / 10) * 10 - 310.0, round(y / 10) * 10 + 310.0


def test_one_pass_in_two_zones_is_one_look_of_the_better_scene_and_the_other_steps_in(
    service: Service, tmp_path: Path
) -> None:
    placed = on_the_border()
    service.put_parcels(*features(placed))
    # In zone 32 the west is under cloud, in zone 33 nothing is.
    scenes = {
        "west": ("EPSG:32632", clear_scene(1, corner_in("EPSG:32632"), cloudy_columns=14)),
        "east": ("EPSG:32633", clear_scene(2, corner_in("EPSG:32633"))),
    }
    truths = {}
    for second, (name, (crs, (bands, quality))) in enumerate(scenes.items()):
        files = written(tmp_path / name, bands, quality, crs)
        posted(service, name, files, acquired_at=f"2024-06-03T10:10:{31 + 14 * second}Z")
        truths[name] = {ref: expected(bands, quality, o, crs) for ref, o in placed.items()}
    for name, truth in truths.items():
        looks = in_scene(service, name)
        assert set(looks) == set(placed)
        for ref in placed:
            shares = {share: looks[ref][share] for share in SHARES}
            assert shares == pytest.approx(truth[ref].shares, abs=2e-6), (name, ref)
    half_seen = [ref for ref in placed if truths["west"][ref].shares["valid_share"] < 0.99]
    assert {"hole", "sliver"} <= set(half_seen)
    for ref in half_seen:
        check_look(service, ref, "east", truths["east"][ref])
    assert service.call("DELETE", "/v1/scenes/east").status_code == 200
    for ref in placed:
        check_look(service, ref, "west", truths["west"][ref])


def test_in_the_overlap_of_two_tiles_a_duplicate_steps_in_with_its_own_figures(
    service: Service, tmp_path: Path
) -> None:
    crs, west = "EPSG:32633", (500_000.0, 5_500_000.0)
    # The second tile begins 205 m further east, off the first one's cells by half a cell.
    tiles = {"west": west, "east": (west[0] + 205, west[1] - 15)}
    middle = {
        "in both": rotate(box(300, 200, 80), 15),
        "over the west tile's edge": box(560, 300, 110, 60),
        "over the east tile's edge": box(160, 300, 110, 60),
    }
    placed = {ref: to_degrees(translate(o, *west), crs) for ref, o in middle.items()}
    service.put_parcels(*features(placed))
    truths = {}
    for second, (name, corner) in enumerate(tiles.items()):
        bands, quality = clear_scene(10 + second, corner)
        if name == "west":
            # A little cloud over the parcel that both see.
            quality.numbers[12:13, 16:18] = 9
        files = written(tmp_path / name, bands, quality, crs)
        posted(service, name, files, acquired_at=f"2024-06-03T10:10:{31 + 14 * second}Z")
        truths[name] = {ref: expected(bands, quality, o, crs) for ref, o in placed.items()}
    better = {
        "in both": "east",
        "over the west tile's edge": "east",
        "over the east tile's edge": "west",
    }
    for ref, name in better.items():
        other = "west" if name == "east" else "east"
        valid = {n: truths[n][ref].shares["valid_share"] for n in tiles}
        assert valid[name] > valid[other] > 0.3, ref
        check_look(service, ref, name, truths[name][ref])
    service.call("DELETE", "/v1/scenes/east")
    for ref in placed:
        check_look(service, ref, "west", truths["west"][ref])
