"""The same calls on SQLite and on PostgreSQL: the same answers, but for ids and times recorded."""

import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from service.api.wire import written
from service.clock import now
from tests.conftest import fresh_settings
from tests.serving import SCENE, Service, serving, square, uniform_scene, write_band

TOLD_APART = {"recorded_at", "received_at", "changed_at", "created_at", "retired_at", "seconds"}
"""Members that tell when something was done, or how fast; and those of a key below."""
OF_A_KEY = {"id", "secret", "revoked_at"}
HEADERS = ("Content-Type", "Location", "Retry-After", "Vary", "Cache-Control", "WWW-Authenticate")
STATS = "mean,sd,min,p10,p50,p90,max,valid_share,pixels"
CANOPY = {"blue": 0.03, "green": 0.06, "red": 0.04, "nir": 0.42, "swir16": 0.22}


def masked(value: Any, names: set[str]) -> Any:
    """Return an answer in which members of these names are only told to be there or null."""
    if isinstance(value, dict):
        return {
            name: (None if own is None else "there") if name in names else masked(own, names)
            for name, own in value.items()
        }
    return [masked(item, names) for item in value] if isinstance(value, list) else value


class Script:
    """Makes calls of one deployment, and keeps what was answered."""

    def __init__(self, service: Service) -> None:
        self.service = service
        self.answers: list[tuple[str, Any]] = []

    def call(self, method: str, path: str, **request: Any) -> httpx.Response:
        answer = self.service.call(method, path, **request)
        whose = " by another key" if "key" in request else ""
        self.keep(f"{method} {path} {request.get('params', '')}{whose}", answer)
        return answer

    def post_scene(self, scene: Mapping[str, Any], files: Mapping[str, Path]) -> None:
        self.keep(f"POST scene {scene['ref']}", self.service.post_scene(scene, files))

    def keep(self, what: str, answer: httpx.Response) -> None:
        """Keep an answer: status, headers, whether more pages follow, and body."""
        told = {name: answer.headers.get(name) for name in HEADERS}
        names = TOLD_APART | (OF_A_KEY if "/v1/keys" in what else set())
        is_json = "json" in answer.headers.get("Content-Type", "")
        body = masked(json.loads(answer.text), names) if is_json else answer.text
        self.answers.append((what, [answer.status_code, told, "next" in answer.links, body]))

    def pages(self, path: str) -> None:
        """Follow a list to its end; the cursors hold row ids, so they are not compared."""
        answer = self.call("GET", path)
        while "next" in answer.links:
            answer = self.service.call("GET", answer.links["next"]["url"])
            self.keep(f"a further page of {path}", answer)


def noisy_scene(folder: Path, seed: int) -> dict[str, Path]:
    """Write a scene with texture, and every class of the quality layer in blocks."""
    files = uniform_scene(folder, CANOPY)
    random = np.random.default_rng(seed)
    for role in CANOPY:
        numbers = random.integers(1_100, 6_000, (40, 40)).astype(np.uint16)
        numbers[30:32, 30:32] = 0
        write_band(files[role], numbers)
    classes = np.full((20, 20), 4, dtype=np.uint8)
    classes[:2, :12] = np.arange(12)
    classes[12:, :4] = 9
    write_band(files["quality"], classes, cell_m=20)
    return files


