"""Landsat scenes over HTTP: bands by platform, quality and saturation bits; rules and buffers.

The pixels are ours. Stored number = (reflectance + 0.2) / 0.0000275, the inverse of the scale
factors that USGS publishes for Collection 2; QA_PIXEL numbers are of the published tables.
"""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from sqlalchemy import select

from service.settings import Settings
from service.store.tables import Layout, Scene
from tests.serving import SCENE, Service, serving, square, uniform_scene, write_band

OLI = {
    "ref": "l9",
    "sensor": "landsat-c2-l2",
    "platform": "landsat-9",
    "acquired_at": "2024-06-04T10:02:11Z",
    "tile": "190026",
}
TM = {**OLI, "ref": "l5", "platform": "landsat-5", "acquired_at": "1996-06-04T09:20:00Z"}
CANOPY = {"blue": 0.03, "green": 0.06, "red": 0.04, "nir08": 0.42, "swir16": 0.22, "swir22": 0.1}
CLEAR_8_9, SNOW_8_9, CLOUD_8_9, CLEAR_4_7 = 21824, 30048, 22280, 5440
SIDE = 10
"""Cells of 30 m; the parcels below are squares of 4 or 6 of them."""


def stored(reflectance: float) -> int:
    return round((reflectance + 0.2) / 0.0000275)


def layer(folder: Path, part: str, numbers: NDArray[Any]) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    return write_band(folder / f"{part}.tif", numbers, cell_m=30)


def landsat(
    folder: Path,
    reflectances: Mapping[str, float],
    *,
    quality: int | NDArray[Any] = CLEAR_8_9,
    saturation: NDArray[Any] | None = None,
) -> dict[str, Path]:
    """Write a scene of one surface on 30 m cells."""
    files = {
        role: layer(folder, role, np.full((SIDE, SIDE), stored(value), np.uint16))
        for role, value in reflectances.items()
    }
    bits = np.broadcast_to(np.asarray(quality, np.uint16), (SIDE, SIDE))
    files["quality"] = layer(folder, "quality", bits)
    if saturation is not None:
        files["saturation"] = layer(folder, "saturation", saturation)
    return files


def parcel(ref: str, *, col: int, row: int, cells: int) -> dict[str, Any]:
    return square(ref, col=3 * col, row=3 * row, size=3 * cells)


def fault(answer: Any) -> tuple[int, str, str | None, str]:
    told = answer.json()
    (one,) = told["errors"]
    return answer.status_code, told["type"], one.get("pointer"), told["detail"]


@pytest.mark.parametrize("scene", [OLI, TM], ids=["landsat-9", "landsat-5"])
def test_a_landsat_scene_becomes_figures_of_reflectance(
    service: Service, tmp_path: Path, scene: dict[str, Any]
) -> None:
    service.put_parcels(parcel("A", col=2, row=2, cells=4))
    quality = CLEAR_8_9 if scene is OLI else CLEAR_4_7
    answer = service.post_scene(scene, landsat(tmp_path / "s", CANOPY, quality=quality))
    assert answer.status_code == 200, answer.text
    report = answer.json()
    assert (report["state"], report["parcels_measured"]) == ("done", 1)
    assert (report["sensor"], report["platform"]) == ("landsat-c2-l2", scene["platform"])
    # Rouse et al. 1974 and Wilson and Sader 2002, of the reflectances above.
    assert service.series("A")["mean"] == [pytest.approx(0.38 / 0.46, abs=1e-4)]
    assert service.series("A", "ndmi")["mean"] == [pytest.approx(0.20 / 0.64, abs=1e-4)]
    # The one near-infrared band is `nir`, by whichever name it was sent.
    assert service.series("A", "nir")["mean"] == [pytest.approx(0.42, abs=2e-5)]
    assert service.series("A", "nir08")["mean"] == []
    # No Landsat has a red edge: the index is left out with its reason, not made of other bands.
    skipped = report["indices"]["ndre"]
    assert (skipped["state"], skipped["reason"]) == ("skipped", "It needs the band rededge071.")
    parcels = service.get(f"/v1/scenes/{scene['ref']}/parcels")["parcels"]
    assert parcels[0]["pixels"] == pytest.approx(16, abs=1e-3)
    assert parcels[0]["valid_share"] == pytest.approx(1, abs=1e-6)


