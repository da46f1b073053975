"""Sensors of one's own over HTTP: profiles, their versions, and scenes that are read by them.

The sensors are invented. Shares and reasons are counted by hand from the layers below.
"""

import copy
import json
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
from numpy.typing import NDArray
from sqlalchemy import select

from service.store.tables import Layout, Scene, Write
from tests.serving import SCENE, Service, square, uniform_scene, write_band

Document = dict[str, Any]
SURFACE = {"blue": 0.04, "green": 0.08, "red": 0.05, "rededge071": 0.15, "nir": 0.45}
NDVI = 0.40 / 0.50
NDRE = 0.30 / 0.60
STORED = 32_768
"""Number of a reflectance of 1."""
FLIGHT = {"ref": "f1", "sensor": "crane-5", "acquired_at": "2024-06-04T09:30:00Z"}


def band(role: str, centre_um: float, width_um: float, **more: Any) -> Document:
    return {"role": role, "centre_um": centre_um, "width_um": width_um, **more}


CLASSES = [
    {"value": 0, "name": "ground"},
    {"value": 1, "name": "cloud", "loss": "cloud"},
    {"value": 2, "name": "shade", "loss": "shadow"},
    {"value": 3, "name": "snow", "loss": "snow"},
    {"value": 4, "name": "glare", "loss": "saturation"},
    {"value": 5, "name": "pond", "water": True},
]
CLASS_LAYER = {
    "name": "crew_mask",
    "nodata": 99,
    "classes": CLASSES,
    "rules": {"clear": {"keep": [0, 5]}, "dry": {"keep": [0]}},
}
BIT_LAYER = {
    "name": "flags",
    "dtype": "uint16",
    "nodata": 65535,
    "bits": [
        {"name": "shade", "bit": 1, "loss": "shadow"},
        {"name": "pond", "bit": 2, "water": True},
        {"name": "haze", "bit": 4, "width": 2, "loss": "cloud"},
        {"name": "lost", "bit": 9, "loss": "nodata"},
    ],
    "rules": {
        "clear": {"drop": [{"field": "haze", "at_least": 2}, {"field": "shade"}]},
        "dry": {"drop": [{"field": "haze"}, {"field": "shade"}, {"field": "pond"}]},
        "pond": {"need": ["pond"]},
    },
}
CRANE: Document = {
    "title": "Five-band camera of the crane",
    "bands": [
        band("blue", 0.475, 0.032, name="B1", gsd_m=0.1),
        band("green", 0.56, 0.027),
        band("red", 0.668, 0.014),
        band("rededge071", 0.717, 0.012),
        band("nir", 0.842, 0.057),
    ],
    "scaling": {"scale": 1 / STORED, "offset": 0},
    "nodata": 0,
    "saturated": 65535,
    "quality": CLASS_LAYER,
}


def with_quality(quality: Any, **more: Any) -> Document:
    return {**CRANE, "quality": quality, **more}


def put(service: Service, document: Document, sensor: str = "crane-5") -> httpx.Response:
    return service.call("PUT", f"/v1/sensors/{sensor}", json=document)


def flight(
    folder: Path, quality: NDArray[Any] | None = None, *, layer_cell_m: float = 1.0
) -> dict[str, Path]:
    """Write 20 m by 20 m of one surface in cells of 0.1 m, and a layer in coarser ones."""
    folder.mkdir(parents=True, exist_ok=True)
    files = {
        role: write_band(
            folder / f"{role}.tif",
            np.full((200, 200), round(value * STORED), np.uint16),
            cell_m=0.1,
        )
        for role, value in SURFACE.items()
    }
    if quality is not None:
        files["quality"] = write_band(folder / "quality.tif", quality, cell_m=layer_cell_m)
    return files


def rows_of(*numbers: int, dtype: Any = np.uint8) -> NDArray[Any]:
    """Return a layer of 20 by 20 cells of 1 m: each row of the upper ten has one number."""
    layer = np.zeros((20, 20), dtype)
    layer[:10] = np.array(numbers, dtype)[:, np.newaxis]
    return layer


def in_scene(service: Service, scene: str = "f1", parcel: str = "A") -> Document:
    listed = service.get(f"/v1/scenes/{scene}/parcels")["parcels"]
    (found,) = [one for one in listed if one["parcel"] == parcel]
    return dict(found)


def shares(found: Document) -> dict[str, float]:
    names = ("valid_share", "cloud", "shadow", "snow", "nodata", "saturation", "water")
    return {name: round(found[name], 6) for name in names}


def posted(service: Service, scene: Document, files: dict[str, Path]) -> Document:
    answer = service.post_scene(scene, files)
    assert (answer.status_code, answer.json()["state"]) == (200, "done"), answer.text
    return dict(answer.json())


def recipes(service: Service, scene: str) -> list[Document]:
    """Return the recipes of a scene's current writes, oldest first."""
    query = (
        select(Layout.recipe)
        .join(Write, Write.layout_id == Layout.id)
        .join(Scene, Scene.id == Write.scene_id)
        .where(Scene.ref == scene, Write.closed_at.is_(None))
        .order_by(Write.id)
    )
    with service.sessions.reading() as session:
        return [dict(recipe) for recipe in session.scalars(query)]


