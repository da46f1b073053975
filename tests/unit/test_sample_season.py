"""The invented co-operative is the same each time, fits itself, and shows its four events."""

import ast
import csv
import importlib
import json
import subprocess
import sys
from collections import Counter, defaultdict
from collections.abc import Iterator
from datetime import UTC, date, datetime, timedelta
from itertools import pairwise
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest
import rasterio
from exactextract import exact_extract
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Transformer
from shapely import transform
from shapely.geometry import box, mapping, shape

HOME = Path(__file__).parents[2] / "sample_tiles"
FINE_ROLES = ("blue", "green", "red", "nir")
COARSE_ROLES = ("rededge071", "swir16", "swir22")
ROLES = (*FINE_ROLES, *COARSE_ROLES)
INDICES = {"ndvi": ("nir", "red"), "ndmi": ("nir", "swir16"), "nbr": ("nir", "swir22"),
           "ndwi": ("green", "nir")}  # fmt: skip
WATCHED = {"ndvi", "evi2", "savi", "ndre", "ndmi", "ndwi", "mndwi", "nbr", "nbr2", "ndsi", "bsi"}
KEPT_CLASSES = (2, 4, 5, 6, 7)

Image = NDArray[np.float64]
Means = dict[str, dict[str, dict[str, float]]]


def run_generator(folder: Path, *options: str) -> Path:
    """Run the generator as a person would, warnings as errors."""
    command = [sys.executable, "-W", "error", str(HOME / "season.py"), str(folder), *options]
    subprocess.run(command, check=True, capture_output=True, timeout=120)
    return folder