def keep_parcels(script: Script) -> None:
    features = [
        square("Å-1", col=4.3, row=4.7, size=9, holding="north", crop="barley", tags=["wet", "a"]),
        square("B", col=20, row=20, size=8, holding="south", name="Long strip"),
        square("C", col=0, row=0, size=20.5, holding="north"),
        square("edge", col=36, row=10, size=9),
        square("cloud", col=0, row=26, size=6),
        square("off", col=300, row=300),
    ]
    body = {"type": "FeatureCollection", "features": features}
    script.call("PUT", "/v1/parcels", json=body)
    script.call("PUT", "/v1/parcels", json=body)
    moved = square("B", col=20.5, row=20, size=8, valid_from="2024-06-05T00:00:00Z")
    crossed = square("X", col=1, row=1)
    crossed["geometry"]["coordinates"][0][1:3] = reversed(
        crossed["geometry"]["coordinates"][0][1:3]
    )
    for sent in ([moved], [crossed], [features[0], features[0]]):
        script.call("PUT", "/v1/parcels", json={**body, "features": sent})
    lenient = {"Prefer": "handling=lenient"}
    mixed = {**body, "features": [crossed, square("D", col=30, row=2, size=3)]}
    script.call("PUT", "/v1/parcels", json=mixed, headers=lenient)
    season = {"parcel": "B", "crop": "rye", "from_on": "2023-10-01", "until_on": "2024-06-05"}
    script.call("POST", "/v1/seasons", json=[season, {"parcel": "C", "crop": "oats", "year": 2024}])
    script.call("POST", "/v1/seasons", json={**season, "crop": "oats", "from_on": "2024-01-01"})


def keep_scenes(script: Script, folder: Path) -> None:
    def at(day: int, ref: str, **members: Any) -> dict[str, Any]:
        return {**SCENE, "ref": ref, "acquired_at": f"2024-06-{day:02}T10:10:31.5Z", **members}

    scenes = {name: noisy_scene(folder / name, seed) for seed, name in enumerate("abcdefg")}
    script.post_scene(at(3, "a"), scenes["a"])
    script.post_scene(at(3, "a"), scenes["a"])
    script.post_scene(at(3, "a"), scenes["b"])
    script.post_scene(at(3, "twin"), scenes["a"])
    script.post_scene(at(3, "rival"), scenes["b"])
    script.post_scene(at(8, "b"), scenes["b"])
    script.post_scene(at(8, "c", tile="t2"), scenes["c"])
    script.post_scene(at(13, "d"), scenes["d"])
    script.post_scene(at(18, "e"), scenes["e"])
    write_band(scenes["f"]["quality"], np.full((20, 20), 12, dtype=np.uint8), cell_m=20)
    script.post_scene(at(23, "f"), scenes["f"])
    script.call("POST", "/v1/scenes/f/retry", headers={"Prefer": "wait=30"})
    script.call("POST", "/v1/scenes/e/retry")
    script.post_scene({**at(28, "g"), "sensor": "none"}, scenes["g"])


def change_scenes(script: Script, folder: Path) -> None:
    known = written(now())
    script.post_scene({**SCENE, "ref": "a", "replace": True}, noisy_scene(folder / "h", 8))
    later = {**SCENE, "ref": "d2", "acquired_at": "2024-06-13T10:11:00Z", "replace": True}
    script.post_scene(later, noisy_scene(folder / "i", 9))
    script.call("DELETE", "/v1/scenes/e")
    script.call("DELETE", "/v1/scenes/b")
    script.call("DELETE", "/v1/parcels/D")
    query = {"index": "ndvi,ndmi,red", "stat": "mean,sd,valid_share", "min_valid": 0}
    for ref in ("Å-1", "B", "C"):
        answer = script.service.call(
            "GET", f"/v1/parcels/{ref}/series", params={**query, "as_of": known}
        )
        script.keep(f"series of {ref} as known before", answer)


BOX = "15.001,49.64,15.004,49.651"
LISTS = (
    "/v1/parcels",
    "/v1/scenes",
    "/v1/indices",
    "/v1/sensors",
    "/v1/keys",
    f"/v1/parcels?bbox={BOX}",
    f"/v1/scenes?bbox={BOX}",
    "/v1/parcels?tag=wet",
    "/v1/scenes?state=withdrawn",
    "/v1/scenes?from=2024-06-08&to=2024-06-14",
)