def refused(answer: httpx.Response, status: int, code: str) -> Document:
    told = answer.json()
    assert (answer.status_code, told["type"]) == (status, f"/problems/{code}"), answer.text
    return dict(told)


def test_a_profile_is_put_listed_and_answered_as_it_was_sent(service: Service) -> None:
    made = put(service, CRANE)
    assert made.status_code == 201
    assert made.headers["Location"] == "/v1/sensors/crane-5"
    told = service.get("/v1/sensors/crane-5")
    assert told == made.json()
    assert (told["built_in"], told["version"]) == (False, 1)
    assert told["bands"][0] == {
        "role": "blue",
        "name": "B1",
        "centre_um": 0.475,
        "width_um": 0.032,
        "gsd_m": 0.1,
        "unit": "reflectance",
        "scaling": {"scale": 1 / STORED, "offset": 0.0},
        "valid_numbers": None,
        "saturation_bit": None,
    }
    assert told["bands"][1]["name"] == "green"
    assert (told["quality_layer"], told["quality_rule"]) == ("crew_mask", "clear")
    assert told["quality_rules"] == ["clear", "dry"]
    # What was sent comes back, with what it left open spelled out; sent again it is the same.
    again = put(service, told["profile"])
    assert (again.status_code, again.json()) == (200, told)
    listed = service.get("/v1/sensors")["sensors"]
    assert [(one["id"], one["built_in"]) for one in listed] == [
        ("generic", True),
        ("landsat-c2-l2", True),
        ("sentinel-2-l2a", True),
        ("crane-5", False),
    ]
    assert listed[-1] == told


def test_the_list_of_sensors_is_paged(service: Service) -> None:
    for number in range(3):
        put(service, CRANE, f"kite-{number}")
    seen: list[str] = []
    path: str | None = "/v1/sensors?limit=2"
    while path:
        answer = service.call("GET", path)
        page = answer.json()["sensors"]
        assert len(page) == 2
        seen += [one["id"] for one in page]
        path = answer.links["next"]["url"] if "next" in answer.links else None
    built_in = ["generic", "landsat-c2-l2", "sentinel-2-l2a"]
    assert seen == [*built_in, "kite-0", "kite-1", "kite-2"]


def test_the_same_content_is_no_new_version_and_old_ones_stay_to_be_read(service: Service) -> None:
    first = put(service, CRANE).json()
    same = copy.deepcopy(CRANE)
    same["bands"][1]["name"] = None
    same["quality"] = dict(reversed(CLASS_LAYER.items()))
    assert put(service, same).json() == first
    changed = put(service, {**CRANE, "nodata": 1})
    assert (changed.status_code, changed.json()["version"]) == (200, 2)
    assert service.get("/v1/sensors/crane-5")["nodata"] == 1
    assert service.get("/v1/sensors/crane-5?version=1") == first
    # What was is a version too, when it is sent after something else.
    assert put(service, CRANE).json()["version"] == 3


def test_who_may_put_a_sensor_and_under_which_id(service: Service) -> None:
    for key in (service.key("read", "ingest", "triage", "admin"), service.key("read")):
        answer = service.call("PUT", "/v1/sensors/crane-5", json=CRANE, key=key)
        refused(answer, 403, "scope-missing")
    limited = service.key("read", "manage", holdings=["h"])
    answer = service.call("PUT", "/v1/sensors/crane-5", json=CRANE, key=limited)
    refused(answer, 403, "key-limited")
    for built_in in ("generic", "sentinel-2-l2a", "landsat-c2-l2"):
        refused(put(service, CRANE, built_in), 409, "sensor-built-in")
        assert service.get(f"/v1/sensors/{built_in}")["built_in"]
    for bad in ("Crane", "5-crane", "c", "crane%205", "x" * 61, "-crane", "%3Dcrane"):
        told = refused(put(service, CRANE, bad), 422, "invalid-parameter")
        assert told["errors"][0]["parameter"] == "sensor_id"
    for path in ("crane-5", "crane-5?version=1", "generic?version=1", "..%2fkeys"):
        answer = service.call("GET", f"/v1/sensors/{path}")
        assert answer.status_code == 404, path
    put(service, CRANE)
    answer = service.call("GET", "/v1/sensors/crane-5", key=limited)
    assert answer.status_code == 200
    refused(service.call("GET", "/v1/sensors/crane-5?version=2"), 404, "unknown-sensor")
    answer = service.call("GET", "/v1/sensors/crane-5?version=0")
    refused(answer, 422, "invalid-parameter")