@pytest.fixture(scope="module")
def sample(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return run_generator(tmp_path_factory.mktemp("season"))


@pytest.fixture(scope="module")
def truth(sample: Path) -> dict[str, Any]:
    return dict(json.loads((sample / "truth.json").read_text("utf-8")))


@pytest.fixture(scope="module")
def outlines(sample: Path) -> dict[str, Any]:
    """Return the parcels' shapes on the tile's grid."""
    collection = json.loads((sample / "parcels.geojson").read_text("utf-8"))
    to_map = Transformer.from_crs("EPSG:4326", "EPSG:32633", always_xy=True).transform
    return {
        feature["properties"]["ref"]: transform(shape(feature["geometry"]), to_map,
                                                interleaved=False)
        for feature in collection["features"]
    }  # fmt: skip


@pytest.fixture(scope="module")
def crops(sample: Path) -> dict[int, dict[str, str]]:
    """Return the crop of each parcel, by season."""
    rows = json.loads((sample / "seasons.json").read_text("utf-8"))
    by_year: dict[int, dict[str, str]] = defaultdict(dict)
    for row in rows:
        assert set(row) == {"parcel", "crop", "year"}
        by_year[row["year"]][row["parcel"]] = row["crop"]
    return by_year


@pytest.fixture(scope="module")
def history(sample: Path) -> list[dict[str, str]]:
    with (sample / "history.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module", autouse=True)
def rooms_on_path() -> Iterator[None]:
    """Let the generator's rooms be imported, which a script finds beside itself."""
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(str(HOME))
        yield


@pytest.fixture(scope="module")
def land() -> ModuleType:
    return importlib.import_module("season")


@pytest.fixture(scope="module")
def surfaces() -> ModuleType:
    return importlib.import_module("quillmere.surfaces")


def numbers_of(sample: Path, ref: str, role: str) -> Image:
    """Return a file's numbers on 10 m cells; a coarser cell is repeated."""
    with rasterio.open(sample / "scenes" / ref / f"{role}.tif") as file:
        cells = np.asarray(file.read(1), dtype=np.float64)
        step = round(file.res[0] / 10)
    return np.repeat(np.repeat(cells, step, axis=0), step, axis=1)


def figures(image: Image, outlines: dict[str, Any], operation: str = "mean") -> dict[str, float]:
    """Return a coverage-weighted statistic per parcel, by a general zonal library."""
    west, south, east, north = 530_400.0, 6_150_880.0, 532_320.0, 6_152_800.0
    source = NumPyRasterSource(image, west, south, east, north)
    features = [
        {"type": "Feature", "properties": {}, "geometry": mapping(outline)}
        for outline in outlines.values()
    ]
    rows = [row["properties"][operation] for row in exact_extract(source, features, [operation])]
    return {
        ref: np.nan if row is None else float(row) for ref, row in zip(outlines, rows, strict=True)
    }


@pytest.fixture(scope="module")
def means(sample: Path, truth: dict[str, Any], outlines: dict[str, Any]) -> Means:
    """Return per scene and measure the parcels' means over usable cells."""
    found: Means = {}
    for scene in truth["scenes"]:
        usable = np.isin(numbers_of(sample, scene["ref"], "quality"), KEPT_CLASSES)
        bands = {
            role: np.where(usable, numbers_of(sample, scene["ref"], role) / 10_000 - 0.1, np.nan)
            for role in ("blue", "green", "red", "nir", "swir16", "swir22")
        }
        images = dict(bands)
        for index, (first, second) in INDICES.items():
            images[index] = (bands[first] - bands[second]) / (bands[first] + bands[second])
        images["hot"] = bands["blue"] - 0.5 * bands["red"]
        found[scene["ref"]] = {name: figures(image, outlines) for name, image in images.items()}
    return found


def refs_of(truth: dict[str, Any]) -> list[str]:
    return [scene["ref"] for scene in truth["scenes"]]


def events_of(truth: dict[str, Any]) -> dict[str, dict[str, Any]]:
    return {event["cause"]: event for event in truth["events"]}


def against_cohort(
    means: Means, event: dict[str, Any], crops: dict[int, dict[str, str]], *, scene: str
) -> dict[str, float]:
    """Return how a parcel differs from its crop's median in a scene, per measure."""
    cohort = [
        ref for ref, crop in crops[2024].items()
        if crop == event["crop"] and ref != event["parcel"]
    ]  # fmt: skip
    return {
        measure: by_parcel[event["parcel"]] - float(np.nanmedian([by_parcel[r] for r in cohort]))
        for measure, by_parcel in means[scene].items()
    }


def change_through(
    event: dict[str, Any],
    truth: dict[str, Any],
    means: Means,
    crops: dict[int, dict[str, str]],
    *,
    looks_later: int = 0,
) -> dict[str, float]:
    """Return what an event did to its parcel, apart from what its whole crop did."""
    refs = refs_of(truth)
    first = refs.index(event["first_scene"])
    before = against_cohort(means, event, crops, scene=refs[first - 2])
    after = against_cohort(means, event, crops, scene=refs[first + looks_later])
    return {measure: after[measure] - before[measure] for measure in after}


def files_of(folder: Path) -> dict[str, bytes]:
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_the_same_seed_gives_the_same_bytes(sample: Path, tmp_path: Path) -> None:
    assert files_of(run_generator(tmp_path / "again")) == files_of(sample)


def test_another_seed_keeps_the_land_and_changes_weather_noise_clouds_and_events(
    sample: Path, truth: dict[str, Any], tmp_path: Path
) -> None:
    other = run_generator(tmp_path / "other", "--seed", "7")
    for name in ("parcels.geojson", "seasons.json"):
        assert (other / name).read_bytes() == (sample / name).read_bytes()
    assert (other / "history.csv").read_bytes() != (sample / "history.csv").read_bytes()
    other_truth = json.loads((other / "truth.json").read_text("utf-8"))
    assert {event["parcel"] for event in other_truth["events"]} != {
        event["parcel"] for event in truth["events"]
    }
    assert [scene["unseen"] for scene in other_truth["scenes"]] != [
        scene["unseen"] for scene in truth["scenes"]
    ]


def test_the_output_is_small(sample: Path) -> None:
    sizes = {name: len(content) for name, content in files_of(sample).items()}
    assert sum(sizes.values()) < 12_000_000
    scenes = [size for name, size in sizes.items() if name.startswith("scenes")]
    assert sum(scenes) < 6_000_000


def test_nothing_of_the_service_is_imported() -> None:
    scripts = [HOME / "season.py", *(HOME / "quillmere").glob("*.py")]
    assert len(scripts) > 5
    roots = set()
    for script in scripts:
        for node in ast.walk(ast.parse(script.read_text("utf-8"))):
            if isinstance(node, ast.Import):
                roots |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom):
                roots.add((node.module or "").split(".")[0])
    assert "quillmere" in roots
    assert "service" not in roots


