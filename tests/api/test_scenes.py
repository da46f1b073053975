"""Scenes over HTTP: repeated, replaced, retried, withdrawn; reports; what may be sent."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
from numpy.typing import NDArray
from pyproj import Transformer
from sqlalchemy import func, select

from service.api.wire import written
from service.clock import now
from service.store.tables import Observation, Scene, SceneFile, Write
from tests.serving import ORIGIN, SCENE, Service, square, uniform_scene, write_band

CANOPY = {"blue": 0.03, "green": 0.06, "red": 0.04, "nir": 0.42}
# (0.42 - 0.04) / (0.42 + 0.04) and (0.30 - 0.20) / (0.30 + 0.20); Rouse et al. 1974.
CANOPY_NDVI = 0.826087
STUBBLE = {"blue": 0.10, "green": 0.14, "red": 0.20, "nir": 0.30}
STUBBLE_NDVI = 0.2
GENERIC = {
    "ref": "g1",
    "sensor": "generic",
    "acquired_at": "2024-06-03T10:10:31Z",
    "scaling": {"scale": 0.0001, "offset": 0.0},
}


def settled(service: Service, ref: str) -> Any:
    """Return a scene once its work is done."""
    return service.get(f"/v1/scenes/{ref}", headers={"Prefer": "wait=30"})


def counted(service: Service, table: type[Any] = Observation) -> int:
    with service.sessions.reading() as session:
        return session.scalar(select(func.count()).select_from(table)) or 0


def problem(answer: httpx.Response) -> tuple[int, str]:
    assert answer.headers["Content-Type"] == "application/problem+json"
    return answer.status_code, answer.json()["type"]


def written_now() -> str:
    return written(now())


def failing_scene(folder: Path) -> dict[str, Path]:
    """Write a scene whose quality layer holds a number that is no class: only pixels show it."""
    return uniform_scene(folder, STUBBLE, scl=12)


def test_the_same_scene_twice_is_202_then_200_and_one_set_of_observations(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5), square("B", col=20, row=20))
    files = uniform_scene(tmp_path / "s", CANOPY)
    first = service.post_scene(SCENE, files, wait=0)
    assert first.status_code == 202
    assert first.headers["Location"] == "/v1/scenes/s1"
    assert first.json()["state"] in ("queued", "running", "done")
    done = settled(service, "s1")
    assert (done["state"], done["generation"], done["progress"]) == ("done", 1, 1.0)

    again = service.post_scene(SCENE, files, wait=0)
    assert again.status_code == 200
    assert again.json() == done
    # The same instant with another offset, and members in another order, are the same content.
    same = dict(reversed(SCENE.items())) | {"acquired_at": "2024-06-03T12:10:31+02:00"}
    assert service.post_scene(same, files, wait=0).status_code == 200
    assert (counted(service), counted(service, Write), counted(service, Scene)) == (2, 1, 1)
    assert counted(service, SceneFile) == len(files)


def test_a_failed_scene_is_queued_again_by_a_repost_and_by_a_retry(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    files = failing_scene(tmp_path / "s")
    answer = service.post_scene(SCENE, files)
    assert (answer.status_code, answer.json()["state"]) == (200, "failed")
    assert answer.json()["failure"]["type"] == "/problems/wrong-quality-layer"

    again = service.post_scene(SCENE, files, wait=0)
    assert (again.status_code, again.json()["generation"]) == (202, 2)
    assert again.json()["failure"] is None
    assert settled(service, "s1")["state"] == "failed"
    retried = service.call("POST", "/v1/scenes/s1/retry")
    assert (retried.status_code, retried.json()["generation"]) == (202, 3)
    assert retried.headers["Location"] == "/v1/scenes/s1"
    assert settled(service, "s1")["state"] == "failed"
    assert counted(service) == 0

    # The disk was damaged, and is mended: what the archive holds can be read now.
    good = uniform_scene(tmp_path / "good", CANOPY)
    with service.sessions.reading() as session:
        digest = session.scalar(select(SceneFile.digest).where(SceneFile.part == "quality"))
    (kept,) = (service.settings.data / "files").rglob(f"{digest}.*")
    kept.write_bytes(good["quality"].read_bytes())
    retried = service.call("POST", "/v1/scenes/s1/retry", headers={"Prefer": "wait=30"})
    assert (retried.status_code, retried.json()["state"]) == (200, "done")
    assert service.series("A")["mean"] == [pytest.approx(STUBBLE_NDVI, abs=1e-6)]

    refused = service.call("POST", "/v1/scenes/s1/retry")
    assert problem(refused) == (409, "/problems/not-failed")
    missing = service.call("POST", "/v1/scenes/s2/retry")
    assert problem(missing) == (404, "/problems/scene-not-found")


def test_withdrawing_takes_figures_away_but_not_from_the_past_and_a_repost_brings_them_back(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    files = uniform_scene(tmp_path / "s", CANOPY)
    service.post_scene(SCENE, files)
    known_at = written_now()
    assert service.get("/v1/overview")["parcels"][0]["scene"] == "s1"

    withdrawn = service.call("DELETE", "/v1/scenes/s1")
    assert (withdrawn.status_code, withdrawn.json()["state"]) == (200, "withdrawn")
    assert service.series("A")["mean"] == []
    overview = service.get("/v1/overview")["parcels"][0]
    assert (overview["parcel"], overview["scene"], overview["value"]) == ("A", None, None)
    then = service.series("A", as_of=known_at)
    assert (then["scene"], then["mean"]) == (["s1"], [pytest.approx(CANOPY_NDVI, abs=1e-6)])
    gone_at = written_now()
    # Twice is once; and a withdrawn scene has nothing to retry.
    assert service.call("DELETE", "/v1/scenes/s1").json() == withdrawn.json()
    assert problem(service.call("POST", "/v1/scenes/s1/retry")) == (409, "/problems/not-failed")

    again = service.post_scene(SCENE, files, wait=0)
    assert again.status_code == 202
    assert settled(service, "s1")["state"] == "done"
    assert service.series("A")["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]
    assert service.get("/v1/overview")["parcels"][0]["scene"] == "s1"
    assert service.series("A", as_of=gone_at)["mean"] == []
    # What is withdrawn does not hold its content back from another ref.
    service.call("DELETE", "/v1/scenes/s1")
    assert service.post_scene({**SCENE, "ref": "s2"}, files).json()["state"] == "done"


def test_a_replaced_scene_has_new_figures_and_the_old_ones_by_as_of(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    service.post_scene(SCENE, uniform_scene(tmp_path / "old", CANOPY))
    known_at = written_now()
    new = uniform_scene(tmp_path / "new", STUBBLE)

    refused = service.post_scene(SCENE, new)
    assert problem(refused) == (409, "/problems/scene-exists")
    # Metadata counts as content too.
    other = {**SCENE, "processing_baseline": "05.11"}
    refused = service.post_scene(other, uniform_scene(tmp_path / "same", CANOPY))
    assert problem(refused) == (409, "/problems/scene-exists")
    assert service.series("A")["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]

    taken = service.post_scene({**SCENE, "replace": True}, new, wait=0)
    assert (taken.status_code, taken.json()["generation"]) == (202, 2)
    assert settled(service, "s1")["state"] == "done"
    assert service.series("A")["mean"] == [pytest.approx(STUBBLE_NDVI, abs=1e-6)]
    then = service.series("A", as_of=known_at)
    assert then["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]
    assert service.get("/v1/overview")["parcels"][0]["value"] == pytest.approx(STUBBLE_NDVI)
    # Sent again, with or without `replace`, it is there.
    assert service.post_scene({**SCENE, "replace": True}, new, wait=0).status_code == 200
    assert service.post_scene(SCENE, new, wait=0).status_code == 200
    assert counted(service) == 2


def test_a_replacement_that_fails_leaves_the_old_figures_in_force(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    service.post_scene(SCENE, uniform_scene(tmp_path / "old", CANOPY))
    bad = failing_scene(tmp_path / "bad")
    elsewhere = {**SCENE, "ref": "s2", "replace": True}
    assert service.post_scene(elsewhere, bad).json()["state"] == "failed"
    assert service.get("/v1/scenes/s1")["state"] == "done"
    assert service.series("A")["scene"] == ["s1"]
    service.call("DELETE", "/v1/scenes/s2")
    assert service.post_scene({**SCENE, "replace": True}, bad).json()["state"] == "failed"
    assert service.series("A")["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]


def test_the_same_content_has_one_ref_and_a_tile_one_scene_a_pass(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    files = uniform_scene(tmp_path / "old", CANOPY)
    service.post_scene(SCENE, files)
    known_at = written_now()

    twin = service.post_scene({**SCENE, "ref": "s2"}, files)
    assert problem(twin) == (409, "/problems/content-known")
    assert "s1" in twin.json()["detail"]
    twin = service.post_scene({**SCENE, "ref": "s2", "replace": True}, files)
    assert problem(twin) == (409, "/problems/content-known")

    later = {**SCENE, "ref": "s2", "acquired_at": "2024-06-03T10:10:45Z"}
    new = uniform_scene(tmp_path / "new", STUBBLE)
    rival = service.post_scene(later, new)
    assert problem(rival) == (409, "/problems/tile-pass-taken")
    assert "s1" in rival.json()["detail"]
    assert counted(service, Scene) == 1

    taken = service.post_scene({**later, "replace": True}, new)
    assert (taken.json()["state"], taken.json()["supersedes"]) == ("done", "s1")
    assert service.get("/v1/scenes/s1")["state"] == "superseded"
    assert service.series("A")["scene"] == ["s2"]
    assert service.series("A")["mean"] == [pytest.approx(STUBBLE_NDVI, abs=1e-6)]
    then = service.series("A", as_of=known_at)
    assert (then["scene"], then["mean"]) == (["s1"], [pytest.approx(CANOPY_NDVI, abs=1e-6)])
    assert service.get("/v1/overview")["parcels"][0]["scene"] == "s2"
    # The superseded scene does not come back by accident.
    assert problem(service.post_scene(SCENE, files)) == (409, "/problems/tile-pass-taken")


def test_two_tiles_of_one_pass_over_a_parcel_are_one_look_and_the_other_steps_in(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=10, row=10))
    # A third of the parcel is under cloud in the first tile.
    cloudy = uniform_scene(tmp_path / "cloudy", STUBBLE)
    classes = np.full((20, 20), 4, dtype=np.uint8)
    classes[5:7, 5:10] = 9
    write_band(cloudy["quality"], classes, cell_m=20)
    second = {**SCENE, "ref": "s2", "tile": "t2", "acquired_at": "2024-06-03T10:10:45Z"}
    service.post_scene(SCENE, cloudy)
    service.post_scene(second, uniform_scene(tmp_path / "clear", CANOPY))
    assert counted(service) == 2

    look = service.series("A")
    assert (look["scene"], look["valid_share"]) == (["s2"], [pytest.approx(1, abs=1e-4)])
    assert service.get("/v1/overview")["parcels"][0]["scene"] == "s2"
    service.call("DELETE", "/v1/scenes/s2")
    look = service.series("A")
    assert (look["scene"], look["valid_share"]) == (["s1"], [pytest.approx(0.6, abs=1e-4)])
    assert look["mean"] == [pytest.approx(STUBBLE_NDVI, abs=1e-6)]
    assert service.get("/v1/overview")["parcels"][0]["scene"] == "s1"

    # Another platform is another pass, and so is more than ten minutes later.
    for ref, change in (
        ("s3", {"platform": "sentinel-2a", "acquired_at": "2024-06-03T10:11:00Z"}),
        ("s4", {"tile": "t4", "acquired_at": "2024-06-03T10:20:32Z"}),
    ):
        files = uniform_scene(tmp_path / ref, CANOPY)
        service.post_scene({**SCENE, "ref": ref, **change}, files)
    assert service.series("A")["scene"] == ["s1", "s3", "s4"]


def noise(seed: int, rows: int = 40, cols: int = 40) -> NDArray[np.uint16]:
    return np.random.default_rng(seed).integers(1_200, 6_000, (rows, cols)).astype(np.uint16)


def all_figures(service: Service, parcel: str, scene: str, index: str) -> dict[str, list[Any]]:
    """Return the figures of the one look that a scene gave."""
    stats = "mean,sd,min,p10,p50,p90,max,pixels,valid_share"
    columns = service.series(parcel, index, stat=stats, min_valid=0)
    place = columns["scene"].index(scene)
    return {stat: columns[stat][place] for stat in stats.split(",")}


def test_a_stack_with_skipped_bands_gives_the_figures_of_separate_files(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5.3, row=5.6, size=12.7))
    roles = ("green", "red", "nir")
    bands = {role: noise(seed) for seed, role in enumerate(roles)}
    classes = np.where(noise(9) < 2_000, 9, 4).astype(np.uint16)
    files = {role: write_band(tmp_path / f"{role}.tif", band) for role, band in bands.items()}
    quality = write_band(tmp_path / "quality.tif", classes.astype(np.uint8))
    assert service.post_scene(SCENE, {**files, "quality": quality}).json()["state"] == "done"

    skipped = noise(7)
    stack = np.stack([bands["nir"], skipped, bands["red"], classes, bands["green"]])
    stacked = {
        **SCENE,
        "ref": "stacked",
        "acquired_at": "2024-06-08T10:10:31Z",
        "stack": ["nir", None, "red", "quality", "green"],
    }
    file = write_band(tmp_path / "stack.tif", stack)
    assert service.post_scene(stacked, {"stack": file}).json()["state"] == "done"
    # The quality layer may also be a part beside the stack.
    beside = {
        **stacked,
        "ref": "beside",
        "acquired_at": "2024-06-13T10:10:31Z",
        "stack": ["nir", None, "red", None, "green"],
    }
    answer = service.post_scene(beside, {"stack": file, "quality": quality})
    assert answer.json()["state"] == "done"
    for index in ("ndvi", "evi2", "savi", "ndwi"):
        apart = all_figures(service, "A", "s1", index)
        assert 0.5 < apart["valid_share"] < 0.95
        assert all_figures(service, "A", "stacked", index) == apart
        assert all_figures(service, "A", "beside", index) == apart


def test_the_only_near_infrared_band_is_nir_by_whichever_name_it_was_sent(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    red = write_band(tmp_path / "red.tif", np.full((40, 40), 400, dtype=np.uint16))
    nir = write_band(tmp_path / "nir.tif", np.full((40, 40), 4_200, dtype=np.uint16))
    by_role = {role: {"scale": 0.0001, "offset": 0.0} for role in ("red", "nir08")}
    sent = {**GENERIC, "scaling": by_role}
    answer = service.post_scene(sent, {"red": red, "nir08": nir})
    assert answer.json()["indices"]["ndvi"] == {"state": "measured", "parcels_out_of_range": 0}
    assert service.series("A")["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]
    assert service.series("A", "nir")["mean"] == [pytest.approx(0.42, abs=1e-6)]
    assert service.series("A", "nir08")["mean"] == []
    # It is the same scene by the other name.
    renamed = {**GENERIC, "scaling": {"red": by_role["red"], "nir": by_role["nir08"]}}
    assert service.post_scene(renamed, {"red": red, "nir": nir}).status_code == 200
    stacked = {
        **sent,
        "ref": "g2",
        "acquired_at": "2024-06-08T10:10:31Z",
        "stack": ["red", "nir08"],
    }
    both = np.stack([np.full((40, 40), n, dtype=np.uint16) for n in (400, 4_200)])
    service.post_scene(stacked, {"stack": write_band(tmp_path / "stack.tif", both)})
    assert service.series("A", "nir")["scene"] == ["g1", "g2"]


def test_sentinel_2_keeps_its_two_near_infrared_bands_apart(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    both = uniform_scene(tmp_path / "both", {**CANOPY, "nir08": 0.40})
    service.post_scene(SCENE, both)
    assert service.series("A", "nir")["mean"] == [pytest.approx(0.42, abs=1e-6)]
    assert service.series("A", "nir08")["mean"] == [pytest.approx(0.40, abs=1e-6)]
    assert service.series("A")["mean"] == [pytest.approx(CANOPY_NDVI, abs=1e-6)]


def test_bands_on_10_and_20_m_are_measured_on_the_finest_grid(
    service: Service, tmp_path: Path
) -> None:
    # Whole cells of 10 m that cut cells of 20 m in half.
    service.put_parcels(square("A", col=3, row=5, size=7))
    nir, red, swir = noise(1), noise(2), noise(3, 20, 20)
    files = {
        "red": write_band(tmp_path / "red.tif", red),
        "nir": write_band(tmp_path / "nir.tif", nir),
        "swir16": write_band(tmp_path / "swir16.tif", swir, cell_m=20),
        "quality": write_band(
            tmp_path / "quality.tif", np.full((20, 20), 4, dtype=np.uint8), cell_m=20
        ),
    }
    assert service.post_scene(SCENE, files).json()["state"] == "done"
    # A coarser cell is taken at the finer cell's centre.
    fine = np.repeat(np.repeat(swir, 2, axis=0), 2, axis=1)
    own = np.s_[5:12, 3:10]
    a, b = nir[own] / 10_000 - 0.1, fine[own] / 10_000 - 0.1
    expected = (a - b) / (a + b)
    figures = all_figures(service, "A", "s1", "ndmi")
    assert figures["pixels"] == pytest.approx(49, abs=1e-3)
    assert figures["mean"] == pytest.approx(expected.mean(), abs=1e-5)
    assert figures["sd"] == pytest.approx(expected.std(), abs=1e-5)


def test_scaling_may_differ_by_role_and_overrides_the_profile_s(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    red = write_band(tmp_path / "red.tif", np.full((40, 40), 90, dtype=np.uint8))
    nir = write_band(tmp_path / "nir.tif", np.full((40, 40), 2.5, dtype=np.float32))
    by_role = {"red": {"scale": 0.001, "offset": 0.01}, "nir": {"scale": 0.2, "offset": -0.1}}
    service.post_scene({**GENERIC, "scaling": by_role}, {"red": red, "nir": nir})
    # red = 0.09 + 0.01, nir = 0.5 - 0.1.
    assert service.series("A", "red")["mean"] == [pytest.approx(0.1, abs=1e-6)]
    assert service.series("A", "nir")["mean"] == [pytest.approx(0.4, abs=1e-6)]
    assert service.series("A")["mean"] == [pytest.approx(0.6, abs=1e-6)]

    # The profile's own scaling stands for the roles that are not named: 1,400 there is 0.04.
    files = uniform_scene(tmp_path / "s2", CANOPY)
    own = {"nir": {"scale": 0.0001, "offset": 0.0}}
    service.post_scene({**SCENE, "acquired_at": "2024-06-08T10:10:31Z", "scaling": own}, files)
    assert service.series("A", "red")["mean"][1] == pytest.approx(0.04, abs=1e-6)
    assert service.series("A", "nir")["mean"][1] == pytest.approx(0.52, abs=1e-6)


def judged_scene(folder: Path) -> dict[str, Path]:
    """Write a scene with one reason to be unseen in each block of 8 by 8 cells of 10 m."""
    files = uniform_scene(folder, CANOPY)
    classes = np.full((20, 20), 4, dtype=np.uint8)
    for block, scl in enumerate((4, 9, 3, 11, 0)):
        classes[0:4, 4 * block : 4 * block + 4] = scl
    classes[4:8, 0:4] = 1
    classes[4, 8] = 10
    classes[4:8, 16:20] = 6
    write_band(files["quality"], classes, cell_m=20)
    for role, value in CANOPY.items():
        numbers = np.full((40, 40), round(value * 10_000 + 1_000), dtype=np.uint16)
        numbers[8:16, 8:16] = 65_535
        write_band(files[role], numbers)
    return files


JUDGED = (
    square("clear", col=0, row=0, size=4, holding="north"),
    square("cloud", col=8, row=0, size=4, holding="north"),
    square("shadow", col=16, row=0, size=4),
    square("snow", col=24, row=0, size=4),
    square("empty", col=32, row=0, size=4),
    square("defective", col=0, row=8, size=4),
    square("too bright", col=8, row=8, size=4),
    square("hazy", col=16, row=8, size=4),
    square("small", col=24, row=8, size=1.5),
    square("water", col=32, row=8, size=4),
    square("over the edge", col=38, row=20, size=4, holding="south"),
    square("outside", col=60, row=20, size=4),
)
UNSEEN = {
    "cloud": "cloud",
    "shadow": "shadow",
    "snow": "snow",
    "empty": "nodata",
    "defective": "saturation",
    "too bright": "saturation",
    "over the edge": "nodata",
}


def test_a_scene_tells_what_was_seen_of_every_parcel_and_why_not(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(*JUDGED)
    report = service.post_scene(SCENE, judged_scene(tmp_path / "s")).json()
    assert report["parcels_in_footprint"] == len(JUDGED) - 1
    assert report["parcels_measured"] == 4
    unseen = {"cloud": 1, "nodata": 2, "saturation": 2, "shadow": 1, "snow": 1}
    assert report["parcels_unseen"] == unseen
    assert report["parcels_small"] == 1
    assert report["indices"]["ndvi"]["state"] == "measured"
    skipped = report["indices"]["nbr2"]
    assert skipped == {"state": "skipped", "reason": "It needs the bands swir16 and swir22."}
    assert set(report["seconds"]) == {"zones", "read_and_observe", "total", "judging"}

    listed = service.get("/v1/scenes/s1/parcels")["parcels"]
    told = {entry["parcel"]: entry for entry in listed}
    assert set(told) == {feature["properties"]["ref"] for feature in JUDGED} - {"outside"}
    reasons = {ref: entry["reason"] for ref, entry in told.items() if entry["state"] == "unseen"}
    assert reasons == UNSEEN
    small = [r for r, e in told.items() if e["is_small"] and e["state"] == "measured"]
    assert small == ["small"]
    for ref, reason in UNSEEN.items():
        if ref != "over the edge":
            assert told[ref][reason] == pytest.approx(1, abs=1e-4)
            assert (told[ref]["valid_share"], told[ref]["pixels"]) == (0, 0)
    # 2 of its 4 columns lie on the tile; the whole parcel is the denominator.
    edge = told["over the edge"]
    shares = ("valid_share", "nodata", "cloud", "shadow", "snow", "saturation", "water")
    assert [edge[share] for share in shares] == pytest.approx([0.5, 0.5, 0, 0, 0, 0, 0], abs=1e-4)
    hazy = told["hazy"]
    assert (hazy["state"], hazy["reason"]) == ("measured", None)
    assert (hazy["valid_share"], hazy["cloud"]) == pytest.approx((0.75, 0.25), abs=1e-4)
    assert told["water"]["water"] == pytest.approx(1, abs=1e-4)
    assert told["small"]["pixels"] == pytest.approx(2.25, abs=1e-3)


def test_the_parcels_of_a_scene_are_filtered_by_state_and_paged(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(*JUDGED)
    service.post_scene(SCENE, judged_scene(tmp_path / "s"))
    everything = service.get("/v1/scenes/s1/parcels")["parcels"]
    for state in ("measured", "unseen"):
        expected = [entry for entry in everything if entry["state"] == state]
        assert service.get("/v1/scenes/s1/parcels", params={"state": state}) == {
            "parcels": expected
        }
        assert paged(service, f"/v1/scenes/s1/parcels?state={state}&limit=3", "parcels") == expected
    assert paged(service, "/v1/scenes/s1/parcels?limit=4", "parcels") == everything
    refused = service.call("GET", "/v1/scenes/s1/parcels", params={"state": "seen"})
    assert problem(refused) == (422, "/problems/invalid-parameter")
    assert refused.json()["errors"][0]["parameter"] == "state"


def paged(service: Service, path: str, noun: str) -> list[Any]:
    """Follow the links of a list; every page but the last is full."""
    found: list[Any] = []
    limit = int(httpx.URL(path).params["limit"])
    while True:
        answer = service.call("GET", path)
        page = answer.json()[noun]
        found += page
        if "next" not in answer.links:
            assert 0 < len(page) <= limit
            return found
        assert len(page) == limit
        path = answer.links["next"]["url"]


def test_a_key_limited_to_holdings_sees_its_own_parcels_and_sends_no_scenes(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(*JUDGED)
    files = judged_scene(tmp_path / "s")
    service.post_scene(SCENE, files)
    key = service.key("read", "ingest", holdings=["north"])
    report = service.get("/v1/scenes/s1", key=key)
    assert report["parcels_in_footprint"] == 2
    assert report["parcels_measured"] == 1
    assert report["parcels_unseen"] == {"cloud": 1}
    assert report["parcels_small"] == 0
    assert service.get("/v1/scenes", key=key)["scenes"] == [report]
    listed = service.get("/v1/scenes/s1/parcels", key=key)["parcels"]
    assert [entry["parcel"] for entry in listed] == ["clear", "cloud"]

    for answer in (
        service.post_scene({**SCENE, "ref": "s2"}, files, key=key),
        service.call("POST", "/v1/scenes/s1/retry", key=key),
        service.call("DELETE", "/v1/scenes/s1", key=key),
    ):
        assert problem(answer) == (403, "/problems/key-limited")
    reader = service.key("read")
    for answer in (
        service.post_scene({**SCENE, "ref": "s2"}, files, key=reader),
        service.call("DELETE", "/v1/scenes/s1", key=reader),
    ):
        assert problem(answer) == (403, "/problems/scope-missing")
    assert service.get("/v1/scenes/s1")["state"] == "done"
    assert counted(service, Scene) == 1


def _dated(ref: str, day: int, **members: Any) -> dict[str, Any]:
    return {**SCENE, "ref": ref, "acquired_at": f"2024-06-{day:02}T10:10:31Z", **members}


def bbox_around(x: float, y: float) -> str:
    to_degrees = Transformer.from_crs("EPSG:32633", "OGC:CRS84", always_xy=True).transform
    lon, lat = to_degrees(x, y)
    return f"{lon - 1e-4},{lat - 1e-4},{lon + 1e-4},{lat + 1e-4}"


def test_scenes_are_listed_newest_first_filtered_and_paged(
    service: Service, tmp_path: Path
) -> None:
    for number, scene in enumerate((_dated("a", 3), _dated("b", 8), _dated("c", 13))):
        service.post_scene(scene, uniform_scene(tmp_path / str(number), CANOPY))
    service.post_scene(_dated("bad", 18), failing_scene(tmp_path / "bad"))
    # 40 km further east.
    east = (ORIGIN[0] + 40_000, ORIGIN[1])
    band = np.full((40, 40), 3_000, dtype=np.uint16)
    away = {
        role: write_band(tmp_path / f"{role}.tif", band, origin=east) for role in ("red", "nir")
    }
    service.post_scene({**GENERIC, "ref": "far", "acquired_at": "2024-06-23T10:00:00Z"}, away)
    service.call("DELETE", "/v1/scenes/b")

    def refs(**params: Any) -> list[str]:
        return [scene["ref"] for scene in service.get("/v1/scenes", params=params)["scenes"]]

    assert refs() == ["far", "bad", "c", "b", "a"]
    assert refs(**{"from": "2024-06-08T10:10:31Z", "to": "2024-06-18T10:10:31Z"}) == ["c", "b"]
    assert refs(**{"from": "2024-06-13"}) == ["far", "bad", "c"]
    assert refs(to="2024-06-08") == ["a"]
    assert refs(sensor="generic") == ["far"]
    assert refs(state="withdrawn") == ["b"]
    # Without parcels no quality pixel is read, and so none is found wrong.
    assert refs(state="done", sensor="sentinel-2-l2a") == ["bad", "c", "a"]
    assert refs(bbox=bbox_around(east[0] + 200, east[1] - 200)) == ["far"]
    assert refs(bbox=bbox_around(ORIGIN[0] + 200, ORIGIN[1] - 200)) == ["bad", "c", "b", "a"]
    assert refs(bbox=bbox_around(ORIGIN[0] - 9_000, ORIGIN[1])) == []
    listed = paged(service, "/v1/scenes?limit=2", "scenes")
    assert [scene["ref"] for scene in listed] == ["far", "bad", "c", "b", "a"]


def test_a_list_refuses_what_it_does_not_take(service: Service) -> None:
    for parameter, value in (
        ("from", "2024-06-03T10:00:00"),
        ("bbox", "1,2,3"),
        ("state", "ready"),
        ("since", "2024-06-03"),
        ("limit", "0"),
        ("limit", "1001"),
        ("cursor", "nonsense"),
    ):
        refused = service.call("GET", "/v1/scenes", params={parameter: value})
        assert problem(refused) == (422, "/problems/invalid-parameter"), parameter
        assert [error["parameter"] for error in refused.json()["errors"]] == [parameter]


def test_an_answer_is_held_for_a_caller_that_prefers_to_wait(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    files = uniform_scene(tmp_path / "s", CANOPY)
    held = service.post_scene(SCENE, files, wait=30)
    assert (held.status_code, held.json()["state"]) == (200, "done")
    assert held.headers["Location"] == "/v1/scenes/s1"
    assert held.json() == service.get("/v1/scenes/s1")
    later: Mapping[str, Any] = {**SCENE, "ref": "s2", "acquired_at": "2024-06-08T10:10:31Z"}
    assert service.post_scene(later, files, wait=0).status_code == 202
    assert settled(service, "s2")["state"] == "done"
    missing = service.call("GET", "/v1/scenes/s3", headers={"Prefer": "wait=30"})
    assert problem(missing) == (404, "/problems/scene-not-found")