def read_all(script: Script) -> None:
    for path in LISTS:
        script.call("GET", path)
    for path in ("/v1/parcels?limit=2", "/v1/scenes?limit=3", "/v1/scenes/a/parcels?limit=2"):
        script.pages(path)
    for ref in ("Å-1", "B", "C", "edge", "cloud", "off", "D", "missing"):
        for page in ("", "/boundaries", "/seasons", "/series"):
            script.call("GET", f"/v1/parcels/{ref}{page}")
        query = {"stat": STATS, "min_valid": 0}
        script.call("GET", f"/v1/parcels/{ref}/series", params=query)
        script.call("GET", f"/v1/parcels/{ref}/series", params={**query, "format": "csv"})
    for ref in ("a", "b", "c", "d", "d2", "e", "f", "missing"):
        script.call("GET", f"/v1/scenes/{ref}")
        script.call("GET", f"/v1/scenes/{ref}/parcels")
    for params in ({}, {"index": "nir"}, {"at": "2024-06-09"}, {"holding": "north"}):
        for form in ("json", "csv"):
            script.call("GET", "/v1/overview", params={**params, "format": form})
    script.call("GET", "/v1/overview", params={"format": "geojson", "at": "2024-06-04"})


def refuse_all(script: Script) -> None:
    south = script.service.key("read", "manage", holdings=["south"])
    for path in (
        "/v1/parcels",
        "/v1/parcels/C",
        "/v1/overview",
        "/v1/scenes",
        "/v1/scenes/a/parcels",
    ):
        script.call("GET", path, key=south)
    taken = {"type": "FeatureCollection", "features": [square("C", col=1, row=1, holding="south")]}
    script.call("PUT", "/v1/parcels", json=taken, key=south)
    script.call("GET", "/v1/scenes", key="fl_wrong")
    script.call("DELETE", "/v1/scenes/a", key=south)
    script.call("GET", "/v1/parcels/C/series", params={"index": "ndvy"})
    script.call("GET", "/v1/nothing")
    script.call("PATCH", "/v1/parcels/C")
    sent = {"label": "reader", "scopes": ["read"], "holdings": ["north"]}
    script.call("POST", "/v1/keys", json=sent)
    again = {"Idempotency-Key": "once", "Content-Type": "application/json"}
    for label in ("reader", "reader", "writer"):
        body = json.dumps({**sent, "label": label})
        script.call("POST", "/v1/keys", content=body, headers=again)


def answers_of(service: Service, folder: Path) -> list[tuple[str, Any]]:
    script = Script(service)
    keep_parcels(script)
    keep_scenes(script, folder)
    read_all(script)
    change_scenes(script, folder)
    read_all(script)
    refuse_all(script)
    return script.answers


def test_both_databases_give_identical_answers_to_the_same_calls(
    request: pytest.FixtureRequest, tmp_path: Path
) -> None:
    # One after the other: the queue engine is one to a process.
    answers: dict[str, list[tuple[str, Any]]] = {}
    for kind in ("sqlite", "postgresql"):
        settings = fresh_settings(request, kind, tmp_path / kind)
        with serving(settings) as service:
            assert service.sessions.engine.dialect.name == kind
            answers[kind] = answers_of(service, tmp_path / f"files-{kind}")
    for ours, theirs in zip(answers["sqlite"], answers["postgresql"], strict=True):
        assert ours == theirs
    check_is_telling(answers["sqlite"])


def check_is_telling(answers: list[tuple[str, Any]]) -> None:
    """Check that the script reached what it means to compare: no error of ours, many kinds."""
    statuses = [answer[0] for _, answer in answers]
    assert {200, 201, 202, 401, 403, 404, 405, 409, 422} >= set(statuses)
    assert set(statuses) >= {200, 201, 401, 403, 404, 405, 409, 422}
    found: Callable[[str], Any] = dict(answers).__getitem__
    states = {scene["ref"]: scene["state"] for scene in found("GET /v1/scenes ")[3]["scenes"]}
    assert states == {
        "a": "done",
        "b": "withdrawn",
        "c": "done",
        "d": "superseded",
        "d2": "done",
        "e": "withdrawn",
        "f": "failed",
    }
    query = {"stat": STATS, "min_valid": 0, "format": "csv"}
    text = found(f"GET /v1/parcels/C/series {query}")[3]
    assert text.count("\n") > 15
    unseen = found("GET /v1/scenes/a/parcels ")[3]["parcels"]
    assert {entry["state"] for entry in unseen} == {"measured", "unseen"}
