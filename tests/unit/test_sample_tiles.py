"""The invented scene is the same each time, small, and physically what its truth says."""

import json
import subprocess
import sys
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import rasterio
from exactextract import exact_extract
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray
from pyproj import Geod, Transformer
from shapely import transform
from shapely.geometry import Polygon, mapping, shape

GENERATOR = Path(__file__).parents[2] / "sample_tiles" / "generate.py"
FINE_ROLES = ("blue", "green", "red", "nir")
COARSE_ROLES = ("rededge071", "swir16", "swir22")


def run_generator(folder: Path, *options: str) -> Path:
    """Run the generator as a person would, warnings as errors."""
    command = [sys.executable, "-W", "error", str(GENERATOR), str(folder), *options]
    subprocess.run(command, check=True, capture_output=True, timeout=60)
    return folder


@pytest.fixture(scope="module")
def sample(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return run_generator(tmp_path_factory.mktemp("sample"))


@pytest.fixture(scope="module")
def truth(sample: Path) -> dict[str, dict[str, Any]]:
    return dict(json.loads((sample / "truth.json").read_text("utf-8"))["parcels"])


@pytest.fixture(scope="module")
def features(sample: Path) -> dict[str, dict[str, Any]]:
    collection = json.loads((sample / "parcels.geojson").read_text("utf-8"))
    return {feature["properties"]["ref"]: feature for feature in collection["features"]}


def numbers_of(sample: Path, role: str) -> NDArray[np.float64]:
    """Return a band on 10 m cells; a coarser cell is repeated."""
    with rasterio.open(sample / f"{role}.tif") as file:
        cells = np.asarray(file.read(1), dtype=np.float64)
        step = round(file.res[0] / 10)
    return np.repeat(np.repeat(cells, step, axis=0), step, axis=1)


def reflectance_of(sample: Path, role: str) -> NDArray[np.float64]:
    return numbers_of(sample, role) / 10_000 - 0.1


def usable_cells(sample: Path) -> NDArray[np.bool_]:
    return np.isin(numbers_of(sample, "quality"), (2, 4, 5, 6, 7))


def zonal_figures(
    sample: Path,
    features: dict[str, dict[str, Any]],
    image: NDArray[np.float64],
    *,
    operation: str,
) -> dict[str, float]:
    """Return a coverage-weighted statistic per parcel, by a general zonal library."""
    with rasterio.open(sample / "red.tif") as file:
        west, south, east, north = file.bounds
    source = NumPyRasterSource(image, west, south, east, north)
    outlines = [
        {"type": "Feature", "properties": {}, "geometry": mapping(on_map(feature))}
        for feature in features.values()
    ]
    rows = exact_extract(source, outlines, [operation])
    figures = [row["properties"][operation] for row in rows]
    return {
        ref: np.nan if figure is None else float(figure)
        for ref, figure in zip(features, figures, strict=True)
    }


def parcel_means(
    sample: Path, features: dict[str, dict[str, Any]], image: NDArray[np.float64]
) -> dict[str, float]:
    """Return means over the usable cells."""
    masked = np.where(usable_cells(sample), image, np.nan)
    return zonal_figures(sample, features, masked, operation="mean")


def on_map(feature: dict[str, Any]) -> Polygon:
    """Return a feature's outline on the tile's grid."""
    to_map = Transformer.from_crs("EPSG:4326", "EPSG:32633", always_xy=True).transform
    return transform(shape(feature["geometry"]), to_map, interleaved=False)


@pytest.fixture(scope="module")
def ndvi(sample: Path, features: dict[str, dict[str, Any]]) -> dict[str, float]:
    red, nir = reflectance_of(sample, "red"), reflectance_of(sample, "nir")
    return parcel_means(sample, features, (nir - red) / (nir + red))


def test_the_same_seed_gives_the_same_bytes(sample: Path, tmp_path: Path) -> None:
    again = run_generator(tmp_path / "again")
    names = sorted(path.name for path in sample.iterdir())
    assert names == sorted(path.name for path in again.iterdir())
    differing = [
        name for name in names if (sample / name).read_bytes() != (again / name).read_bytes()
    ]
    assert differing == []


def test_another_seed_gives_other_pixels_of_the_same_land(sample: Path, tmp_path: Path) -> None:
    other = run_generator(tmp_path / "other", "--seed", "7")
    assert not np.array_equal(numbers_of(sample, "red"), numbers_of(other, "red"))
    assert (sample / "parcels.geojson").read_bytes() == (other / "parcels.geojson").read_bytes()
    assert (sample / "quality.tif").stat().st_size < 10_000


def test_all_files_together_stay_under_a_megabyte(sample: Path) -> None:
    assert sum(path.stat().st_size for path in sample.iterdir()) < 1_000_000


def test_nothing_of_the_service_is_imported() -> None:
    assert "service" not in {
        line.split()[1].split(".")[0]
        for line in GENERATOR.read_text("utf-8").splitlines()
        if line.startswith(("import ", "from "))
    }


@pytest.mark.parametrize("role", [*FINE_ROLES, *COARSE_ROLES])
def test_bands_are_unsigned_16_bit_numbers_on_their_own_grid(sample: Path, role: str) -> None:
    with rasterio.open(sample / f"{role}.tif") as file:
        cell_m = 10.0 if role in FINE_ROLES else 20.0
        assert (file.dtypes, file.nodata, file.res) == (("uint16",), 0, (cell_m, cell_m))
        assert file.crs.to_epsg() == 32633
        assert (file.height * cell_m, file.width * cell_m) == (1920, 1920)
        assert file.read(1).min() > 0


def test_the_quality_layer_holds_only_classes_of_the_scene_classification(sample: Path) -> None:
    assert set(np.unique(numbers_of(sample, "quality"))) == {3, 4, 5, 6, 8, 9}


def test_surfaces_keep_the_published_order_of_their_bands(
    sample: Path, features: dict[str, dict[str, Any]]
) -> None:
    """Orderings of canopy, soil and water spectra from the published means the scene rests on."""
    bands = {
        role: parcel_means(sample, features, reflectance_of(sample, role))
        for role in (*FINE_ROLES, *COARSE_ROLES)
    }
    canopy, soil, water = (
        {role: bands[role][ref] for role in bands} for ref in ("QM-01", "QM-07", "QM-09")
    )
    assert canopy["nir"] > canopy["swir16"] > canopy["swir22"]
    assert canopy["green"] > canopy["blue"]
    assert canopy["green"] > canopy["red"]
    assert soil["blue"] < soil["green"] < soil["red"] < soil["nir"] < soil["swir16"]
    assert water["green"] > water["red"]
    assert water["nir"] < 0.06
    assert water["green"] > water["nir"]


def test_ndvi_falls_from_dense_canopy_over_bare_soil_to_water(
    ndvi: dict[str, float], truth: dict[str, dict[str, Any]]
) -> None:
    by_cover: dict[str, list[float]] = {}
    for ref, facts in truth.items():
        if facts["look"] and not facts["small"]:
            by_cover.setdefault(facts["cover"], []).append(ndvi[ref])
    order = ("dense", "closing", "open", "stubble", "bare", "water")
    for higher, lower in pairwise(order):
        assert min(by_cover[higher]) > max(by_cover[lower])


def test_ndvi_of_every_owed_look_lies_in_the_range_of_the_truth(
    ndvi: dict[str, float], truth: dict[str, dict[str, Any]]
) -> None:
    outside = {
        ref: (ndvi[ref], facts["ndvi"])
        for ref, facts in truth.items()
        if facts["look"] and not facts["ndvi"][0] <= ndvi[ref] <= facts["ndvi"][1]
    }
    assert outside == {}


def test_the_valid_share_of_the_truth_agrees_with_a_general_zonal_library(
    sample: Path, features: dict[str, dict[str, Any]], truth: dict[str, dict[str, Any]]
) -> None:
    usable = usable_cells(sample).astype(np.float64)
    covered = zonal_figures(sample, features, usable, operation="sum")
    for ref, feature in features.items():
        share = covered[ref] * 100 / on_map(feature).area
        # The truth is drawn on cells of 2.5 m, which belong to the side their centre is on.
        assert share == pytest.approx(truth[ref]["valid_share"], abs=0.01)


def test_the_scene_shows_each_case_that_the_demo_explains(
    features: dict[str, dict[str, Any]], truth: dict[str, dict[str, Any]]
) -> None:
    losses = {name: {ref for ref, facts in truth.items() if facts["lost"][name] > 0.05}
              for name in ("cloud", "shadow", "nodata")}  # fmt: skip
    assert all(losses.values())
    assert {facts["look"] for facts in truth.values()} == {True, False}
    assert any(len(feature["geometry"]["coordinates"]) > 1 for feature in features.values())
    geod = Geod(ellps="WGS84")
    areas_m2 = {ref: geod.geometry_area_perimeter(shape(feature["geometry"]))[0]
                for ref, feature in features.items()}  # fmt: skip
    assert min(areas_m2.values()) < 400
    assert all(area > 0 for area in areas_m2.values())
