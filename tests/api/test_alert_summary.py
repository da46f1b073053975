"""How often alerts were right, by rule, cause, crop and season."""

from typing import Any

from tests.judged_land import act, close, of_parcel
from tests.quiet_seasons import FLOODED, RUNNING
from tests.serving import Service


def summary(service: Service, **request: Any) -> dict[str, Any]:
    told: dict[str, Any] = service.get("/v1/alerts/summary", **request)
    return told


def test_alerts_are_counted_and_precision_is_of_those_with_a_verdict(judged: Service) -> None:
    before = summary(judged)
    nothing_said = {"confirmed": 0, "expected": 0, "false_alarm": 0, "bad_data": 0}
    assert before["total"] == {
        "alerts": 5,
        "open": 3,
        "acknowledged": 0,
        "closed": 2,
        "verdicts": nothing_said,
        "precision": None,
    }
    assert {(c["cause"], c["alerts"]) for c in before["by_cause"]} == {
        ("burn", 1),
        ("flood", 2),
        ("moisture_stress", 1),
        ("removal", 1),
    }
    first = of_parcel(judged, FLOODED)[1]["id"]
    assert act(judged, first, "acknowledge").status_code == 200
    close(judged, of_parcel(judged, "maize-4")[0]["id"], "expected")
    close(judged, of_parcel(judged, "maize-8")[0]["id"], "false_alarm")
    close(judged, first, "confirmed")
    after = summary(judged)
    said = {"confirmed": 1, "expected": 1, "false_alarm": 1, "bad_data": 0}
    assert after["total"]["verdicts"] == said
    assert after["total"]["precision"] == 2 / 3
    assert (after["total"]["alerts"], after["total"]["open"]) == (5, 0)
    assert [(c["crop"], c["alerts"], c["precision"]) for c in after["by_crop"]] == [
        ("barley", 1, None),
        ("beet", 2, 1.0),
        ("maize", 2, 0.5),
    ]
    assert [(r["rule"], r["precision"]) for r in after["by_rule"]] == [("default", 2 / 3)]
    (season,) = after["by_season"]
    assert (season["from_on"], season["until_on"]) == (f"{RUNNING - 1}-10-01", f"{RUNNING}-09-30")
    assert season["alerts"] == 5


def test_a_summary_is_of_the_holdings_and_days_asked_for(judged: Service) -> None:
    limited = judged.key("read", holdings=["north"])
    assert summary(judged, key=limited)["total"]["alerts"] == 1
    assert summary(judged, params={"holding": "north"})["by_crop"][0]["crop"] == "barley"
    assert summary(judged, key=limited, params={"holding": "south"})["total"]["alerts"] == 0
    late = summary(judged, params={"from": f"{RUNNING}-07-10"})["total"]["alerts"]
    early = summary(judged, params={"to": f"{RUNNING}-07-10"})["total"]["alerts"]
    assert (early, late + early) == (2, 5)
    answer = judged.call(
        "GET", "/v1/alerts/summary", params={"from": "2024-07-01", "to": "2024-07-01"}
    )
    assert answer.json()["errors"][0]["parameter"] == "to"
    assert judged.call("GET", "/v1/alerts/summary", params={"by": "crop"}).status_code == 422
    assert judged.call("GET", "/v1/alerts/summary", key=judged.key("triage")).status_code == 403


def test_what_was_retracted_is_not_counted(judged: Service) -> None:
    assert judged.call("DELETE", f"/v1/scenes/{_scene_of(judged)}").status_code == 200
    waited = {"Prefer": "wait=60", "Content-Type": "text/csv"}
    nothing = b"parcel,index,observed_at,mean\n"
    judged.call("POST", "/v1/observations", content=nothing, headers=waited)
    alerts = judged.get("/v1/alerts")["alerts"]
    gone = [alert for alert in alerts if alert["state"] == "retracted"]
    assert gone
    assert summary(judged)["total"]["alerts"] == len(alerts) - len(gone)


def _scene_of(service: Service) -> str:
    """Return the scene that opened the alert of the burned parcel."""
    (alert,) = of_parcel(service, "barley-7")
    scene: str = alert["scenes"][0]
    return scene