def test_parcels_cover_the_awkward_shapes(sample: Path, outlines: dict[str, Any]) -> None:
    collection = json.loads((sample / "parcels.geojson").read_text("utf-8"))
    features = collection["features"]
    assert len(features) == len(outlines) == 42
    assert len({feature["properties"]["holding"] for feature in features}) == 3
    assert len({feature["properties"]["name"] for feature in features}) == 42
    kinds = Counter(feature["geometry"]["type"] for feature in features)
    assert kinds["MultiPolygon"] == 1
    assert any(
        len(feature["geometry"]["coordinates"]) > 1
        for feature in features
        if feature["geometry"]["type"] == "Polygon"
    )
    tile = box(530_400.0, 6_150_880.0, 532_320.0, 6_152_800.0)
    outside = [1 - one.intersection(tile).area / one.area for one in outlines.values()]
    assert sum(share > 0.01 for share in outside) == 1
    assert 0.1 < max(outside) < 0.4
    assert min(one.area for one in outlines.values()) < 1_000
    assert all(one.is_valid for one in outlines.values())
    shapes = list(outlines.values())
    assert not any(
        one.intersection(other).area > 1.0 for at, one in enumerate(shapes) for other in shapes[:at]
    )


def test_every_season_has_five_crops_on_six_parcels_and_crops_rotate(
    crops: dict[int, dict[str, str]],
) -> None:
    assert sorted(crops) == [2021, 2022, 2023, 2024]
    for of_season in crops.values():
        assert len(of_season) == 42
        counts = Counter(of_season.values())
        assert sum(count >= 6 for count in counts.values()) >= 5
        assert min(counts.values()) >= 6
    moved = [ref for ref in crops[2024] if crops[2024][ref] != crops[2023][ref]]
    assert len(moved) > 30
    for ref, crop in crops[2024].items():
        assert crop in {crops[year][ref] for year in (2021, 2022, 2023)}


def test_past_figures_are_fit_for_one_import(history: list[dict[str, str]]) -> None:
    columns = ["parcel", "index", "observed_at", "mean", "sd", "valid_share", "sensor", "source"]
    assert list(history[0]) == columns
    assert 40_000 < len(history) <= 100_000
    assert {row["index"] for row in history} == WATCHED | set(ROLES)
    keys = {(row["parcel"], row["index"], row["observed_at"]) for row in history}
    assert len(keys) == len(history)
    assert all(0.5 <= float(row["valid_share"]) <= 1.0 for row in history)
    assert all(-1.0 <= float(row["mean"]) <= 1.0 and float(row["sd"]) >= 0.0 for row in history)
    assert any(float(row["valid_share"]) < 0.6 for row in history)


def test_each_finished_season_has_its_looks_at_irregular_dates(
    history: list[dict[str, str]],
) -> None:
    times = sorted({datetime.fromisoformat(row["observed_at"]) for row in history})
    assert all(at.tzinfo == UTC for at in times)
    for year in (2021, 2022, 2023):
        start, end = (datetime(y, 10, 1, tzinfo=UTC) for y in (year - 1, year))
        of_season = [at for at in times if start <= at < end]
        assert 25 <= len(of_season) <= 30
        gaps = {(later.date() - sooner.date()).days for sooner, later in pairwise(of_season)}
        assert len(gaps) > 2
    assert times[-1] < datetime(2023, 10, 1, tzinfo=UTC)


def test_means_of_past_indices_fit_the_means_of_past_bands(history: list[dict[str, str]]) -> None:
    """A mean of quotients is near the quotient of means where cells differ little."""
    looks: dict[tuple[str, str], dict[str, tuple[float, float]]] = defaultdict(dict)
    for row in history:
        figure = float(row["mean"]), float(row["sd"])
        looks[row["parcel"], row["observed_at"]][row["index"]] = figure
    checked = 0
    for look in looks.values():
        for index, (first, second) in INDICES.items():
            if look[index][1] < 0.05:
                a, b = look[first][0], look[second][0]
                assert look[index][0] == pytest.approx((a - b) / (a + b), abs=0.02)
                checked += 1
    assert checked > 1_000


