"""What people write down explains what is seen, and keeps it from raising an alert."""

from datetime import timedelta
from typing import Any

import httpx
import pytest

from service.clock import now
from tests.judged_land import Land, alerts_of, judge_all, of_parcel, problem
from tests.quiet_seasons import FLOODED, at_pass, running, send
from tests.serving import Service

CUT = at_pass(9).date()


def note(service: Service, parcel: str, kind: str, on: Any, **more: Any) -> httpx.Response:
    request = {name: more.pop(name) for name in ("key", "headers") if name in more}
    sent = {"kind": kind, "on": str(on), **more}
    return service.call("POST", f"/v1/parcels/{parcel}/diary", json=sent, **request)


def diary(service: Service, parcel: str, **request: Any) -> dict[str, Any]:
    told: dict[str, Any] = service.get(f"/v1/parcels/{parcel}/diary", **request)
    return told


def test_an_entry_that_explains_takes_an_alert_back_and_striking_it_out_brings_it_again(
    judged: Service,
) -> None:
    (before,) = of_parcel(judged, "maize-4")
    answer = note(judged, "maize-4", "harvest", CUT, note="Cut for silage.")
    assert answer.status_code == 201
    entry = answer.json()
    assert {**entry, "id": "", "recorded_at": ""} == {
        "id": "",
        "kind": "harvest",
        "on": str(CUT),
        "until": str(CUT),
        "note": "Cut for silage.",
        "who": "test",
        "recorded_at": "",
    }
    judge_all(judged)
    (taken_back,) = of_parcel(judged, "maize-4")
    assert (taken_back["id"], taken_back["state"]) == (before["id"], "retracted")
    told = diary(judged, "maize-4")
    assert told["diary"] == [entry]
    (explained,) = told["explained"]
    assert explained["departed_at"] == before["opened_at"]
    assert (explained["rule"], explained["cause"]) == ("default", "removal")
    assert f"harvest {CUT}" in explained["because"]
    # Nobody else's alerts changed.
    assert len(alerts_of(judged, state="open,closed")) == 4

    gone = judged.call("DELETE", f"/v1/parcels/maize-4/diary/{entry['id']}")
    assert (gone.status_code, gone.json()) == (200, entry)
    judge_all(judged)
    (again,) = of_parcel(judged, "maize-4")
    assert (again["id"], again["state"]) == (before["id"], "open")
    assert diary(judged, "maize-4") == {"diary": [], "explained": []}


def test_an_entry_written_beforehand_keeps_the_alert_from_opening(land: Land) -> None:
    with land.at("remembering") as service:
        day = str(CUT + timedelta(days=1))
        assert note(service, "maize-4", "harvest", CUT, until=day).status_code == 201
        send(service, running())
        assert of_parcel(service, "maize-4") == []
        assert {alert["parcel"] for alert in alerts_of(service)} == {
            "barley-7",
            FLOODED,
            "maize-8",
        }


def test_an_entry_that_does_not_explain_stands_beside_the_alert(judged: Service) -> None:
    day = at_pass(10).date()
    note(judged, "maize-8", "mowing", day - timedelta(days=80))
    note(judged, "maize-8", "irrigation", day)
    judge_all(judged)
    (alert,) = of_parcel(judged, "maize-8")
    assert alert["state"] == "open"
    assert alert["diary"] == [f"irrigation {day}"]
    assert diary(judged, "maize-8")["explained"] == []


def test_entries_are_listed_in_order_of_time_page_by_page(judged: Service) -> None:
    for days in (3, 1, 2, 2):
        note(judged, "beet-1", "other", CUT + timedelta(days=days))
    days, address = [], "/v1/parcels/beet-1/diary?limit=1"
    while address:
        answer = judged.call("GET", address)
        days += [entry["on"] for entry in answer.json()["diary"]]
        address = answer.links.get("next", {}).get("url", "")
    assert days == [str(CUT + timedelta(days=n)) for n in (1, 2, 2, 3)]
    answer = judged.call("GET", "/v1/parcels/beet-1/diary", params={"cursor": "WyJ4IiwgMV0"})
    assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == "cursor"


@pytest.mark.parametrize(
    ("sent", "pointer"),
    [
        ({"kind": "party"}, "/kind"),
        ({"on": "yesterday"}, "/on"),
        ({"on": "1971-12-31"}, "/on"),
        ({"on": str(now().date() + timedelta(days=370))}, "/on"),
        ({"until": str(CUT - timedelta(days=1))}, "/until"),
        ({"until": str(CUT + timedelta(days=367))}, "/until"),
        ({"note": ""}, "/note"),
        ({"note": "x" * 2001}, "/note"),
        ({"weather": "dry"}, "/weather"),
    ],
)
def test_an_entry_that_makes_no_sense_is_refused(
    land: Land, sent: dict[str, Any], pointer: str
) -> None:
    with land.at("settled") as service:
        whole = {"kind": "harvest", "on": CUT, **sent}
        answer = note(service, "beet-1", whole.pop("kind"), whole.pop("on"), **whole)
        assert problem(answer, 422, "invalid-input")["errors"][0]["pointer"] == pointer
        assert diary(service, "beet-1")["diary"] == []


def test_the_diary_is_for_triage_and_of_ones_own_holdings(land: Land) -> None:
    with land.at("settled") as service:
        limited = service.key("read", "triage", holdings=["north"])
        once = {"Idempotency-Key": "a-cut"}
        answer = note(service, "barley-1", "harvest", CUT, key=limited, headers=once)
        again = note(service, "barley-1", "harvest", CUT, key=limited, headers=once)
        assert (answer.status_code, again.json()) == (201, answer.json())
        assert len(diary(service, "barley-1", key=limited)["diary"]) == 1
        problem(note(service, "beet-1", "harvest", CUT, key=limited), 404, "parcel-not-found")
        address = f"/v1/parcels/barley-1/diary/{answer.json()['id']}"
        for key, status in [(service.key("read", "manage"), 403), (limited, 200), (limited, 404)]:
            assert service.call("DELETE", address, key=key).status_code == status
        # An id is one of its own parcel's diary.
        other = note(service, "barley-2", "harvest", CUT).json()["id"]
        wrong = service.call("DELETE", f"/v1/parcels/barley-1/diary/{other}")
        problem(wrong, 404, "entry-not-found")
        problem(
            note(service, "barley-1", "harvest", CUT, key=service.key("read")), 403, "scope-missing"
        )