def test_a_flight_with_a_layer_of_classes_has_the_shares_counted_by_hand(
    service: Service, tmp_path: Path
) -> None:
    put(service, CRANE)
    # A is the upper left quarter: ten rows of the layer, so that each row is a tenth of it.
    service.put_parcels(square("A", col=0, row=0, size=1), square("B", col=1, row=0, size=1))
    layer = rows_of(1, 1, 2, 3, 4, 5, 0, 0, 0, 99)
    layer[:, 10:] = 0
    report = posted(service, FLIGHT, flight(tmp_path / "f", layer))
    assert (report["sensor"], report["sensor_version"]) == ("crane-5", 1)
    found = in_scene(service)
    assert shares(found) == {
        "valid_share": 0.4,
        "cloud": 0.2,
        "shadow": 0.1,
        "snow": 0.1,
        "nodata": 0.1,
        "saturation": 0.1,
        "water": 0.1,
    }
    assert (found["state"], found["reason"]) == ("unseen", "cloud")
    assert found["pixels"] == pytest.approx(4_000, abs=0.5)
    series = service.series("A", "ndvi", min_valid=0, stat="mean,pixels")
    assert series["mean"] == [pytest.approx(NDVI, abs=2e-4)]
    assert series["sensor"] == ["crane-5"]
    assert service.series("B", "ndre")["mean"] == [pytest.approx(NDRE, abs=2e-4)]
    assert service.series("B", "red")["mean"] == [pytest.approx(0.05, abs=2e-5)]
    (recipe,) = recipes(service, "f1")
    assert recipe["profile"] == {"sensor": "crane-5", "version": 1}
    assert (recipe["quality"], recipe["rule"]) == ("crew_mask", "clear")
    # Filters by sensor know it, beside figures that were measured elsewhere.
    rows = [
        {"parcel": "B", "index": "ndvi", "observed_at": "2024-05-01T00:00:00Z", "mean": 0.5}
        | {"sensor": sensor}
        for sensor in ("crane-5", "by eye")
    ]
    assert service.call("POST", "/v1/observations", json=rows).json()["created"] == 2
    own = service.series("B", sensor="crane-5")["mean"]
    assert own == [0.5, pytest.approx(NDVI, abs=2e-4)]
    assert service.series("B", sensor="by eye")["mean"] == [0.5]
    listed = service.get("/v1/scenes", params={"sensor": "crane-5"})["scenes"]
    assert "f1" in [scene["ref"] for scene in listed]


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        ("clear", {"valid_share": 0.6, "cloud": 0.2, "shadow": 0.1, "nodata": 0.1, "water": 0.2}),
        # Haze of 1 counts too; a clear pond is lost to nothing, it is merely not wanted.
        ("dry", {"valid_share": 0.3, "cloud": 0.4, "shadow": 0.1, "nodata": 0.1, "water": 0.2}),
        # Nothing is dropped but what has no data; the hazy pond is a pond.
        ("pond", {"valid_share": 0.2, "cloud": 0, "shadow": 0, "nodata": 0.1, "water": 0.2}),
    ],
)
def test_a_flight_with_a_layer_of_bits_has_the_shares_counted_by_hand(
    service: Service, tmp_path: Path, rule: str, expected: dict[str, float]
) -> None:
    put(service, with_quality(BIT_LAYER, quality_rule=rule))
    service.put_parcels(square("A", col=0, row=0, size=1))
    shade, pond, haze, lost, stray = 1 << 1, 1 << 2, 1 << 4, 1 << 9, 1 << 12
    numbers = [
        0,
        stray,  # a bit that the profile does not name decides nothing
        0,
        haze,  # haze 1
        2 * haze | shade,  # lost to what the rule names first
        3 * haze,
        shade,
        pond,
        pond | haze,
        65535,
    ]
    layer = rows_of(*numbers, dtype=np.uint16)
    posted(service, FLIGHT, flight(tmp_path / "f", layer))
    assert shares(in_scene(service)) == {**expected, "snow": 0, "saturation": 0}
    # A field that is lost to nodata is so under every rule, whatever else is said.
    numbers[0] = lost | pond
    again = {**FLIGHT, "ref": "f2", "acquired_at": "2024-06-05T09:30:00Z"}
    posted(service, again, flight(tmp_path / "g", rows_of(*numbers, dtype=np.uint16)))
    assert in_scene(service, "f2")["nodata"] == pytest.approx(0.2, abs=1e-6)


def test_a_built_in_layer_may_have_rules_of_one_s_own(service: Service, tmp_path: Path) -> None:
    bands = [band("red", 0.665, 0.03), band("nir", 0.833, 0.1)]
    base = {"title": "As the agency, but stricter", "bands": bands, "nodata": 0}
    base["scaling"] = {"scale": 0.0001, "offset": -0.1}
    sensors = {
        "plain": "scl",
        "no-seven": {"layer": "scl", "rules": {"clear": {"keep": [2, 4, 5, 6]}}},
        "bare": {"layer": "scl", "rules": {"bare": {"keep": [5]}}},
    }
    # Ten by ten cells of the layer, a quarter of class 7 and a quarter of class 5.
    service.put_parcels(square("A", col=0, row=0, size=20))
    expected = {"plain": 1.0, "no-seven": 0.75, "bare": 0.25, "sentinel-2-l2a": 1.0}
    for day, (sensor, valid) in enumerate(expected.items(), start=1):
        if sensor in sensors:
            rule = "bare" if sensor == "bare" else "clear"
            document = {**base, "quality": sensors[sensor], "quality_rule": rule}
            answer = put(service, document, sensor)
            assert answer.status_code == 201, answer.text
            told = answer.json()
            assert told["quality_layer"] == "scl"
            # The layer's other rules stay.
            assert {"clear", "strict", "land", "surface"} <= set(told["quality_rules"])
            assert told["index_rules"] == {"ndsi": "surface"}
        files = uniform_scene(tmp_path / sensor, {"red": 0.05, "nir": 0.45})
        classes = np.full((20, 20), 4, np.uint8)
        classes[:5, :5], classes[:5, 5:10] = 7, 5
        files["quality"] = write_band(files["quality"], classes, cell_m=20)
        scene = {**SCENE, "ref": sensor, "sensor": sensor, "tile": sensor}
        scene["acquired_at"] = f"2024-06-0{day}T10:00:00Z"
        posted(service, scene, files)
        found = in_scene(service, sensor)
        assert found["valid_share"] == pytest.approx(valid, abs=1e-6)
        assert (found["cloud"], found["shadow"], found["nodata"]) == (0, 0, 0)
        (recipe,) = recipes(service, sensor)
        is_own = sensor in sensors
        assert (recipe["profile"] is not None) == is_own
        assert recipe["quality"] == "scl"