def test_scenes_come_every_five_to_ten_days_from_april_to_august(
    sample: Path, truth: dict[str, Any]
) -> None:
    refs = refs_of(truth)
    assert len(refs) >= 8
    assert {path.name for path in (sample / "scenes").iterdir()} == set(refs)
    parts = [
        json.loads((sample / "scenes" / ref / "scene.json").read_text("utf-8")) for ref in refs
    ]
    assert [part["ref"] for part in parts] == refs
    assert [part["acquired_at"] for part in parts] == [
        scene["acquired_at"] for scene in truth["scenes"]
    ]
    days = [datetime.fromisoformat(part["acquired_at"]).date() for part in parts]
    assert date(2024, 4, 1) <= days[0]
    assert days[-1] <= date(2024, 8, 31)
    steps = {later - sooner for sooner, later in pairwise(days)}
    assert steps == {timedelta(days=5), timedelta(days=10)}


def test_every_scene_has_its_bands_on_their_own_grids(sample: Path, truth: dict[str, Any]) -> None:
    for ref in refs_of(truth):
        names = {path.stem for path in (sample / "scenes" / ref).glob("*.tif")}
        assert names == {*ROLES, "quality"}
        for role in names:
            with rasterio.open(sample / "scenes" / ref / f"{role}.tif") as file:
                cell_m = 10.0 if role in FINE_ROLES else 20.0
                dtype = "uint8" if role == "quality" else "uint16"
                assert (file.dtypes, file.nodata, file.res) == ((dtype,), 0, (cell_m, cell_m))
                assert (file.bounds.left, file.bounds.top) == (530_400.0, 6_152_800.0)
                assert (file.height * cell_m, file.width * cell_m) == (1920, 1920)
                assert file.crs.to_epsg() == 32633
                assert file.read(1).min() > 0


def test_surfaces_keep_the_published_order_of_their_bands(surfaces: ModuleType) -> None:
    """Orderings from the means of libraries and samples that the spectra rest on."""
    canopy, soil, char, mud = (
        dict(zip(surfaces.ROLES, spectrum, strict=True))
        for spectrum in (
            surfaces.SURFACES["canopy"], surfaces.SURFACES["soil"],
            surfaces.CHAR, surfaces.MUD_WATER,
        )
    )  # fmt: skip
    assert canopy["nir"] > canopy["swir16"] > canopy["swir22"]
    assert canopy["green"] > canopy["blue"]
    assert soil["blue"] < soil["green"] < soil["red"] < soil["nir"] < soil["swir16"]
    assert char["swir22"] >= char["swir16"] > char["nir"] > char["red"]
    assert mud["green"] > mud["nir"] > mud["swir16"]


def test_wetting_darkens_soil_in_every_band_and_most_where_water_absorbs(
    surfaces: ModuleType,
) -> None:
    dry, damp, soaked = surfaces.soil_spectra(np.array([0.0, 0.5, 1.0]), np.ones(3))
    assert np.all(dry > damp)
    assert np.all(damp > soaked)
    kept = dict(zip(surfaces.ROLES, soaked / dry, strict=True))
    assert kept["swir22"] < kept["swir16"] < kept["red"]


def test_drying_leaves_lower_ndmi_and_hardly_touch_ndvi(surfaces: ModuleType) -> None:
    usual, dry = (
        dict(zip(surfaces.ROLES, spectrum, strict=True))
        for spectrum in surfaces.plant_spectra(np.ones(2), np.array([0.0, 1.0]))
    )

    def index(bands: dict[str, float], first: str, second: str) -> float:
        return (bands[first] - bands[second]) / (bands[first] + bands[second])

    assert index(dry, "nir", "swir16") < index(usual, "nir", "swir16") - 0.15
    assert abs(index(dry, "nir", "red") - index(usual, "nir", "red")) < 0.03


def test_haze_lifts_blue_most(surfaces: ModuleType) -> None:
    assert list(surfaces.HAZE_GLOW) == sorted(surfaces.HAZE_GLOW, reverse=True)


def test_the_truth_names_one_event_of_each_cause_on_four_crops(truth: dict[str, Any]) -> None:
    assert set(events_of(truth)) == {"flood", "burn", "removal", "moisture_stress"}
    assert len(truth["events"]) == 4
    assert len({event["parcel"] for event in truth["events"]}) == 4
    assert len({event["crop"] for event in truth["events"]}) == 4
    for event in truth["events"]:
        first = datetime.strptime(event["first_scene"][-8:], "%Y%m%d").replace(tzinfo=UTC).date()
        assert timedelta(0) <= first - date.fromisoformat(event["started_on"]) < timedelta(days=10)


