"""Parcels that nobody has seen for a while: found, told of once, with what hid them."""

from collections.abc import Iterator
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from service.clock import now
from service.settings import Settings
from tests.hooks import Hook, deliveries, hooked, open_to_loopback, register
from tests.serving import SCENE, Service, serving, square, uniform_scene, write_band

HIDDEN, SEEN = "hidden", "seen"


@pytest.fixture
def told(settings: Settings) -> Iterator[tuple[Service, Hook, dict[str, Any]]]:
    """A service with two parcels, of two holdings, and a receiver of all that is unseen."""
    with hooked() as hook, serving(open_to_loopback(settings)) as service:
        service.put_parcels(
            square(HIDDEN, col=4, row=4, holding="north"),
            square(SEEN, col=24, row=4, holding="south"),
        )
        yield service, hook, register(service, hook.url, "parcel.unseen")


def days_ago(days: float) -> datetime:
    return (now() - timedelta(days=days)).replace(microsecond=0)


def post(
    service: Service, folder: Path, at: datetime, *, clouds: bool, platform: str = "sentinel-2b"
) -> str:
    """Post a scene in which the hidden parcel is in cloud, or nothing is; return its ref."""
    files = uniform_scene(folder / f"{at:%m%d}", {"red": 0.1, "nir": 0.4})
    if clouds:
        classes = np.full((20, 20), 4, dtype=np.uint8)
        classes[:, :9] = 9
        files["quality"] = write_band(folder / f"{at:%m%d}.tif", classes, cell_m=20)
    ref = f"{at:%m%d}"
    scene = {
        **SCENE,
        "ref": ref,
        "acquired_at": at.isoformat(),
        "platform": platform,
        "tile": "t1",
    }
    assert service.post_scene(scene, files).json()["state"] == "done"
    return ref


def unseen(service: Service, days: int, **request: Any) -> dict[str, Any]:
    """Return what the filter finds, by parcel."""
    params = {"unseen_days": days, **request.pop("params", {})}
    features = service.get("/v1/parcels", params=params, **request)["features"]
    return {feature["id"]: feature["properties"]["unseen"] for feature in features}


def test_parcels_without_a_look_in_so_many_days_are_found_with_what_hid_them(
    told: tuple[Service, Hook, dict[str, Any]], tmp_path: Path
) -> None:
    service, _, _ = told
    nothing = {"last_look_at": None, "passes": 0, "reasons": {}}
    assert unseen(service, 10) == {HIDDEN: nothing, SEEN: nothing}
    seen_at = days_ago(15)
    post(service, tmp_path, seen_at, clouds=False)
    post(service, tmp_path, days_ago(8), clouds=True)
    post(service, tmp_path, days_ago(3), clouds=True)
    last = seen_at.isoformat().replace("+00:00", "Z")
    hidden = {"last_look_at": last, "passes": 2, "reasons": {"cloud": 2}}
    assert unseen(service, 10) == {HIDDEN: hidden}
    assert unseen(service, 5) == {HIDDEN: {**hidden, "passes": 1, "reasons": {"cloud": 1}}}
    assert unseen(service, 16) == {}
    assert set(unseen(service, 2)) == {HIDDEN, SEEN}
    # It combines with the other filters, and with what the key may see.
    assert unseen(service, 10, params={"holding": "south"}) == {}
    assert set(unseen(service, 10, params={"holding": "north"})) == {HIDDEN}
    assert unseen(service, 10, key=service.key("read", holdings=["south"])) == {}
    plain = service.get("/v1/parcels")["features"][0]["properties"]
    assert "unseen" not in plain
    for value in ("0", "-1", "3.5", "many"):
        answer = service.call("GET", "/v1/parcels", params={"unseen_days": value})
        assert answer.status_code == 422
        assert answer.json()["errors"][0]["parameter"] == "unseen_days"


def test_a_spell_without_a_look_is_told_once(
    told: tuple[Service, Hook, dict[str, Any]], tmp_path: Path
) -> None:
    service, hook, webhook = told
    seen_at = days_ago(60)
    post(service, tmp_path, seen_at, clouds=False)
    # Not yet so long, then 20 days, then still the same spell.
    post(service, tmp_path, days_ago(45), clouds=True)
    assert deliveries(service, webhook) == []
    post(service, tmp_path, days_ago(40), clouds=True)
    post(service, tmp_path, days_ago(35), clouds=True)
    event = hook.event()
    assert (event["type"], event["subject"]) == ("app.furrowlight.parcel.unseen", HIDDEN)
    link = event["data"].pop("link")
    assert link.endswith(f"/v1/parcels/{HIDDEN}")
    assert event["data"] == {
        "parcel": HIDDEN,
        "holding": "north",
        "last_look_at": seen_at.isoformat().replace("+00:00", "Z"),
        "passes": 2,
        "reasons": {"cloud": 2},
    }
    # A look ends the spell; the next one is another.
    post(service, tmp_path, days_ago(30), clouds=False)
    post(service, tmp_path, days_ago(20), clouds=True)
    assert len(deliveries(service, webhook)) == 1
    post(service, tmp_path, days_ago(9), clouds=True)
    again = hook.event()
    assert (again["data"]["passes"], again["subject"]) == (2, HIDDEN)
    assert again["id"] != event["id"]
    # What comes late and lies before the newest look tells nothing.
    post(service, tmp_path, days_ago(32), clouds=True)
    assert len(deliveries(service, webhook)) == 2


def test_a_parcel_that_nobody_ever_saw_is_told_of_once(
    told: tuple[Service, Hook, dict[str, Any]], tmp_path: Path
) -> None:
    service, hook, webhook = told
    limited = register(service, hook.url, "parcel.unseen", holdings=["south"])
    for days in (50, 30, 12, 65):
        post(service, tmp_path, days_ago(days), clouds=True)
    event = hook.event()
    assert (event["subject"], event["data"]["last_look_at"]) == (HIDDEN, None)
    assert len(deliveries(service, webhook)) == 1
    # It is no business of those who asked for another holding.
    assert deliveries(service, limited) == []


def test_a_parcel_seen_in_a_second_tile_of_the_pass_is_not_told_of(
    told: tuple[Service, Hook, dict[str, Any]], tmp_path: Path
) -> None:
    service, _, webhook = told
    post(service, tmp_path, days_ago(40), clouds=False)
    at = days_ago(3)
    post(service, tmp_path, at, clouds=False)
    files = uniform_scene(tmp_path / "second", {"red": 0.1, "nir": 0.4}, scl=9)
    other = {"ref": "other", "acquired_at": at.isoformat(), "tile": "t2"}
    assert service.post_scene({**SCENE, **other}, files).json()["state"] == "done"
    assert deliveries(service, webhook) == []
    assert unseen(service, 20) == {}
