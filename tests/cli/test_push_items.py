"""STAC Items pushed from a terminal: with their files, or for the service to fetch them."""

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from service.settings import Settings
from tests.conftest import fresh_settings
from tests.pushing import pushed
from tests.serving import Service, serving, square, uniform_scene
from tests.stac_items import S2_BANDS, sentinel_2

NAMES = {"red": "B04", "nir": "B08", "quality": "SCL"}
BANDS = {name: S2_BANDS[name] for name in ("B04", "B08")}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A folder of one scene's files, named as its Item names them."""
    root = tmp_path / "files"
    for part, path in uniform_scene(root, {"red": 0.04, "nir": 0.42}).items():
        path.rename(root / f"{NAMES[part]}.tif")
    return root


@pytest.fixture
def service(request: pytest.FixtureRequest, tmp_path: Path, folder: Path) -> Iterator[Service]:
    """The service, which may read files of that folder."""
    settings = fresh_settings(request, "sqlite", tmp_path / "data")
    allowed = Settings.model_validate({**dict(settings), "asset_folders": str(folder)})
    with serving(allowed) as running:
        running.put_parcels(square("A", col=5, row=5))
        yield running


def write_item(path: Path, *, base: str, **properties: Any) -> Path:
    """Write an Item whose files have relative addresses, and which says where it stands."""
    item = sentinel_2(bands=BANDS, **properties)
    for asset in item["assets"].values():
        asset["href"] = asset["href"].rpartition("/")[2]
    item["links"] = [{"rel": "self", "href": f"{base}/item.json"}]
    path.parent.mkdir(exist_ok=True)
    path.write_text(json.dumps(item), "utf-8")
    return path


def test_files_beside_an_item_are_sent_and_are_not_sent_again(
    service: Service, folder: Path, tmp_path: Path
) -> None:
    item = write_item(folder / "item.json", base="https://elsewhere.example/33")
    sent = pushed(service, tmp_path, "--stac", "--wait", item)
    assert (sent.code, sent.outcomes) == (0, ["sent"]), sent.told
    assert sent.lines[0]["parts"] == {"red": "B04", "nir": "B08", "quality": "scl"}
    assert service.series("A", "red")["mean"] == pytest.approx([0.04], abs=1e-6)
    assert pushed(service, tmp_path, "--stac", folder).outcomes == ["already-there"]


def test_an_item_whose_files_are_elsewhere_is_posted_for_the_service_to_fetch(
    service: Service, folder: Path, tmp_path: Path
) -> None:
    item = write_item(tmp_path / "items" / "item.json", base=folder.as_uri())
    sent = pushed(service, tmp_path, "--stac", "--wait", tmp_path / "items")
    assert (sent.code, sent.outcomes) == (0, ["sent"]), sent.told
    assert service.series("A", "red")["mean"] == pytest.approx([0.04], abs=1e-6)
    # Nothing is fetched again: the files could be gone.
    (folder / "B04.tif").rename(folder / "B04.away")
    again = pushed(service, tmp_path, "--stac", item)
    assert (again.code, again.outcomes) == (0, ["already-there"]), again.told
    # To replace is to have them fetched, whatever they hold by now.
    asked = pushed(service, tmp_path, "--stac", "--replace", item)
    assert (asked.code, asked.outcomes) == (3, ["refused"]), asked.told
    (folder / "B04.away").rename(folder / "B04.tif")
    same = pushed(service, tmp_path, "--stac", "--replace", item)
    assert (same.code, same.outcomes) == (0, ["already-there"]), same.told
    uniform_scene(tmp_path / "new", {"red": 0.10, "nir": 0.42})["red"].rename(folder / "B04.tif")
    new = pushed(service, tmp_path, "--stac", "--replace", "--wait", item)
    assert (new.code, new.outcomes) == (0, ["sent"]), new.told
    assert service.series("A", "red")["mean"] == pytest.approx([0.10], abs=1e-6)


def test_what_can_not_be_read_as_a_scene_is_refused(
    service: Service, folder: Path, tmp_path: Path
) -> None:
    unknown = {"scaling": None, "s2__processing_baseline": None}
    write_item(folder / "a.json", base="https://elsewhere.example/33", **unknown)
    (folder / "b.json").write_text('{"type": "Feature"', "utf-8")
    write_item(tmp_path / "half" / "item.json", base="https://elsewhere.example/33")
    (tmp_path / "half" / "B04.tif").write_bytes((folder / "B04.tif").read_bytes())
    refused = pushed(service, tmp_path, "--stac", folder, tmp_path / "half")
    assert (refused.code, refused.outcomes) == (3, ["refused"] * 3), refused.told
    assert "The Item's files of nir, quality are not here" in refused.lines[2]["detail"]
    without = pushed(service, tmp_path, folder / "a.json")
    assert (without.code, without.outcomes) == (3, ["refused"])
    assert "A STAC Item goes with --stac" in without.lines[0]["detail"]
    assert service.get("/v1/scenes")["scenes"] == []
