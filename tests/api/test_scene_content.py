"""What a scene was made of, over HTTP, for senders who ask before they send."""

import hashlib
from pathlib import Path

from tests.serving import SCENE, Service, uniform_scene


def test_a_sender_learns_the_digests_of_what_is_there(service: Service, tmp_path: Path) -> None:
    files = uniform_scene(tmp_path / "s", {"red": 0.05, "nir": 0.4})
    scaling = {"red": {"scale": 1e-4, "offset": -0.1}}
    scene = {**SCENE, "acquired_at": "2024-06-03T12:10:31+02:00", "scaling": scaling}
    assert service.post_scene(scene, files, wait=0).status_code == 202
    content = service.get("/v1/scenes/s1/content", key=service.key("ingest"))
    assert content["files"] == {
        part: {
            "sha256": hashlib.sha256(path.read_bytes()).hexdigest(),
            "size": path.stat().st_size,
        }
        for part, path in files.items()
    }
    told = {name: value for name, value in SCENE.items() if name != "ref"}
    assert content["scene"] == {**told, "scaling": scaling}
    assert (content["ref"], len(content["digest"])) == ("s1", 64)
    assert service.get("/v1/scenes/s1", headers={"Prefer": "wait=30"})["state"] == "done"
    assert service.get("/v1/scenes/s1/content")["state"] == "done"


def test_the_digests_are_for_senders_who_see_all(service: Service) -> None:
    path = "/v1/scenes/s1/content"
    assert service.call("GET", path).json()["type"] == "/problems/scene-not-found"
    reader = service.call("GET", path, key=service.key("read"))
    assert (reader.status_code, reader.json()["type"]) == (403, "/problems/scope-missing")
    narrow = service.call("GET", path, key=service.key("ingest", holdings=["north"]))
    assert (narrow.status_code, narrow.json()["type"]) == (403, "/problems/key-limited")