def test_a_built_in_layer_of_bits_may_have_rules_of_one_s_own(
    service: Service, tmp_path: Path
) -> None:
    rules = {"clear": {"drop": [{"field": "cloud_confidence", "at_least": 2}]}}
    document = with_quality({"layer": "qa_pixel", "rules": rules})
    assert put(service, document).status_code == 201
    service.put_parcels(square("A", col=0, row=0, size=1))
    # Of the published table: 21824 clear, 23888 cloud shadow, 22280 high confidence of cloud.
    numbers = rows_of(1, 0, 21824, 21824, 23888, 23888, 23888, 22280, 22280, 22280, dtype=np.uint16)
    posted(service, FLIGHT, flight(tmp_path / "f", numbers))
    found = shares(in_scene(service))
    assert (found["valid_share"], found["cloud"], found["nodata"]) == (0.5, 0.3, 0.2)
    assert found["shadow"] == 0


SNOWY = [
    *CRANE["bands"],
    band("swir16", 1.61, 0.09),
]


@pytest.mark.parametrize("has_rule", [False, True], ids=["without surface", "with surface"])
def test_an_index_that_asks_for_a_rule_says_by_which_one_it_was_read(
    service: Service, tmp_path: Path, *, has_rule: bool
) -> None:
    layer = copy.deepcopy(CLASS_LAYER)
    if has_rule:
        layer["rules"]["surface"] = {"keep": [0, 3, 5]}
    rule = "surface" if has_rule else "clear"
    told = put(service, with_quality(layer, bands=SNOWY)).json()
    assert told["index_rules"] == {"ndsi": rule}
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f", rows_of(3, 3, 3, 3, 3, 3, 3, 0, 0, 0))
    swir = np.full((200, 200), round(0.02 * STORED), np.uint16)
    files["swir16"] = write_band(tmp_path / "f" / "swir16.tif", swir, cell_m=0.1)
    report = posted(service, FLIGHT, files)
    assert report["indices"]["ndsi"]["rule"] == rule
    assert "rule" not in report["indices"]["ndvi"]
    ndsi = service.series("A", "ndsi", min_valid=0, stat="mean,valid_share")
    # (0.08 - 0.02) / (0.08 + 0.02); Hall et al. 1995.
    assert ndsi["mean"] == [pytest.approx(0.6, abs=2e-3)]
    assert ndsi["valid_share"] == [pytest.approx(1.0 if has_rule else 0.3, abs=1e-6)]
    assert in_scene(service)["snow"] == pytest.approx(0.7, abs=1e-6)


def test_a_new_version_changes_no_figure_and_what_is_measured_again_keeps_its_own(
    service: Service, tmp_path: Path
) -> None:
    put(service, CRANE)
    service.put_parcels(square("A", col=0, row=0, size=1), square("B", col=1, row=1, size=1))
    # Six rows of ground, two of pond, two of shade.
    files = flight(tmp_path / "f", rows_of(0, 0, 0, 0, 0, 0, 5, 5, 2, 2))
    posted(service, FLIGHT, files)
    dry = with_quality(CLASS_LAYER, quality_rule="dry")
    assert put(service, dry).json()["version"] == 2
    later = {**FLIGHT, "ref": "f2", "acquired_at": "2024-06-05T09:30:00Z"}
    report = posted(service, later, flight(tmp_path / "g", rows_of(0, 0, 0, 0, 0, 0, 5, 5, 2, 2)))
    assert report["sensor_version"] == 2

    def valid(ref: str) -> list[float]:
        return [round(share, 6) for share in service.series(ref, min_valid=0)["valid_share"]]

    assert valid("A") == [0.8, 0.6]
    # An outline that begins in the past is measured anew, each scene by its own version. The
    # upper half of A's rows, twice as high: five of ground, none of water.
    moved = square("A", col=0, row=0.5, size=0.5, valid_from="2024-06-01T00:00:00Z")
    service.put_parcels(moved)
    settle(service, "f1", "f2")
    # Rows 5 to 9: one of ground, two of pond, two of shade.
    assert valid("A") == [0.6, 0.2]
    assert [recipe["profile"]["version"] for recipe in recipes(service, "f1")] == [1, 1]
    assert {recipe["profile"]["version"] for recipe in recipes(service, "f2")} == {2}
    assert service.get("/v1/scenes/f1")["sensor_version"] == 1
    assert valid("B") == [1.0, 1.0]