def test_every_seed_draws_fair_events(land: ModuleType) -> None:
    for seed in range(1, 21):
        days = land.scene_days(2024, seed=seed)
        weather, habits = land.weather_of(2024, seed=seed), land.habits_of(2024, seed=seed)
        events = land.draw_events(days, weather=weather, habits=habits, seed=seed)
        assert {event.kind.cause for event in events} == {
            "flood", "burn", "removal", "moisture_stress",
        }  # fmt: skip
        for event in events:
            at = days[event.first_look]
            stand = land.stand_on(2024, at, weather=weather, habits=habits, seed=seed)
            assert stand.cover[event.at] > 0.8
            assert event.decisive.start >= 0
            assert event.decisive.stop <= len(days)


def test_event_parcels_are_seen_clear_at_the_looks_that_decide(truth: dict[str, Any]) -> None:
    for event in truth["events"]:
        first = refs_of(truth).index(event["first_scene"])
        for scene in truth["scenes"][first - 2 : first + 4]:
            assert event["parcel"] not in scene["valid_share"]
            assert event["parcel"] not in scene["hazy"]


def test_a_flood_raises_ndwi_and_darkens_near_and_short_wave_infrared(
    truth: dict[str, Any], means: Means, crops: dict[int, dict[str, str]]
) -> None:
    change = change_through(events_of(truth)["flood"], truth, means, crops)
    assert change["ndwi"] > 0.3
    assert change["nir"] < -0.10
    assert change["swir16"] < -0.08


def test_a_fire_lowers_nbr_without_brightening_short_wave_infrared(
    truth: dict[str, Any], means: Means, crops: dict[int, dict[str, str]]
) -> None:
    change = change_through(events_of(truth)["burn"], truth, means, crops)
    assert change["nbr"] < -0.27  # at least moderate severity, Key and Benson 2006
    assert change["nir"] < -0.05
    assert change["swir16"] < 0.012


def test_an_early_cut_lowers_ndvi_to_that_of_stubble_and_soil(
    truth: dict[str, Any], means: Means, crops: dict[int, dict[str, str]]
) -> None:
    event = events_of(truth)["removal"]
    assert change_through(event, truth, means, crops)["ndvi"] < -0.3
    assert means[event["first_scene"]]["ndvi"][event["parcel"]] < 0.42


def test_a_crop_drying_out_lowers_ndmi_look_by_look_and_ndvi_little(
    truth: dict[str, Any], means: Means, crops: dict[int, dict[str, str]]
) -> None:
    event = events_of(truth)["moisture_stress"]
    changes = [change_through(event, truth, means, crops, looks_later=later) for later in range(4)]
    ndmi = [change["ndmi"] for change in changes]
    assert ndmi[0] < -0.02
    assert ndmi[3] < -0.10
    assert ndmi[3] < ndmi[0] - 0.03
    assert changes[3]["swir16"] > 0.015
    assert changes[3]["ndvi"] > 0.6 * ndmi[3]


def test_flooded_cells_are_classed_water_and_the_scar_partly_dark_or_unclassified(
    sample: Path, truth: dict[str, Any], outlines: dict[str, Any]
) -> None:
    events = events_of(truth)
    shares = {}
    for cause, classes in (("flood", (6,)), ("burn", (2,)), ("burn", (7,)), ("burn", (2, 7))):
        event = events[cause]
        quality = numbers_of(sample, event["first_scene"], "quality")
        inside = figures(np.isin(quality, classes).astype(np.float64), outlines)
        shares[cause, classes] = inside[event["parcel"]]
    assert shares["flood", (6,)] > 0.6
    assert shares["burn", (2,)] > 0.02
    assert shares["burn", (7,)] > 0.02
    assert shares["burn", (2, 7)] < 0.9


def test_haze_is_missed_by_the_classification_and_told_by_blue_against_red(
    truth: dict[str, Any], means: Means
) -> None:
    hazy_scenes = [scene for scene in truth["scenes"] if scene["hazy"]]
    assert 1 <= len(hazy_scenes) <= 2
    for scene in hazy_scenes:
        hot = means[scene["ref"]]["hot"]
        clear = np.nanmedian([hot[ref] for ref in hot if ref not in scene["hazy"]])
        lifted = [hot[ref] - clear for ref in scene["hazy"] if ref not in scene["unseen"]]
        assert len(lifted) < 30
        assert max(lifted) > 0.02


