"""When the crop years of a holding begin, and what moves when that changes."""

from typing import Any

import pytest

from tests.departing import FALL, depart, send, settle
from tests.serving import Service, square


def put(service: Service, holding: str, start: str | None, **request: Any) -> Any:
    return service.call("PUT", f"/v1/holdings/{holding}", json={"season_start": start}, **request)


def judged(service: Service) -> None:
    """Wait until nothing is left to judge."""
    send(service, [], assess=True, wait=30)


def first_day(service: Service, parcel: str) -> str:
    """Return the day on which the newest judged season of a parcel begins."""
    baseline = service.get(f"/v1/parcels/{parcel}/baseline")
    day: str = baseline["days"][0]
    return day


def alerts_of(service: Service) -> dict[str, tuple[str, str]]:
    return {a["id"]: (a["parcel"], a["state"]) for a in service.get("/v1/alerts")["alerts"]}


def test_a_holding_has_the_start_of_its_hemisphere_until_it_is_given_another(
    service: Service,
) -> None:
    parcels = [square("a", col=0, row=0, holding="x"), square("b", col=20, row=0, holding="x")]
    service.put_parcels(*parcels)
    shown = {"ref": "x", "season_start": None, "parcels": 2}
    assert service.get("/v1/holdings") == {"holdings": [shown]}
    answer = put(service, "x", "08-15")
    assert (answer.status_code, answer.json()) == (200, {**shown, "season_start": "08-15"})
    assert service.get("/v1/holdings/x")["season_start"] == "08-15"
    # It may be said before any parcel comes.
    assert put(service, "y", "01-01").json()["parcels"] == 0
    # A season by its year follows the holding; one that is there keeps its days.
    season = {"parcel": "a", "crop": "oats", "year": 2024}
    assert service.call("POST", "/v1/seasons", json=season).status_code == 200
    put(service, "x", None)
    (kept,) = service.get("/v1/parcels/a/seasons")["seasons"]
    assert (kept["from_on"], kept["until_on"]) == ("2023-08-15", "2024-08-14")
    service.call("POST", "/v1/seasons", json={**season, "parcel": "b"})
    (other,) = service.get("/v1/parcels/b/seasons")["seasons"]
    assert other["from_on"] == "2023-10-01"


@pytest.mark.parametrize("start", ["02-30", "13-01", "1-1", "02-29", "", 1001])
def test_a_start_that_not_every_year_has_is_refused(service: Service, start: Any) -> None:
    answer = put(service, "x", start)
    assert answer.status_code == 422
    assert answer.json()["errors"][0]["pointer"] == "/season_start"
    assert service.get("/v1/holdings") == {"holdings": []}


def test_a_limited_key_sets_the_start_of_its_own_holdings_alone(service: Service) -> None:
    put(service, "x", None)
    put(service, "y", None)
    limited = service.key("read", "manage", holdings=["x"])
    assert [h["ref"] for h in service.get("/v1/holdings", key=limited)["holdings"]] == ["x"]
    assert put(service, "x", "09-01", key=limited).status_code == 200
    refusals = [
        put(service, "y", "09-01", key=limited),
        put(service, "nobody", "09-01", key=limited),
        service.call("GET", "/v1/holdings/y", key=limited),
        service.call("GET", "/v1/holdings/nobody"),
    ]
    for answer in refusals:
        assert answer.status_code == 404
        assert answer.json()["type"] == "/problems/holding-not-found"
    assert len({answer.json()["detail"] for answer in refusals}) == 1
    assert put(service, "x", "09-01", key=service.key("read", "triage")).status_code == 403
    assert service.get("/v1/holdings/y")["season_start"] is None


def test_another_start_judges_anew_and_alerts_stay_what_they_are(service: Service) -> None:
    settle(service)
    depart(service, {"P1": FALL, "P8": FALL})
    before = alerts_of(service)
    assert sorted(before.values()) == [("P1", "open"), ("P8", "open")]
    assert first_day(service, "P1") == "2023-10-01"
    assert put(service, "north", "05-01").status_code == 200
    judged(service)
    assert first_day(service, "P1") == "2024-05-01"
    assert first_day(service, "P8") == "2023-10-01"
    assert alerts_of(service) == before
    series = service.series("P2", **{"with": "departure", "from": "2024-05-01"})
    assert None not in series["departure"]
    # The last one leaves an axis with nobody on it: there is nothing left to wait for.
    assert put(service, "south", "05-01").status_code == 200
    judged(service)
    assert (first_day(service, "P8"), alerts_of(service)) == ("2024-05-01", before)
    # A crop year that begins between two looks cuts the season in two.
    assert put(service, "north", "06-11").status_code == 200
    judged(service)
    assert first_day(service, "P1") == "2024-06-11"
    put(service, "north", None)
    put(service, "south", None)
    judged(service)
    assert (first_day(service, "P1"), alerts_of(service)) == ("2023-10-01", before)


def test_a_parcel_that_changes_hands_changes_its_crop_year(service: Service) -> None:
    settle(service)
    put(service, "south", "05-01")
    judged(service)
    assert first_day(service, "P1") == "2023-10-01"
    service.put_parcels(square("P1", col=0, row=0, holding="south"))
    judged(service)
    assert first_day(service, "P1") == "2024-05-01"
    assert service.get("/v1/holdings/south")["parcels"] == 5