def settle(service: Service, *refs: str) -> None:
    for ref in refs:
        told = service.get(f"/v1/scenes/{ref}", headers={"Prefer": "wait=30"})
        assert told["state"] == "done", told


def test_a_scene_is_read_by_the_newest_version_when_it_is_sent_again_as_a_replacement(
    service: Service, tmp_path: Path
) -> None:
    put(service, CRANE)
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f", rows_of(0, 0, 0, 0, 0, 0, 5, 5, 2, 2))
    first = posted(service, FLIGHT, files)
    known_at = datetime.now(UTC).isoformat()
    put(service, with_quality(CLASS_LAYER, quality_rule="dry"))
    # The same content again is the scene that is there, whatever became of the profile.
    again = service.post_scene(FLIGHT, files)
    assert (again.status_code, again.json()) == (200, first)
    replaced = posted(service, {**FLIGHT, "replace": True}, files)
    assert (replaced["sensor_version"], replaced["generation"]) == (2, 2)
    series = service.series("A", min_valid=0)
    assert series["valid_share"] == [pytest.approx(0.6, abs=1e-6)]
    then = service.series("A", min_valid=0, as_of=known_at)
    assert then["valid_share"] == [pytest.approx(0.8, abs=1e-6)]
    assert [recipe["profile"]["version"] for recipe in recipes(service, "f1")] == [2]
    # Once more changes nothing, since there is no newer version.
    assert posted(service, {**FLIGHT, "replace": True}, files) == replaced


def test_a_scene_that_failed_for_its_profile_is_sent_again_once_that_is_mended(
    service: Service, tmp_path: Path
) -> None:
    put(service, CRANE)
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f", rows_of(7, 7, 0, 0, 0, 0, 0, 0, 0, 0))
    failed = service.post_scene(FLIGHT, files).json()
    assert (failed["state"], failed["failure"]["type"]) == (
        "failed",
        "/problems/wrong-quality-layer",
    )
    assert failed["failure"]["errors"][0]["pointer"] == "/quality"
    layer = copy.deepcopy(CLASS_LAYER)
    layer["classes"].append({"value": 7, "name": "drizzle", "loss": "cloud"})
    put(service, with_quality(layer))
    # Trying again is trying the same again; sending it again is to receive it anew.
    retried = service.call("POST", "/v1/scenes/f1/retry", headers={"Prefer": "wait=30"}).json()
    assert (retried["state"], retried["sensor_version"]) == ("failed", 1)
    assert posted(service, FLIGHT, files)["sensor_version"] == 2
    assert in_scene(service)["cloud"] == pytest.approx(0.2, abs=1e-6)


def test_a_scaling_that_neither_profile_nor_scene_has_is_refused_and_never_guessed(
    service: Service, tmp_path: Path
) -> None:
    scale = {"scale": 1 / STORED, "offset": 0.0}
    bare = {name: value for name, value in CRANE.items() if name != "scaling"}
    bare["quality"] = None
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f")
    put(service, bare)
    told = refused(service.post_scene(FLIGHT, files), 422, "unknown-offset")
    assert told["errors"][0]["pointer"] == "/scene/scaling"
    some = {**FLIGHT, "scaling": {role: scale for role in SURFACE if role != "nir"}}
    refused(service.post_scene(some, files), 422, "unknown-offset")
    posted(service, {**some, "scaling": dict.fromkeys(SURFACE, scale)}, files)
    assert service.series("A")["mean"] == [pytest.approx(NDVI, abs=2e-4)]

    # By band, and by role in the profile; what the scene says goes before both.
    bands = copy.deepcopy(CRANE["bands"])
    for one in bands:
        one["scaling"] = scale
    by_role = dict.fromkeys(SURFACE, scale)
    half = {"scale": 0.5 / STORED, "offset": 0.0}
    for number, (change, sent, red) in enumerate(
        [
            ({"bands": bands}, None, 0.05),
            ({"scaling": by_role}, None, 0.05),
            ({"bands": bands}, half, 0.025),
            ({"scaling": by_role}, {"red": half}, 0.025),
        ],
        start=2,
    ):
        assert put(service, {**bare, **change}).json()["version"] == number
        scene = {**FLIGHT, "ref": f"f{number}", "acquired_at": f"2024-06-1{number}T09:00:00Z"}
        posted(service, scene | ({"scaling": sent} if sent else {}), files)
        assert service.series("A", "red")["mean"][-1] == pytest.approx(red, abs=2e-5)


def test_a_thermal_band_keeps_its_scaling_beside_one_for_reflectances(
    service: Service, tmp_path: Path
) -> None:
    heat = band("lwir11", 10.9, 1.0, scaling={"scale": 0.01, "offset": 100.0})
    document = {**CRANE, "bands": [*CRANE["bands"], heat], "quality": None}
    told = put(service, document).json()
    assert [one["unit"] for one in told["bands"]][-2:] == ["reflectance", "kelvin"]
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f")
    files["lwir11"] = write_band(
        tmp_path / "f" / "lwir11.tif", np.full((200, 200), 20_000, np.uint16), cell_m=0.1
    )
    scene = {**FLIGHT, "scaling": {"scale": 1 / STORED, "offset": 0.0}}
    posted(service, scene, files)
    assert service.series("A", "lwir11")["mean"] == [pytest.approx(300, abs=1e-3)]
    # One scaling for all is of reflectances: without its own the heat is not known.
    del heat["scaling"]
    put(service, document)
    later = {**FLIGHT, "ref": "f2", "acquired_at": "2024-06-05T09:00:00Z"}
    refused(service.post_scene(later, files), 422, "unknown-offset")


