"""Crops are the user's own words; small ones are compared in a group."""

from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
import pytest

from tests.judged_land import problem
from tests.serving import Service, square

FIRST = datetime(2024, 5, 20, 10, 30, tzinfo=UTC)
CROPS = {f"S{n}": "spelt" for n in range(6)} | {f"E{n}": "emmer" for n in range(5)}


@pytest.fixture
def settled(service: Service) -> Service:
    """Six parcels of one new crop and five of another, two holdings, three looks."""
    parcels = [
        square(ref, col=12 * at, row=0, holding="north" if crop == "spelt" else "south")
        for at, (ref, crop) in enumerate(CROPS.items())
    ]
    service.put_parcels(*parcels)
    seasons = [{"parcel": ref, "crop": crop, "year": 2024} for ref, crop in CROPS.items()]
    assert service.call("POST", "/v1/seasons", json=seasons).status_code == 200
    look(service, range(3))
    return service


def look(service: Service, numbers: range, *, falls: str = "") -> None:
    """Send looks at all parcels; one of them loses its green from the second look on."""
    rows = []
    for number in numbers:
        at = FIRST + number * timedelta(days=5)
        noise = np.random.default_rng(number).normal(0, 0.004, len(CROPS))
        for ref, error in zip(CROPS, noise, strict=True):
            green = 0.3 if ref == falls and number > 0 else 0.8
            rows.append(
                {
                    "parcel": ref,
                    "index": "ndvi",
                    "observed_at": at.isoformat(),
                    "mean": round(green + float(error), 4),
                }
            )
    judged(service, rows)


def judged(service: Service, rows: list[dict[str, Any]]) -> None:
    answer = service.call(
        "POST",
        "/v1/observations",
        params={"assess": "true"},
        json=rows,
        headers={"Prefer": "wait=60"},
    )
    assert answer.status_code == 200, answer.text


def put(service: Service, groups: Any, **request: Any) -> Any:
    return service.call("PUT", "/v1/crops", json={"groups": groups}, **request)


def unjudged(service: Service) -> list[str | None]:
    """Return why looks at two of the parcels were not judged, None where they were."""
    found = []
    for parcel in ("S0", "E0"):
        found += service.series(parcel, **{"with": "departure"})["unjudged"]
    return found


def test_small_crops_are_compared_under_their_group(settled: Service) -> None:
    # Neither has a past, and neither has eight parcels: whatever happens, nothing is judged.
    look(settled, range(3, 6), falls="E3")
    assert settled.get("/v1/alerts")["alerts"] == []
    assert set(unjudged(settled)) == {"new crop with fewer than 8 parcels in the pass"}
    groups = {"spelt": "hulled wheat", "emmer": "hulled wheat"}
    answer = put(settled, groups)
    shown = [
        {"crop": "emmer", "group": "hulled wheat", "parcels": 5},
        {"crop": "spelt", "group": "hulled wheat", "parcels": 6},
    ]
    assert (answer.status_code, answer.json()) == (200, {"crops": shown})
    judged(settled, [])
    assert set(unjudged(settled)) == {None}
    # Their users' own words are what is told.
    (alert,) = settled.get("/v1/alerts")["alerts"]
    assert (alert["parcel"], alert["crop"]) == ("E3", "emmer")
    assert set(settled.series("E3")["crop"]) == {"emmer"}
    # Taken apart again, they are too few again.
    assert put(settled, {}).json()["crops"][0]["group"] is None
    judged(settled, [])
    assert None not in unjudged(settled)
    assert settled.get("/v1/alerts")["alerts"][0]["state"] == "retracted"


def test_groups_concern_all_and_what_others_grow_is_their_business(settled: Service) -> None:
    put(settled, {"spelt": "hulled wheat", "teff": "millets"})
    limited = settled.key("read", "manage", holdings=["north"])
    assert settled.get("/v1/crops", key=limited)["crops"] == [
        {"crop": "spelt", "group": "hulled wheat", "parcels": 6}
    ]
    # A group may be named before the crop is.
    assert {"crop": "teff", "group": "millets", "parcels": 0} in settled.get("/v1/crops")["crops"]
    problem(put(settled, {}, key=limited), 403, "key-limited")
    problem(put(settled, {}, key=settled.key("read", "triage")), 403, "scope-missing")
    for groups in ({"spelt": ""}, {"": "x"}, {"spelt": 3}, ["spelt"], {"spelt": "x\ny"}):
        document = problem(put(settled, groups), 422, "invalid-input")
        assert document["errors"][0]["pointer"].startswith("/groups")
    assert settled.get("/v1/crops", key=limited)["crops"][0]["group"] == "hulled wheat"