def test_a_fill_number_is_no_reflectance_and_a_negative_reflectance_is_one(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(parcel("A", col=0, row=0, cells=4))
    files = landsat(tmp_path / "s", CANOPY)
    red = np.full((SIDE, SIDE), stored(-0.01), np.uint16)
    red[:2] = 0
    files["red"] = layer(tmp_path / "s", "red", red)
    service.post_scene(OLI, files)
    assert service.series("A", "red")["mean"] == [pytest.approx(-0.01, abs=2e-5)]
    ndvi = service.series("A", stat="mean,pixels,valid_share")
    assert ndvi["pixels"] == [pytest.approx(8, abs=1e-3)]
    assert ndvi["mean"] == [pytest.approx(0.43 / 0.41, abs=2e-4)]
    assert ndvi["valid_share"] == [pytest.approx(1, abs=1e-6)]
    report = service.get("/v1/scenes/l9")
    assert report["indices"]["ndvi"]["parcels_out_of_range"] == 1


def test_a_stack_with_both_layers_of_bits_is_read_by_its_list_of_roles(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(parcel("A", col=2, row=2, cells=4))
    saturated = np.zeros((SIDE, SIDE))
    saturated[2:4] = 1 << 3  # band 4, red
    bands = [
        np.full((SIDE, SIDE), stored(0.04)),
        np.full((SIDE, SIDE), stored(0.42)),
        np.full((SIDE, SIDE), CLEAR_8_9),
        saturated,
    ]
    path = layer(tmp_path, "stack", np.stack(bands).astype(np.uint16))
    scene = {**OLI, "stack": ["red", "nir08", "quality", "saturation"]}
    answer = service.post_scene(scene, {"stack": path})
    assert answer.json()["state"] == "done", answer.text
    series = service.series("A", stat="mean,pixels")
    assert series["mean"] == [pytest.approx(0.38 / 0.46, abs=1e-4)]
    assert series["pixels"] == [pytest.approx(8, abs=1e-3)]


@pytest.mark.parametrize(
    ("scene", "red_bit", "nir_bit"), [(OLI, 3, 4), (TM, 2, 3)], ids=["landsat-9", "landsat-5"]
)
def test_a_band_is_left_out_where_its_saturation_bit_is_set(
    service: Service, tmp_path: Path, scene: dict[str, Any], red_bit: int, nir_bit: int
) -> None:
    # Which bit is whose: from memory of LSDS-1618 and LSDS-1619, bit n - 1 for band n.
    service.put_parcels(
        parcel("red", col=0, row=0, cells=4),
        parcel("all", col=5, row=5, cells=4),
        parcel("none", col=5, row=0, cells=4),
    )
    bits = np.zeros((SIDE, SIDE), np.uint16)
    bits[0, :4] = 1 << red_bit
    bits[5, 5:9] = 0b111_1111
    bits[0, 5:9] = 0b1010_0000_0000  # bits above the bands: nothing of theirs is measured
    quality = CLEAR_8_9 if scene is OLI else CLEAR_4_7
    files = landsat(tmp_path / "s", CANOPY, quality=quality, saturation=bits)
    # Where red is saturated it is far too dark or bright: any use of it would show.
    red = np.full((SIDE, SIDE), stored(0.04), np.uint16)
    red[0, :4] = 65_000
    files["red"] = layer(tmp_path / "s", "red", red)
    answer = service.post_scene(scene, files)
    assert answer.json()["state"] == "done", answer.text

    def seen(ref: str) -> tuple[list[Any], list[Any]]:
        series = service.series(ref, stat="mean,pixels")
        return series["mean"], series["pixels"]

    ndvi = [pytest.approx(0.38 / 0.46, abs=1e-4)]
    assert seen("red") == (ndvi, [pytest.approx(12, abs=1e-3)])
    assert seen("all") == (ndvi, [pytest.approx(12, abs=1e-3)])
    assert seen("none") == (ndvi, [pytest.approx(16, abs=1e-3)])
    assert service.series("red", "red")["mean"] == [pytest.approx(0.04, abs=2e-5)]
    assert nir_bit == red_bit + 1
    parcels = {
        entry["parcel"]: entry
        for entry in service.get(f"/v1/scenes/{scene['ref']}/parcels")["parcels"]
    }
    # A cell counts as saturated where no band is left; where one is, only that band is gone.
    assert parcels["red"]["saturation"] == 0
    assert parcels["red"]["valid_share"] == pytest.approx(1, abs=1e-6)
    assert parcels["all"]["saturation"] == pytest.approx(0.25, abs=1e-6)
    assert parcels["all"]["valid_share"] == pytest.approx(0.75, abs=1e-6)


def test_what_only_the_pixels_of_the_bits_show_fails_the_scene(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(parcel("A", col=0, row=0, cells=4))
    classes = np.full((SIDE, SIDE), 5, np.uint16)
    cases = {
        "/quality": landsat(tmp_path / "classes", CANOPY, quality=classes),
        "/saturation": landsat(
            tmp_path / "mixed up",
            CANOPY,
            saturation=np.full((SIDE, SIDE), CLEAR_8_9, np.uint16),
        ),
    }
    for number, (pointer, files) in enumerate(cases.items()):
        scene = {**OLI, "ref": f"s{number}", "acquired_at": f"2024-06-0{number + 1}T10:00:00Z"}
        told = service.post_scene(scene, files).json()
        assert told["state"] == "failed"
        assert told["failure"]["type"] == "/problems/wrong-quality-layer"
        assert told["failure"]["errors"][0]["pointer"] == pointer
    assert service.series("A", min_valid=0)["mean"] == []


def test_a_temperature_is_in_kelvin_also_beside_one_scaling_for_the_reflectances(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(parcel("A", col=0, row=0, cells=4))
    files = landsat(tmp_path / "s", CANOPY)
    # 44177 is 299.99787 K: USGS scale factors of Collection 2 surface temperature.
    heat = np.full((SIDE, SIDE), 44_177, np.uint16)
    files["lwir11"] = layer(tmp_path / "s", "lwir11", heat)
    scene = {**OLI, "scaling": {"scale": 0.0000275, "offset": -0.2}}
    assert service.post_scene(scene, files).json()["state"] == "done"
    assert service.series("A", "lwir11")["mean"] == [pytest.approx(299.99787, abs=1e-4)]
    assert service.series("A", "red")["mean"] == [pytest.approx(0.04, abs=2e-5)]


def test_what_a_landsat_scene_must_not_be_is_refused_with_a_pointer(
    service: Service, tmp_path: Path
) -> None:
    good = landsat(tmp_path / "good", CANOPY)
    real = np.zeros((SIDE, SIDE), np.float32)
    narrow = np.zeros((SIDE, SIDE), np.uint8)
    edge = layer(tmp_path, "edge", np.full((SIDE, SIDE), 9_000, np.uint16))
    without = {part: path for part, path in good.items() if part != "quality"}
    platforms = "landsat-4, landsat-5, landsat-7, landsat-8, landsat-9"
    nowhere = {name: value for name, value in OLI.items() if name != "platform"}
    kind = "/problems/invalid-input"
    layered = "/problems/wrong-quality-layer"
    cases: list[tuple[dict[str, Any], dict[str, Path], str, str, str]] = [
        (nowhere, good, kind, "/scene/platform", platforms),
        ({**OLI, "platform": "landsat-6"}, good, kind, "/scene/platform", platforms),
        ({**OLI, "platform": "LANDSAT_9"}, good, kind, "/scene/platform", platforms),
        (OLI, {**good, "rededge071": edge}, kind, "/rededge071", "has no band rededge071"),
        (TM, {**good, "coastal": edge}, kind, "/coastal", "has no band coastal"),
        (OLI, {**good, "nir": edge}, kind, "/nir08", "has no band nir08"),
        (OLI, without, layered, "/quality", "QA_PIXEL"),
        (OLI, {**good, "quality": layer(tmp_path, "n", narrow)}, layered, "/quality", "uint16"),
        (
            OLI,
            {**good, "saturation": layer(tmp_path, "r", real)},
            layered,
            "/saturation",
            "QA_RADSAT",
        ),
        (
            {**SCENE, "ref": "s2"},
            {**uniform_scene(tmp_path / "s2", {"red": 0.1, "nir": 0.3}), "saturation": edge},
            layered,
            "/saturation",
            "Leave it out",
        ),
        ({**OLI, "saturation": "none"}, good, kind, "/scene/saturation", "not"),
    ]
    for scene, files, type_, pointer, words in cases:
        status, told, where, detail = fault(service.post_scene(scene, files, wait=0))
        assert (status, told, where) == (422, type_, pointer), detail
        assert words in detail
        assert "LANDSAT_9" not in detail
    with service.sessions.reading() as session:
        assert session.scalars(select(Scene)).all() == []


def test_the_profiles_tell_bands_by_platform_and_their_rules(service: Service) -> None:
    sensors = {entry["id"]: entry for entry in service.get("/v1/sensors")["sensors"]}
    landsat_ = sensors["landsat-c2-l2"]
    assert landsat_["needs_platform"]
    assert (landsat_["quality_layer"], landsat_["saturation_layer"]) == ("qa_pixel", "qa_radsat")
    assert landsat_["quality_rule"] == "clear"
    by_role = {
        platform: {band["role"]: band for band in bands}
        for platform, bands in landsat_["platforms"].items()
    }
    assert by_role["landsat-8"]["nir"]["name"] == "SR_B5"
    assert by_role["landsat-5"]["nir"]["name"] == "SR_B4"
    assert by_role["landsat-8"]["red"]["valid_numbers"] == [7273, 43636]
    assert by_role["landsat-7"]["lwir11"]["unit"] == "kelvin"
    for sensor in ("landsat-c2-l2", "sentinel-2-l2a"):
        assert {"clear", "strict", "land", "water", "snow"} <= {*sensors[sensor]["quality_rules"]}
    centres = {
        platform: next(band["centre_um"] for band in bands if band["role"] == "swir22")
        for platform, bands in sensors["sentinel-2-l2a"]["platforms"].items()
    }
    assert centres["sentinel-2a"] > centres["sentinel-2c"] > centres["sentinel-2b"]
    assert service.get("/v1/indices/ndsi")["quality_rule"] == "surface"
    assert service.get("/v1/indices/ndwi")["quality_rule"] is None


SNOW = {"blue": 0.85, "green": 0.85, "red": 0.8, "nir": 0.7, "swir16": 0.1}
# (0.85 - 0.1) / (0.85 + 0.1); Hall et al. 1995.
SNOW_NDSI = 0.75 / 0.95


Posted = tuple[dict[str, Any], dict[str, Path]]


def winter(sensor: str, folder: Path) -> tuple[Posted, Posted]:
    """Return a scene of snow, called so by its quality layer, and a later one of a field."""
    field = {"green": 0.06, "red": 0.04, "nir": 0.42, "swir16": 0.22}
    if sensor == "landsat-9":
        scene, later = OLI, "2024-06-12T10:02:11Z"
        white = landsat(folder / "white", SNOW, quality=SNOW_8_9)
        green = landsat(folder / "green", field)
    else:
        scene, later = SCENE, "2024-06-13T10:10:31Z"
        white = uniform_scene(folder / "white", SNOW, scl=11)
        green = uniform_scene(folder / "green", field)
    return (scene, white), ({**scene, "ref": "later", "acquired_at": later}, green)


two_sensors = pytest.mark.parametrize("sensor", ["landsat-9", "sentinel-2b"])


@two_sensors
def test_under_snow_the_index_of_snow_has_a_look_and_the_others_have_none(
    service: Service, tmp_path: Path, sensor: str
) -> None:
    service.put_parcels(parcel("A", col=0, row=0, cells=4), parcel("B", col=5, row=5, cells=2))
    snow, later = winter(sensor, tmp_path)
    report = service.post_scene(*snow).json()
    assert (report["state"], report["parcels_unseen"]) == ("done", {"snow": 2})
    assert service.series("A")["mean"] == []
    assert service.series("A", "mndwi")["mean"] == []
    unseen = service.series("A", min_valid=0)
    assert (unseen["mean"], unseen["valid_share"]) == ([None], [0.0])
    ndsi = service.series("A", "ndsi", stat="mean,valid_share,pixels")
    assert ndsi["mean"] == [pytest.approx(SNOW_NDSI, abs=2e-4)]
    assert ndsi["valid_share"] == [pytest.approx(1, abs=1e-6)]
    cells = 16 if sensor == "landsat-9" else 144
    assert ndsi["pixels"] == [pytest.approx(cells, abs=1e-2)]

    # When the snow has gone it says so: (0.06 - 0.22) / (0.06 + 0.22).
    service.post_scene(*later)
    gone = pytest.approx(-0.16 / 0.28, abs=2e-4)
    assert service.series("A", "ndsi")["mean"] == [pytest.approx(SNOW_NDSI, abs=2e-4), gone]
    assert service.series("A", "mndwi")["mean"] == [gone]


@two_sensors
def test_the_overview_and_the_recipe_know_which_rule_a_measure_was_read_by(
    service: Service, tmp_path: Path, sensor: str
) -> None:
    service.put_parcels(parcel("A", col=0, row=0, cells=4))
    snow, _ = winter(sensor, tmp_path)
    service.post_scene(*snow)
    for more in ({}, {"at": "2024-06-30"}):
        (newest,) = service.get("/v1/overview", params={"index": "ndsi", **more})["parcels"]
        assert newest["value"] == pytest.approx(SNOW_NDSI, abs=2e-4)
        assert newest["valid_share"] == pytest.approx(1, abs=1e-6)
        (newest,) = service.get("/v1/overview", params={"index": "mndwi", **more})["parcels"]
        assert (newest["scene"], newest["value"]) == (None, None)
    with service.sessions.reading() as session:
        (recipe,) = (layout.recipe for layout in session.scalars(select(Layout)))
    assert (recipe["rule"], recipe["rules"]) == ("clear", {"ndsi": "surface"})


@pytest.fixture
def buffered(settings: Settings) -> Settings:
    return settings.model_copy(update={"cloud_buffer_cells": 1})


def test_a_cloud_buffer_takes_the_cells_around_clouds_and_counts_them_as_cloud(
    buffered: Settings, tmp_path: Path
) -> None:
    quality = np.full((SIDE, SIDE), CLEAR_8_9, np.uint16)
    quality[3, 0] = CLOUD_8_9
    # The cloud lies beside the parcel A, of columns 1 to 4 and rows 2 to 5: it takes rows 2, 3
    # and 4 of the first column. B is far away.
    with serving(buffered) as service:
        service.put_parcels(parcel("A", col=1, row=2, cells=4), parcel("B", col=6, row=6, cells=4))
        answer = service.post_scene(OLI, landsat(tmp_path / "s", CANOPY, quality=quality))
        assert answer.json()["state"] == "done", answer.text
        parcels = {
            entry["parcel"]: entry for entry in service.get("/v1/scenes/l9/parcels")["parcels"]
        }
        assert parcels["A"]["cloud"] == pytest.approx(3 / 16, abs=1e-6)
        assert parcels["A"]["valid_share"] == pytest.approx(13 / 16, abs=1e-6)
        assert (parcels["B"]["cloud"], parcels["B"]["valid_share"]) == (0, pytest.approx(1))
        # Sentinel-2's classes have 20 m cells, two of the bands' own each way.
        files = uniform_scene(tmp_path / "s2", {"red": 0.04, "nir": 0.42})
        classes = np.full((20, 20), 4, np.uint8)
        classes[0, 0] = 9
        write_band(files["quality"], classes, cell_m=20)
        service.put_parcels(square("C", col=0, row=0, size=10))
        assert service.post_scene(SCENE, files).json()["state"] == "done"
        listed = service.get("/v1/scenes/s1/parcels")["parcels"]
        (seen,) = [entry for entry in listed if entry["parcel"] == "C"]
        assert seen["cloud"] == pytest.approx(16 / 100, abs=1e-6)
        with service.sessions.reading() as session:
            recipes = [layout.recipe for layout in session.scalars(select(Layout))]
        assert {recipe["cloud_buffer_cells"] for recipe in recipes} == {1}