def test_numbers_for_nodata_and_saturation_and_bits_of_saturation_are_the_profile_s(
    service: Service, tmp_path: Path
) -> None:
    bands = copy.deepcopy(CRANE["bands"])
    bands[2]["saturation_bit"] = 11
    told = put(service, with_quality(None, bands=bands, nodata=-7, saturated=9)).json()
    assert told["saturation_layer"] == "saturation"
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f")
    red = np.full((200, 200), round(0.05 * STORED), np.int16)
    red[:10], red[10:20] = -7, 9
    files["red"] = write_band(tmp_path / "f" / "red.tif", red, cell_m=0.1)
    bits = np.full((200, 200), 0b0111_1111_1111, np.uint16)
    bits[20:30] = 1 << 11
    files["saturation"] = write_band(tmp_path / "f" / "saturation.tif", bits, cell_m=0.1)
    posted(service, FLIGHT, files)
    # Of a hundred rows, ten each have no red for nodata, for its number, and for its bit.
    series = service.series("A", "ndvi", stat="mean,pixels,valid_share")
    assert series["pixels"] == [pytest.approx(7_000, abs=0.5)]
    assert series["mean"] == [pytest.approx(NDVI, abs=2e-4)]
    assert service.series("A", "nir", stat="pixels")["pixels"] == [pytest.approx(10_000, abs=0.5)]
    narrow = write_band(tmp_path / "f" / "narrow.tif", np.zeros((200, 200), np.uint8), cell_m=0.1)
    later = {**FLIGHT, "ref": "f2", "acquired_at": "2024-06-05T09:00:00Z"}
    answer = service.post_scene(later, {**files, "saturation": narrow})
    refused(answer, 422, "wrong-quality-layer")


@pytest.mark.parametrize("role", ["nir", "nir08"])
def test_the_one_near_infrared_band_of_a_profile_is_nir(
    service: Service, tmp_path: Path, role: str
) -> None:
    bands = [*CRANE["bands"][:4], band(role, 0.842, 0.057)]
    told = put(service, {**CRANE, "bands": bands, "quality": None}).json()
    assert told["bands"][-1]["role"] == "nir"
    service.put_parcels(square("A", col=0, row=0, size=1))
    files = flight(tmp_path / "f")
    posted(service, FLIGHT, files)
    files = flight(tmp_path / "g")
    files["nir08"] = files.pop("nir")
    scene = {**FLIGHT, "ref": "f2", "acquired_at": "2024-06-05T09:00:00Z", "tile": "t"}
    posted(service, scene, files)
    assert service.series("A")["mean"] == [pytest.approx(NDVI, abs=2e-4)] * 2


def test_a_scene_must_fit_its_profile_as_it_must_a_built_in_one(
    service: Service, tmp_path: Path
) -> None:
    put(service, CRANE)
    put(service, with_quality(None), "blind-5")
    good = flight(tmp_path / "f", rows_of(*[0] * 10))
    without = {part: path for part, path in good.items() if part != "quality"}
    real = write_band(tmp_path / "real.tif", np.zeros((20, 20), np.float32), cell_m=1)
    swir = write_band(tmp_path / "swir.tif", np.ones((200, 200), np.uint16), cell_m=0.1)
    bits = write_band(tmp_path / "bits.tif", np.zeros((200, 200), np.uint16), cell_m=0.1)
    layered, kind = "wrong-quality-layer", "invalid-input"
    cases: list[tuple[Document, dict[str, Path], str, str, str]] = [
        (FLIGHT, {**good, "swir16": swir}, kind, "/swir16", "has no band swir16"),
        (FLIGHT, without, layered, "/quality", "CREW_MASK"),
        (FLIGHT, {**good, "quality": real}, layered, "/quality", "uint8"),
        (FLIGHT, {**good, "saturation": bits}, layered, "/saturation", "Leave it out"),
        ({**FLIGHT, "sensor": "blind-5"}, good, layered, "/quality", "no quality layer"),
        ({**FLIGHT, "sensor": "crane-6"}, good, "unknown-sensor", "/scene/sensor", "GET /v1"),
        ({**FLIGHT, "quality": "none"}, good, kind, "/scene/quality", "leave out"),
    ]
    for scene, files, code, pointer, words in cases:
        told = refused(service.post_scene(scene, files, wait=0), 422, code)
        assert told["errors"][0]["pointer"] == pointer
        assert words in told["detail"]
        assert "crane-6" not in told["detail"]
    posted(service, {**FLIGHT, "quality": "none"}, without)


def changed(*path: str | int, to: Any) -> Callable[[], Document]:
    """Return a maker of the crane's profile with one member changed, or removed by `...`."""

    def make() -> Document:
        document = copy.deepcopy(CRANE)
        place: Any = document
        for step in path[:-1]:
            place = place[step]
        if to is ...:
            del place[path[-1]]
        else:
            place[path[-1]] = to
        return document

    return make