def test_clouds_hide_some_parcels_in_some_scenes_and_never_most_of_a_crop(
    truth: dict[str, Any], crops: dict[int, dict[str, str]]
) -> None:
    assert sum(bool(scene["unseen"]) for scene in truth["scenes"]) >= 4
    for scene in truth["scenes"]:
        seen = Counter(crop for ref, crop in crops[2024].items() if ref not in scene["unseen"])
        assert min(seen.values()) >= 4


def test_the_valid_shares_of_the_truth_agree_with_a_general_zonal_library(
    sample: Path, truth: dict[str, Any], outlines: dict[str, Any]
) -> None:
    for scene in truth["scenes"][::4]:
        usable = np.isin(numbers_of(sample, scene["ref"], "quality"), KEPT_CLASSES)
        covered = figures(usable.astype(np.float64), outlines, "sum")
        for ref, outline in outlines.items():
            share = scene["valid_share"].get(ref, 1.0)
            # The truth is drawn on cells of 2.5 m, which belong to the side their centre is on.
            slack = 0.01 if outline.area > 1_000 else 0.08
            assert covered[ref] * 100 / outline.area == pytest.approx(share, abs=slack)


def test_figures_for_import_are_averaged_as_a_general_zonal_library_averages_pixels(
    land: ModuleType, outlines: dict[str, Any]
) -> None:
    imaging = importlib.import_module("quillmere.imaging")
    cover = land.cover_of([])
    scene = next(land.scenes_of(land.scene_days(2024, seed=3), [], cover, seed=3))
    images = imaging.measures_of(scene.look)
    for measure in ("ndvi", "ndmi", "nbr", "ndwi", "nir", "swir16"):
        ours, _ = scene.zones.mean_and_sd(images[measure])
        theirs = figures(np.where(scene.look.usable(), images[measure], np.nan), outlines)
        for at, ref in enumerate(outlines):
            if scene.zones.valid_share[at] >= 0.6:
                slack = 0.004 if outlines[ref].area > 1_000 else 0.02
                assert ours[at] == pytest.approx(theirs[ref], abs=slack)


@pytest.mark.parametrize("measure", ["ndvi", "ndmi", "nbr", "ndwi"])
def test_untouched_parcels_agree_with_their_crops_past_figures_where_growth_stands_still(
    measure: str,
    history: list[dict[str, str]],
    truth: dict[str, Any],
    means: Means,
    crops: dict[int, dict[str, str]],
) -> None:
    """Grazed land all summer, cereals and rape in May, beet and maize in late summer."""
    calm = {
        "permanent grassland": (date(2024, 4, 25), date(2024, 8, 31)),
        "winter wheat": (date(2024, 5, 8), date(2024, 5, 28)),
        "winter barley": (date(2024, 5, 2), date(2024, 5, 20)),
        "winter rape": (date(2024, 4, 25), date(2024, 5, 25)),
        "sugar beet": (date(2024, 7, 10), date(2024, 8, 25)),
        "grain maize": (date(2024, 7, 22), date(2024, 8, 10)),
    }
    past: dict[str, list[tuple[date, float]]] = defaultdict(list)
    for row in history:
        if row["index"] == measure and float(row["valid_share"]) >= 0.6:
            on = datetime.fromisoformat(row["observed_at"]).date()
            season = on.year + (on.month >= 10)
            day = on.replace(year=2023 if on.month >= 10 else 2024)
            past[crops[season][row["parcel"]]].append((day, float(row["mean"])))
    touched = {event["parcel"] for event in truth["events"]}
    differences = []
    for scene in truth["scenes"]:
        on = datetime.fromisoformat(scene["acquired_at"]).date()
        for ref, value in means[scene["ref"]][measure].items():
            crop = crops[2024][ref]
            skipped = touched | set(scene["unseen"]) | set(scene["hazy"])
            if ref in skipped or not calm[crop][0] <= on <= calm[crop][1]:
                continue
            usual = [figure for day, figure in past[crop] if abs((day - on).days) <= 8]
            differences.append(value - float(np.median(usual)))
    assert len(differences) > 100
    assert abs(float(np.median(differences))) < 0.03
    assert float(np.quantile(np.abs(differences), 0.95)) < 0.08