def flags(*path: str | int, to: Any) -> Document:
    document = copy.deepcopy(with_quality(BIT_LAYER))
    place: Any = document["quality"]
    for step in path[:-1]:
        place = place[step]
    place[path[-1]] = to
    return document


LAYER = CLASS_LAYER
BAD: dict[str, tuple[Document, str, str]] = {
    "no title": (changed("title", to=...)(), "/title", "required"),
    "a formula": (changed("title", to="=A1")(), "/title", "spreadsheet"),
    "no bands": (changed("bands", to=[])(), "/bands", "at least 1"),
    "65 bands": (changed("bands", to=[band("red", 0.66, 0.03)] * 65)(), "/bands", "64"),
    "unknown member": (changed("bitdepth", to=12)(), "/bitdepth", "not permitted"),
    "unknown role": (changed("bands", 3, "role", to="purple")(), "/bands/3/role", "red"),
    "role twice": (
        changed("bands", 3, to=band("red", 0.65, 0.03))(),
        "/bands/3/role",
        "once",
    ),
    "nanometres": (changed("bands", 3, "centre_um", to=717)(), "/bands/3/centre_um", "15"),
    "ultraviolet": (changed("bands", 3, "centre_um", to=0.29)(), "/bands/3/centre_um", "0.3"),
    "no number": (changed("bands", 3, "centre_um", to="wide")(), "/bands/3/centre_um", "number"),
    "no width": (changed("bands", 0, "width_um", to=0)(), "/bands/0/width_um", "greater"),
    "swapped": (changed("bands", 2, "centre_um", to=0.842)(), "/bands/2/centre_um", "0.6 to 0.7"),
    "bit 32": (changed("bands", 0, "saturation_bit", to=32)(), "/bands/0/saturation_bit", "31"),
    "no cells": (changed("bands", 0, "gsd_m", to=0)(), "/bands/0/gsd_m", "greater"),
    "scale 0": (changed("scaling", to={"scale": 0, "offset": 0})(), "/scaling/scale", "greater"),
    "no offset": (changed("scaling", to={"scale": 1})(), "/scaling/offset", "required"),
    "scaling of what": (changed("scaling", to={"violet": {}})(), "/scaling", "band role"),
    "half a scaling": (
        changed("scaling", to={"red": {"scale": 1}})(),
        "/scaling/red/offset",
        "required",
    ),
    "scaling of a band that is not there": (
        changed("scaling", to={"swir16": {"scale": 1, "offset": 0}})(),
        "/scaling/swir16",
        "no band",
    ),
    "one number twice": (changed("saturated", to=0)(), "/saturated", "both"),
    "infinite nodata": (changed("nodata", to="Infinity")(), "/nodata", "finite"),
    "unknown layer": (with_quality("fmask"), "/quality/layer", "scl, qa_pixel"),
    "two layers": (with_quality({**LAYER, "layer": "scl"}), "/quality", "one of three"),
    "no layer": (with_quality({"name": "x"}), "/quality", "one of three"),
    "classes and bits": (with_quality({**LAYER, **BIT_LAYER}), "/quality", "one of three"),
    "no layer name": (with_quality({**LAYER, "name": None}), "/quality/name", "member"),
    "layer name": (with_quality({**LAYER, "name": "Crew mask"}), "/quality/name", "lower-case"),
    "name of another": (with_quality({**LAYER, "name": "scl"}), "/quality/name", "none of"),
    "built-in type": (
        with_quality({"layer": "scl", "dtype": "uint8"}),
        "/quality/dtype",
        "leave the member out",
    ),
    "float layer": (with_quality({**LAYER, "dtype": "float32"}), "/quality/dtype", "uint8"),
    "no nodata": (with_quality({**LAYER, "nodata": None}), "/quality/nodata", "member"),
    "large nodata": (with_quality({**LAYER, "nodata": 256}), "/quality/nodata", "fit"),
    "negative nodata": (with_quality({**LAYER, "nodata": -1}), "/quality/nodata", "greater"),
    "no rules": (with_quality({**LAYER, "rules": {}}), "/quality/rules", "at least 1"),
    "257 classes": (
        with_quality({**LAYER, "classes": [CLASSES[0]] * 257}),
        "/quality/classes",
        "256",
    ),
    "class twice": (
        changed("quality", "classes", 1, "value", to=0)(),
        "/quality/classes/1/value",
        "Another class",
    ),
    "large class": (
        changed("quality", "classes", 1, "value", to=300)(),
        "/quality/classes/1/value",
        "fit",
    ),
    "class beyond 65535": (
        with_quality(
            {**LAYER, "dtype": "uint32", "classes": [*CLASSES, {"value": 65536, "name": "x"}]}
        ),
        "/quality/classes",
        "65,535",
    ),
    "unknown loss": (
        changed("quality", "classes", 1, "loss", to="fog")(),
        "/quality/classes/1/loss",
        "'cloud'",
    ),
    "nodata that is none": (
        changed("quality", "classes", 1, "value", to=99)(),
        "/quality/classes/1/loss",
        "lost to nodata",
    ),
    "keep of no class": (
        changed("quality", "rules", "clear", "keep", to=[0, 6])(),
        "/quality/rules/clear/keep/1",
        "No class",
    ),
    "keep of nothing": (
        changed("quality", "rules", "clear", "keep", to=[])(),
        "/quality/rules/clear",
        "`keep`",
    ),
    "keep of nodata": (
        changed("quality", "rules", "clear", "keep", to=[99])(),
        "/quality/rules/clear/keep/0",
        "without data",
    ),
    "bits for classes": (
        changed("quality", "rules", "clear", "need", to=["pond"])(),
        "/quality/rules/clear",
        "`keep`",
    ),
    "rule as an index": (
        with_quality({**LAYER, "rules": {"ndvi": {"keep": [0]}}}, quality_rule="ndvi"),
        "/quality/rules",
        "no index",
    ),
    "rule in capitals": (
        with_quality({**LAYER, "rules": {"CLEAR": {"keep": [0]}}}),
        "/quality/rules",
        "lower-case",
    ),
    "17 rules": (
        with_quality({**LAYER, "rules": {f"r{n}": {"keep": [0]} for n in range(17)}}),
        "/quality/rules",
        "16",
    ),
    "no clear": (
        with_quality({**LAYER, "rules": {"dry": {"keep": [0]}}}),
        "/quality_rule",
        "it has dry",
    ),
    "unknown rule": (changed("quality_rule", to="wet")(), "/quality_rule", "clear, dry"),
    "rule of no layer": (with_quality(None, quality_rule="clear"), "/quality_rule", "Without"),
    "class that the built-in layer has not": (
        with_quality({"layer": "scl", "rules": {"clear": {"keep": [4, 12]}}}),
        "/quality/rules/clear/keep/1",
        "No class",
    ),
    "field that the built-in layer has not": (
        with_quality({"layer": "qa_pixel", "rules": {"clear": {"drop": [{"field": "fog"}]}}}),
        "/quality/rules/clear/drop/0/field",
        "cloud_shadow",
    ),
    "field twice": (flags("bits", 3, "name", to="shade"), "/quality/bits/3/name", "once"),
    "field in capitals": (flags("bits", 3, "name", to="Lost"), "/quality/bits/3/name", "lower"),
    "bit too high": (flags("bits", 1, "bit", to=16), "/quality/bits/1/bit", "uint16"),
    "pair too high": (flags("bits", 2, "bit", to=15), "/quality/bits/2/bit", "uint16"),
    "wide field": (flags("bits", 2, "width", to=9), "/quality/bits/2/width", "8"),
    "two waters": (flags("bits", 0, "water", to=True), "/quality/bits", "one field"),
    "drop of no field": (
        flags("rules", "clear", "drop", 1, "field", to="fog"),
        "/quality/rules/clear/drop/1/field",
        "shade, pond, haze",
    ),
    "never so high": (
        flags("rules", "clear", "drop", 0, "at_least", to=4),
        "/quality/rules/clear/drop/0/at_least",
        "never",
    ),
    "need of no field": (
        flags("rules", "pond", "need", to=["fog"]),
        "/quality/rules/pond/need/0",
        "no such field",
    ),
    "rule of nothing": (flags("rules", "pond", to={}), "/quality/rules/pond", "at least"),
    "keep of bits": (
        flags("rules", "pond", to={"keep": [1], "need": ["pond"]}),
        "/quality/rules/pond",
        "`drop`",
    ),
}


def test_each_faulty_profile_is_refused_where_it_is_wrong_and_nothing_is_kept(
    service: Service,
) -> None:
    for name, (document, pointer, words) in BAD.items():
        told = refused(put(service, document), 422, "invalid-input")
        found = {error["pointer"]: error["detail"] for error in told["errors"]}
        assert list(found) == [pointer], (name, found)
        assert words in found[pointer], (name, found)
    assert service.call("GET", "/v1/sensors/crane-5").status_code == 404
    answer = service.call("PUT", "/v1/sensors/crane-5", json=[CRANE])
    assert answer.status_code == 422
    headers = {"Content-Type": "application/json"}
    answer = service.call("PUT", "/v1/sensors/crane-5", content="{", headers=headers)
    refused(answer, 400, "malformed-json")
    # Several faults are told together.
    worse = copy.deepcopy(CRANE)
    worse["bands"][0]["role"] = "red"
    worse["quality"]["rules"]["clear"]["keep"] = [8]
    told = refused(put(service, worse), 422, "invalid-input")
    assert told["errors_total"] == 3
    assert {error["pointer"] for error in told["errors"]} == {
        "/bands/0/centre_um",
        "/bands/2/role",
        "/quality/rules/clear/keep/0",
    }


def test_the_example_of_the_readme_is_a_sensor(service: Service) -> None:
    readme = Path(__file__).parents[2].joinpath("README.md").read_text("utf-8")
    example = readme.split("<!-- sensor:begin -->")[1].split("<!-- sensor:end -->")[0]
    document = json.loads(example.split("-d '")[1].split("'")[0])
    answer = put(service, document)
    assert answer.status_code == 201, answer.text
    assert answer.json()["quality_rules"] == ["clear", "dry"]
